"""A step in which something changes, walked in halves of halves down to 1/32 of it, compiled.

Each op-amp is in one of the regimes of ``regime_kernels``; in each part of the step the state is a matrix exponential.
Where a regime ends before its part does, half the part is taken. Diodes are solved in every part, see
``port_kernels``. The matrices of a regime are kept under a key in a book.

Shapes: as in ``regime_kernels``. Time is in steps, so every rate is a change per step.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled
from preview.dsp.laws import LEAST_GAIN
from preview.dsp.port_kernels import gain_of, keep_ports, port_flows, solve_ports
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
    EVENTS,
    OUTSIDE,
    OUTSIDE_EVENTS,
    SLEW,
    STARVED,
    UNSOLVED,
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
