"""The sample loops for op-amps as they are, and for diodes, compiled.

Between its limits such a circuit is linear: each op-amp follows its input (its rate of change is a linear function of
the state), slews at a constant rate, or stays at a limit, be it a rail, a swing that hangs on the load, or its largest
current. In each of these regimes the state over any time is a matrix exponential, exact however stiff the op-amp is. A
step in which the regime changes is walked in halves of halves down to 1/32 of it. Diodes are solved in every part that
is walked, see ``port_kernels``.

Shapes: as in ``regime_kernels``. Time is in steps, so every rate is a change per step.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled
from preview.dsp.kernels import recur, signal_part
from preview.dsp.laws import LEAST_GAIN
from preview.dsp.port_kernels import gain_of, keep_ports, port_flows, solve_ports
from preview.dsp.recur_kernels import recur_wide
from preview.dsp.regime_kernels import (
    ABOVE,
    AT_HIGH,
    AT_LOW,
    AT_WALL,
    BELOW,
    FOLLOWS,
    IN_RANGE,
    LEVELS,
    SLEWS_DOWN,
    SLEWS_UP,
    fill_parts,
)
from preview.dsp.visit_kernels import (
    CLIPPED,
    CURRENT_LIMIT,
    EVENTS,
    OUT_OF_RANGE,
    OUTSIDE,
    OUTSIDE_EVENTS,
    RAIL,
    SLEW,
    SLEWS,
    STARVED,
    UNSOLVED,
    begin_row,
    end_row,
    put_row,
)

# columns of the book of regimes: the regime, the station it is of, whether its parts and its whole step are there
KEY, STATION, HAS_PARTS, HAS_WHOLE, BOOK = 0, 1, 2, 3, 4


@compiled
def key_of(kinds: Any, ranges: Any, kind_count: int) -> int:
    """A number for what every op-amp does."""
    key = 1
    for o in range(kinds.shape[0]):
        key = key * (3 * kind_count) + 3 * kinds[o] + ranges[o]
    return key


@compiled
def place_of(book: Any, key: int, station: int, last: Any) -> int:
    """Where a regime stands in the book, entered in place of another if it was not there; ``last`` is (2,) int64."""
    if book[last[0], KEY] == key and book[last[0], STATION] == station:
        return int(last[0])
    count = book.shape[0]
    for i in range(count):
        if book[i, KEY] == key and book[i, STATION] == station:
            last[0] = i
            return i
    i = int(last[1])
    last[1] = (i + 1) % count
    last[0] = i
    book[i, KEY], book[i, STATION], book[i, HAS_PARTS], book[i, HAS_WHOLE] = key, station, 0, 0
    return i


@compiled
def regime_of(w: float, rate: float, low: float, high: float, up: float, down: float) -> int:
    """What an op-amp does: follow, slew up or down, or stand at a rail."""
    if w >= high and rate > 0.0:
        return AT_HIGH
    if w <= low and rate < 0.0:
        return AT_LOW
    if rate > up:
        return SLEWS_UP
    if rate < -down:
        return SLEWS_DOWN
    return FOLLOWS


@compiled
def keeps_regime(kind: int, w: float, rate: float, low: float, high: float, up: float, down: float) -> bool:
    """Whether an op-amp, walls and input range aside, is still in the regime it was in."""
    if kind == FOLLOWS:
        return -down * (1 + 1e-9) <= rate <= up * (1 + 1e-9) and low <= w <= high
    if kind == SLEWS_UP:
        return rate >= up * (1 - 1e-9) and w <= high
    if kind == SLEWS_DOWN:
        return rate <= -down * (1 - 1e-9) and w >= low
    if kind == AT_HIGH:
        return rate >= 0.0
    if kind == AT_LOW:
        return rate <= 0.0
    return low <= w <= high and (rate >= 0.0 if (kind - AT_WALL) % 2 == 0 else rate <= 0.0)


@compiled
def share_within(start: float, end: float, low: float, high: float) -> float:
    """Share of a part at which a quantity that runs straight leaves its bounds; 1 where it stays."""
    if end > high:
        return (high - start) / (end - start) if start < high else 0.0
    if end < low:
        return (low - start) / (end - start) if start > low else 0.0
    return 1.0


@compiled
def rate_bounds(kind: int, up: float, down: float) -> tuple[float, float]:
    """Between what the rate stays that an op-amp in a regime asks for."""
    if kind == FOLLOWS:
        return -down, up
    if kind == SLEWS_UP:
        return up, np.inf
    if kind == SLEWS_DOWN:
        return -np.inf, -down
    if kind == AT_HIGH or (kind >= AT_WALL and (kind - AT_WALL) % 2 == 0):
        return 0.0, np.inf
    return -np.inf, 0.0


@compiled
def in_same_range(where: int, v: float, low: float, high: float) -> bool:
    """Whether a + input is still within, above or below its range."""
    if where == IN_RANGE:
        return low <= v <= high
    return v >= high if where == ABOVE else v <= low


@compiled
def range_of(v: float, low: float, high: float) -> int:
    """Where a + input is."""
    return ABOVE if v > high else (BELOW if v < low else IN_RANGE)


@compiled
def along(
    parts: Any, slot: int, level: int, count: int, z: Any, u0: float, um: float, u1: float, size: int, y: Any
) -> None:
    """``y``: the first ``count`` rows of a part's matrix times its start and signal; port currents aside."""
    for r in range(count):
        y[r] = (parts[slot, level, size, r] * u0 + parts[slot, level, size + 1, r] * um) + (
            parts[slot, level, size + 2, r] * u1 + parts[slot, level, size + 3, r]
        )
    for j in range(size):
        f = z[j]
        for r in range(count):
            y[r] += parts[slot, level, j, r] * f


@compiled
def note(extreme: Any, v: float) -> None:
    """Take a value into account: highest, lowest, latest."""
    extreme[0], extreme[1], extreme[2] = max(extreme[0], v), min(extreme[1], v), v


@compiled
def fill_slot(
    all_equations: Any,
    sides: Any,
    leg: int,
    kinds: Any,
    ranges: Any,
    up: Any,
    down: Any,
    collocates: bool,
    whole_only: bool,
    parts: Any,
    room: Any,
) -> bool:
    """See ``regime_kernels.fill_parts``; ``parts`` are those of one regime."""
    base, turn, rate, out, walls, plus, port = all_equations
    return bool(
        fill_parts(
            base[leg], turn[leg], rate[leg], out[leg], walls[leg], plus[leg], port[leg], sides[leg], kinds, ranges, up,
            down, collocates, whole_only, parts, room[0], room[1], room[2], room[3], room[4],
        )
    )  # fmt: skip


@compiled
def walk(
    all_equations: Any,
    all_laws: Any,
    all_rails: Any,
    all_walls: Any,
    all_gains: Any,
    owner: Any,
    fixed_limits: Any,
    leg: int,
    gliding: bool,
    collocates: bool,
    step_s: float,
    z: Any,
    u: Any,
    kinds: Any,
    ranges: Any,
    st: Any,
    extremes: Any,
    junctions: Any,
    book: Any,
    last: Any,
    parts: Any,
    room: Any,
) -> float:
    """One step of the states ``z`` through every change of regime; returns the mean of the output.

    While a part is ``gliding``, the whole step in which every op-amp follows stands in the last place of ``parts``.
    """
    turn, rate, walls, plus, port = (
        all_equations[1],
        all_equations[2],
        all_equations[4],
        all_equations[5],
        all_equations[6],
    )
    up, down, range_low, range_high = fixed_limits
    right, y, port_room, currents = room[4], room[5], room[6], room[7]
    n, k = turn.shape[1], turn.shape[2]
    size = n + k
    G = owner.shape[0]
    ports = all_laws.shape[1]
    flows = port_room[2 * ports + 2, :ports]
    inputs = plus.shape[1]
    count = k + G + inputs
    rows = size + count + 1 + 2 * ports
    at_walls, at_plus, at_mean = size + k, size + k + G, size + count
    kind_count = AT_WALL + 2 * G
    whole = 1 << LEVELS
    u0, um, u1 = u[0], u[1], u[2]
    v1, v2 = 6.0 * um - 4.0 * u0 - 2.0 * u1, 6.0 * (u0 + u1) - 12.0 * um
    total = 0.0
    done = 0
    level, span = 0, whole  # span: what is tried, in the smallest parts
    due = -1  # parts before which the end of the regime is not expected
    regime = -1
    while done < whole:
        free = gliding
        for o in range(k):
            free = free and kinds[o] == FOLLOWS and ranges[o] == IN_RANGE
        keeps = False
        while True:
            slot = parts.shape[0] - 1
            if not (free and level == 0):
                if regime < 0:
                    regime = place_of(book, key_of(kinds, ranges, kind_count), leg, last)
                    if book[regime, HAS_PARTS] == 0:
                        if not fill_slot(
                            all_equations,
                            all_walls,
                            leg,
                            kinds,
                            ranges,
                            up,
                            down,
                            collocates,
                            False,
                            parts[regime],
                            room,
                        ):
                            for o in range(k):
                                st[o, UNSOLVED] += 1.0
                        book[regime, HAS_PARTS] = 1
                slot = regime
            length = span / whole
            t0 = done / whole
            t1 = t0 + length
            ua = u0 + t0 * (v1 + 0.5 * v2 * t0)
            ub = u0 + t1 * (v1 + 0.5 * v2 * t1)
            uc = u0 + 0.5 * v1 * (t0 + t1) + v2 * (t0 * t0 + t0 * t1 + t1 * t1) / 6.0
            along(parts, slot, level, rows, z, ua, uc, ub, size, y)
            if ports:
                for p in range(ports):  # along the line it came on
                    junctions[1, p] = junctions[0, p] + junctions[3, p] * length / 3.0
                    junctions[2, p] = junctions[0, p] + junctions[3, p] * length
                solved = solve_ports(
                    all_laws[leg],
                    y[at_mean + 1 :],
                    parts[slot, level],
                    at_mean + 1,
                    size + 4,
                    length * step_s,
                    junctions,
                    currents,
                    port_room,
                )
                if not solved:
                    for p in range(ports):
                        junctions[3, p] = 0.0
                    if span > 1:
                        level, span = level + 1, span // 2
                        continue
                    st[0, UNSOLVED] += span / whole
                    keep_ports(all_laws[leg], junctions, currents)
                for b in range(2 * ports):
                    f, column = currents[b], parts[slot, level, size + 4 + b]
                    for r in range(at_mean + 1):
                        y[r] += column[r] * f
            keeps = True
            for o in range(k):
                keeps = keeps and keeps_regime(
                    kinds[o],
                    y[n + o],
                    y[size + o],
                    all_rails[leg, 0, o],
                    all_rails[leg, 1, o],
                    up[o],
                    down[o],
                )
            for m in range(G):
                g, kind = y[at_walls + m], kinds[owner[m]]
                # at a rail it does what it can against a wall that it cannot keep
                keeps = keeps and (g <= all_walls[leg, 1, m] or kind == AT_WALL + 2 * m or kind == AT_LOW)
                keeps = keeps and (
                    g >= all_walls[leg, 0, m] or kind == AT_WALL + 2 * m + 1 or kind == AT_HIGH
                )
            for o in range(inputs):
                keeps = keeps and in_same_range(ranges[o], y[at_plus + o], range_low[o], range_high[o])
            if keeps or span == 1:
                break
            # to just before where straight lines say that the regime ends; wrong, it costs another try
            share = 0.99
            for o in range(k):
                kind = kinds[o]
                if kind != AT_HIGH and kind != AT_LOW:
                    share = min(
                        share, share_within(z[n + o], y[n + o], all_rails[leg, 0, o], all_rails[leg, 1, o])
                    )
                asked = at_instant(rate[leg, ranges[o], o], z, ua, v1 + v2 * t0, v2, currents, size, ports)
                lo, hi = rate_bounds(kind, up[o], down[o])
                share = min(share, share_within(asked, y[size + o], lo, hi))
            for m in range(G):
                share = min(
                    share,
                    share_within(
                        extremes[k + m, 2], y[at_walls + m], all_walls[leg, 0, m], all_walls[leg, 1, m]
                    ),
                )
            due = done + int(share * span)
            level, span = level + 1, span // 2
            while span > max(due - done, 1):
                level, span = level + 1, span // 2
        length = span / whole
        for o in range(k):
            kind = kinds[o]
            before = z[n + o]
            w = y[n + o]
            if kind < AT_WALL:
                w = min(max(w, before - down[o] * length), before + up[o] * length)
            w = min(max(w, all_rails[leg, 0, o]), all_rails[leg, 1, o])
            moved = w - y[n + o]
            hit = -1
            if ports and (moved != 0.0 or kind >= AT_WALL or not keeps):
                port_flows(
                    all_laws[leg], port[leg], turn[leg], n, o, size + 4, junctions[2], flows, port_room
                )
            if kind >= AT_WALL:  # exactly onto the wall it is at; then inside the others
                m = (kind - AT_WALL) // 2
                side = all_walls[leg, 1, m] if (kind - AT_WALL) % 2 == 0 else all_walls[leg, 0, m]
                gain = gain_of(all_gains[leg], walls[leg], m, size + 4, flows)
                moved = (side - y[at_walls + m]) / gain if abs(gain) > LEAST_GAIN else 0.0
                hit = kind
            for m in range(G):
                if owner[m] == o and kind != AT_WALL + 2 * m and kind != AT_WALL + 2 * m + 1:
                    gain = gain_of(all_gains[leg], walls[leg], m, size + 4, flows)
                    if abs(gain) <= LEAST_GAIN:
                        continue
                    g = y[at_walls + m] + gain * moved
                    if g > all_walls[leg, 1, m]:
                        moved += (all_walls[leg, 1, m] - g) / gain
                        hit = AT_WALL + 2 * m
                    elif g < all_walls[leg, 0, m]:
                        moved += (all_walls[leg, 0, m] - g) / gain
                        hit = AT_WALL + 2 * m + 1
            if y[n + o] + moved > all_rails[leg, 1, o]:  # a rail comes before a wall that lies beyond it
                moved, hit = all_rails[leg, 1, o] - y[n + o], AT_HIGH
            elif y[n + o] + moved < all_rails[leg, 0, o]:
                moved, hit = all_rails[leg, 0, o] - y[n + o], AT_LOW
            if moved != 0.0:  # what a clamp takes from the op-amp is taken from the states that hang on it
                for i in range(n):
                    y[i] -= turn[leg, i, o] * moved
                for m in range(G):
                    if owner[m] == o:
                        y[at_walls + m] += gain_of(all_gains[leg], walls[leg], m, size + 4, flows) * moved
                y[n + o] += moved
            w = y[n + o]
            note(extremes[o], w)
            if kind < AT_WALL:
                st[o, SLEW] = max(st[o, SLEW], abs(w - before) / length)
            if kind == AT_HIGH or kind == AT_LOW:
                st[o, CLIPPED] += length
            elif kind >= AT_WALL:
                if (kind - AT_WALL) // 2 < k:
                    st[o, STARVED] += length
                else:
                    st[o, CLIPPED] += length
            if ranges[o] != IN_RANGE:
                st[o, OUTSIDE] += length
            right[o] = hit
        for m in range(G):
            note(extremes[k + m], y[at_walls + m])
        total += y[at_mean] * length
        for i in range(size):
            z[i] = y[i]
        for p in range(ports):
            junctions[3, p] = (junctions[2, p] - junctions[1, p]) / (length * (2.0 / 3.0))
            junctions[0, p] = junctions[2, p]
        done += span
        while level > 0 and done % (2 * span) == 0 and (done >= due or done + 2 * span <= due):
            level, span = level - 1, 2 * span
        if done <= due:
            while span > max(due - done, 1):
                level, span = level + 1, span // 2
        if keeps:
            continue
        regime = -1
        t = done / whole
        signal, slope = u0 + t * (v1 + 0.5 * v2 * t), v1 + v2 * t
        for o in range(k):
            where = IN_RANGE
            if inputs:
                where = range_of(
                    at_instant(plus[leg, o], z, signal, slope, v2, currents, size, ports),
                    range_low[o],
                    range_high[o],
                )
            if where != IN_RANGE and ranges[o] == IN_RANGE:
                st[o, OUTSIDE_EVENTS] += 1.0
            ranges[o] = where
            kind, hit = kinds[o], int(right[o])
            asked = at_instant(rate[leg, where, o], z, signal, slope, v2, currents, size, ports)
            pushes = hit == kind and (
                kind < AT_WALL or (y[size + o] >= 0.0 if (kind - AT_WALL) % 2 == 0 else y[size + o] <= 0.0)
            )
            if hit >= 0 and (hit != kind or pushes):
                new = hit
            elif hit == kind and hit >= 0:
                new = FOLLOWS  # it leaves its wall; whether it slews is seen at once
            else:
                new = regime_of(z[n + o], asked, all_rails[leg, 0, o], all_rails[leg, 1, o], up[o], down[o])
            if new >= AT_HIGH and kind < AT_HIGH and not (new >= AT_WALL and (new - AT_WALL) // 2 < k):
                st[o, EVENTS] += 1.0
            kinds[o] = new
    return total


@compiled
def at_instant(
    row: Any, z: Any, signal: float, slope: float, bend: float, currents: Any, size: int, ports: int
) -> Any:
    """A row over an instant at the end of a part of a step."""
    t = row[size] * signal + row[size + 1] * slope + row[size + 2] * bend + row[size + 3]
    for j in range(size):
        t += row[j] * z[j]
    for p in range(ports):
        t += row[size + 4 + p] * currents[ports + p]
    return t


@compiled
def span_of(path: Any, count: int, span: Any) -> None:
    """Highest and lowest of the first ``count`` values, four lanes at a time."""
    a0 = a1 = a2 = a3 = -np.inf
    b0 = b1 = b2 = b3 = np.inf
    whole = count - count % 4
    for i in range(0, whole, 4):
        v0, v1, v2, v3 = path[i], path[i + 1], path[i + 2], path[i + 3]
        a0 = v0 if v0 > a0 else a0
        a1 = v1 if v1 > a1 else a1
        a2 = v2 if v2 > a2 else a2
        a3 = v3 if v3 > a3 else a3
        b0 = v0 if v0 < b0 else b0
        b1 = v1 if v1 < b1 else b1
        b2 = v2 if v2 < b2 else b2
        b3 = v3 if v3 < b3 else b3
    for i in range(whole, count):
        v0 = path[i]
        a0 = v0 if v0 > a0 else a0
        b0 = v0 if v0 < b0 else b0
    span[0], span[1] = max(max(a0, a1), max(a2, a3)), min(min(b0, b1), min(b2, b3))


@compiled
def lasts(path: Any, count: int, low: float, high: float, span: Any) -> int:
    """How many values, from the first, lie between two limits; ``span`` receives the highest and lowest of these."""
    span_of(path, count, span)
    if span[0] <= high and span[1] >= low:
        return count
    for i in range(count):
        if not low <= path[i] <= high:
            if i > 0:
                span_of(path, i, span)
            return i
    return count


@compiled
def row_steps(M: Any, row: Any, size: int, uc: Any, first: int, count: int, track: Any, result: Any) -> None:
    """One row of some steps: what the signal, the constant and the states at the start of each step put in."""
    m1 = M[row, size + 1] / 24.0
    # mean over the step of the cubic through four samples: (13 (u1 + u2) - u0 - u3) / 24
    s0, s1, s2, s3 = -m1, M[row, size] + 13.0 * m1, M[row, size + 2] + 13.0 * m1, M[row, size + 3]
    u0, u1, u2, u3 = uc[first:], uc[first + 1 :], uc[first + 2 :], uc[first + 3 :]
    done = size % 4
    if done == 1:
        a, ta = M[row, 0], track[0]
        for i in range(count):
            result[i] = ((s0 * (u0[i] + u3[i]) + s3) + (s1 * u1[i] + s2 * u2[i])) + a * ta[i]
    elif done == 2:
        a, b, ta, tb = M[row, 0], M[row, 1], track[0], track[1]
        for i in range(count):
            signal = (s0 * (u0[i] + u3[i]) + s3) + (s1 * u1[i] + s2 * u2[i])
            result[i] = signal + (a * ta[i] + b * tb[i])
    elif done == 3:
        a, b, c, ta, tb, tc = M[row, 0], M[row, 1], M[row, 2], track[0], track[1], track[2]
        for i in range(count):
            signal = (s0 * (u0[i] + u3[i]) + s3) + (s1 * u1[i] + s2 * u2[i])
            result[i] = (signal + a * ta[i]) + (b * tb[i] + c * tc[i])
    else:
        for i in range(count):
            result[i] = (s0 * (u0[i] + u3[i]) + s3) + (s1 * u1[i] + s2 * u2[i])
    while done < size:
        a, b, c, d = M[row, done], M[row, done + 1], M[row, done + 2], M[row, done + 3]
        ta, tb, tc, td = track[done], track[done + 1], track[done + 2], track[done + 3]
        for i in range(count):
            result[i] += (a * ta[i] + b * tb[i]) + (c * tc[i] + d * td[i])
        done += 4


@compiled
def regime_steps(
    M: Any,
    uc: Any,
    first: int,
    count: int,
    noise: Any,
    v: Any,
    kinds: Any,
    ranges: Any,
    owner: Any,
    limits: Any,
    wall_low: Any,
    wall_high: Any,
    inputs: int,
    st: Any,
    extremes: Any,
    track: Any,
    drive: Any,
    spans: Any,
    counts: Any,
    square: Any,
    out: Any,
) -> int:
    """Take up to ``count`` steps in which every op-amp stays in its regime; how many were taken.

    ``M`` is the matrix of a whole step, rows first; ``noise`` (N + 1, steps) or empty; ``inputs`` the + inputs watched.
    """
    low, high, up, down, range_low, range_high = limits
    size = v.shape[0]
    k = kinds.shape[0]
    n = size - k
    G = owner.shape[0]
    at_walls, at_plus = size + k, size + k + G
    at_mean = at_plus + inputs
    for a in range(size):
        signal_part(M, size, uc, first, count, M[a, size + 3], a, drive[a])
    if noise.shape[0]:
        for a in range(size):
            if a < n or kinds[a - n] == FOLLOWS:
                d, s = drive[a], noise[a, first:]
                for i in range(count):
                    d[i] += s[i]
    for b in range(size):
        track[b, 0] = v[b]
    if size > 3:
        recur_wide(M, drive, track, size, count, square)
    else:
        recur(M, drive, track, size, count)
    taken = count
    # spans: inner voltages, walls, then the rates; of how many steps each is, stands in counts
    for o in range(k):
        kind = kinds[o]
        if kind == AT_HIGH or kind == AT_LOW:
            spans[o, 0] = spans[o, 1] = v[n + o]
            counts[o] = 0
        else:
            taken = lasts(track[n + o, 1:], taken, low[o], high[o], spans[o])
            counts[o] = taken
            if taken == 0:
                return 0
    for a in range(size, at_mean):
        r = drive[a]
        row_steps(M, a, size, uc, first, taken, track, r)
        lo, hi = -np.inf, np.inf
        if a < at_walls:
            o = a - size
            lo, hi = rate_bounds(kinds[o], up[o], down[o])
            at = k + G + o
            span = spans[at]
        elif a < at_plus:
            m = a - at_walls
            kind = kinds[owner[m]]
            if kind != AT_WALL + 2 * m + 1:
                lo = wall_low[m]
            if kind != AT_WALL + 2 * m:
                hi = wall_high[m]
            at = k + m
            span = spans[at]
        else:
            o = a - at_plus
            if ranges[o] != BELOW:
                lo = range_high[o] if ranges[o] == ABOVE else range_low[o]
            if ranges[o] != ABOVE:
                hi = range_low[o] if ranges[o] == BELOW else range_high[o]
            at = k + G + k
            span = spans[at]
        taken = lasts(r, taken, lo, hi, span)
        counts[at] = taken
        if taken == 0:
            return 0
    mean = drive[at_mean]
    row_steps(M, at_mean, size, uc, first, taken, track, mean)
    for b in range(size):
        v[b] = track[b, taken]
    for i in range(taken):
        out[first + i] = mean[i]
    if noise.shape[0]:
        for i in range(taken):
            out[first + i] += noise[size, first + i]
    for o in range(k):
        kind = kinds[o]
        if counts[o] > taken:
            span_of(track[n + o, 1:], taken, spans[o])
        note_span(extremes[o], spans[o], v[n + o])
        if kind == FOLLOWS:
            if counts[k + G + o] > taken:
                span_of(drive[size + o], taken, spans[k + G + o])
            st[o, SLEW] = max(st[o, SLEW], max(spans[k + G + o, 0], -spans[k + G + o, 1]))
        elif kind == SLEWS_UP:
            st[o, SLEW] = max(st[o, SLEW], up[o])
        elif kind == SLEWS_DOWN:
            st[o, SLEW] = max(st[o, SLEW], down[o])
        elif kind >= AT_WALL and (kind - AT_WALL) // 2 < k:
            st[o, STARVED] += taken
        else:
            st[o, CLIPPED] += taken
        if ranges[o] != IN_RANGE:
            st[o, OUTSIDE] += taken
    for m in range(G):
        if counts[k + m] > taken:
            span_of(drive[at_walls + m], taken, spans[k + m])
        note_span(extremes[k + m], spans[k + m], drive[at_walls + m, taken - 1])
    return taken


@compiled
def note_span(extreme: Any, span: Any, latest: float) -> None:
    """Take a highest and a lowest value into account, and the latest."""
    extreme[0], extreme[1], extreme[2] = max(extreme[0], span[0]), min(extreme[1], span[1]), latest


@compiled
def between(whole: Any, leg: int, after: int, part: float, parts: Any, wholes: Any) -> None:
    """The matrix of a whole step between two way stations of a glide, into the last place for matrices."""
    slot = parts.shape[0] - 1
    for a in range(whole.shape[1]):
        for b in range(whole.shape[2]):
            m = whole[leg, a, b] + part * (whole[after, a, b] - whole[leg, a, b])
            parts[slot, 0, a, b] = m
            wholes[slot, b, a] = m


@compiled
def is_at(kind: int, where: int, k: int) -> int:
    """What an op-amp in a regime is at, see ``visit_kernels``."""
    away = OUT_OF_RANGE if where != IN_RANGE else 0
    if kind == SLEWS_UP or kind == SLEWS_DOWN:
        return away + SLEWS
    if kind >= AT_WALL and (kind - AT_WALL) // 2 < k:
        return away + CURRENT_LIMIT
    return away + RAIL if kind >= AT_HIGH else away


@compiled
def run_macro(
    whole: Any,
    all_equations: Any,
    all_laws: Any,
    all_rails: Any,
    all_walls: Any,
    all_gains: Any,
    owner: Any,
    fixed_limits: Any,
    collocates: bool,
    step_s: float,
    u: Any,
    mean_out: Any,
    steps: int,
    state: Any,
    regimes: Any,
    places: Any,
    stats: Any,
    all_extremes: Any,
    all_junctions: Any,
    noise: Any,
    at: int,
    leg_steps: int,
    book: Any,
    last: Any,
    store: Any,
    room: Any,
    tracks: Any,
    log: Any,
    written: Any,
) -> None:
    """Run the circuit over ``steps`` steps for every channel.

    Parameters
    ----------
    whole : (g, c, r)
        Matrix of a step in which every op-amp follows, columns first, at each way station of a glide; else g = 1.
    all_equations : tuple
        ``base, turn, rate, out, walls, plus, port`` at each station, see ``macromodel.MacroEquations``.
    all_laws, all_rails, all_walls, all_gains : (g, np, LAW), (g, 2, k), (g, 2, G), (g, G)
        Laws of the ports; lowest and highest voltage of each op-amp; limits of each wall; how far its row moves
        with its op-amp while no port conducts.
    owner : (G,) int64
        Op-amp that each wall limits; walls 0 to k - 1 are the output currents, k to 2k - 1 the output pins.
    fixed_limits : tuple of (k,)
        ``up, down``: fastest changes [V/step]; ``range_low, range_high``: of the + inputs [V].
    collocates : bool
        See ``regime_kernels.fill_parts``; only with ports.
    step_s : float
        A step [s].
    u, mean_out : (channels, steps + 3), (channels, steps)
        As in ``kernels.run_steps``.
    state, regimes, places : (channels, N), (channels, k) int64, (channels, k) int64
        States; what each op-amp does; where its + input is.
    stats, all_extremes, all_junctions : (channels, k, STATS), (channels, k + G, 3), (channels, 4, np)
        Running statistics; highest, lowest and latest of every op-amp and wall; junction voltages: at present,
        room, room, slope.
    noise : (channels, N + 1, steps)
        What noise adds to the states and to the output's mean in each step; (channels, 0, 0) for none.
    at, leg_steps : int
        Steps that the glide has taken, steps between its way stations; ``leg_steps`` is 0 without a glide.
    book, last, store
        Regimes met: (m, BOOK) int64, (2,) int64, and their matrices, with one place more: (m + 1, LEVELS + 1, c, r) and
        (m + 1, r, c).
    room, tracks
        Room.
    log, written
        As in ``kernels.run_steps``.
    """
    up, down, range_low, range_high = fixed_limits
    log_rows = log.shape[0] if leg_steps == 0 else 0
    channels, size = state.shape
    k = up.shape[0]
    n = size - k
    G = owner.shape[0]
    track, drive, spans, counts, square = tracks
    chunk = drive.shape[1]
    final = whole.shape[0] - 1
    kind_count = AT_WALL + 2 * G
    ports = all_laws.shape[1]
    inputs = all_equations[5].shape[1]
    parts, wholes = store
    now = parts.shape[0] - 1
    signal = room[8]
    for c in range(channels):
        v, uc, out, st, kinds, ranges = state[c], u[c], mean_out[c], stats[c], regimes[c], places[c]
        extremes, junctions, added = all_extremes[c], all_junctions[c], noise[c]
        done = 0
        span = chunk
        while done < steps:
            place = at + done
            leg = min(place // leg_steps, final) if leg_steps > 0 else final
            taken = 0
            count = 1
            gliding = leg_steps > 0
            for o in range(k):
                gliding = gliding and kinds[o] == FOLLOWS and ranges[o] == IN_RANGE
            if gliding:
                part = (place - leg * leg_steps) / leg_steps if leg < final else 0.0
                between(whole, leg, min(leg + 1, final), part, parts, wholes)
            if ports == 0 and (gliding or leg_steps == 0):
                slot = now
                if leg_steps == 0:
                    count = min(span, steps - done)
                    slot = place_of(book, key_of(kinds, ranges, kind_count), leg, last)
                    if (
                        book[slot, HAS_WHOLE] == 0
                    ):  # not the one among the parts: that differs by its rounding
                        fill_slot(
                            all_equations,
                            all_walls,
                            leg,
                            kinds,
                            ranges,
                            up,
                            down,
                            False,
                            True,
                            parts[now],
                            room,
                        )
                        for a in range(wholes.shape[1]):
                            for b in range(wholes.shape[2]):
                                wholes[slot, a, b] = parts[now, 0, b, a]
                        book[slot, HAS_WHOLE] = 1
                limits = (all_rails[leg, 0], all_rails[leg, 1], up, down, range_low, range_high)
                taken = regime_steps(
                    wholes[slot], uc, done, count, added, v, kinds, ranges, owner, limits, all_walls[leg, 0],
                    all_walls[leg, 1], inputs, st, extremes, track, drive, spans, counts, square, out,
                )  # fmt: skip
            done += taken
            if taken == count:
                span = min(2 * span, chunk)
                continue
            span = min(64, chunk)
            u0, u1 = uc[done + 1], uc[done + 2]
            signal[0], signal[2] = u0, u1
            signal[1] = (13.0 * (u0 + u1) - (uc[done] + uc[done + 3])) * (1.0 / 24.0)
            logs = written[0] + k <= log_rows
            if logs:
                for o in range(k):
                    was_at = is_at(kinds[o], ranges[o], k)
                    begin_row(log[written[0] + o], written[1] + done, c, o, was_at, st[o])
            mean = walk(
                all_equations, all_laws, all_rails, all_walls, all_gains, owner, fixed_limits, leg, gliding,
                collocates, step_s, v, signal, kinds, ranges, st, extremes, junctions, book, last, parts, room,
            )  # fmt: skip
            if logs:
                kept = written[0]
                for o in range(k):
                    line = log[written[0] + o]
                    now_at = is_at(kinds[o], ranges[o], k)
                    slow, fast = min(up[o], down[o]), max(up[o], down[o])
                    if end_row(line, now_at, v[n + o], slow, fast, st[o]):
                        put_row(log[kept], line)
                        kept += 1
                written[0] = kept
            if added.shape[0]:
                for b in range(size):
                    if b < n or kinds[b - n] == FOLLOWS:
                        v[b] += added[b, done]
                mean += added[size, done]
            out[done] = mean
            done += 1
    written[1] += steps
