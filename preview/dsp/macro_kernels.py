"""The sample loop for op-amps as they are, and for diodes, compiled.

Between its limits such a circuit is linear: each op-amp follows its input (its rate of change is a linear function of
the state), slews at a constant rate, or stays at a limit, be it a rail, a swing that hangs on the load, or its largest
current. In each of these regimes the state over any time is a matrix exponential, exact however stiff the op-amp is.
As long as no regime changes many steps are taken at a time; the step in which one does is walked, see
``walk_kernels``.

Shapes: as in ``regime_kernels``. Time is in steps, so every rate is a change per step.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled
from preview.dsp.kernels import recur, signal_part
from preview.dsp.recur_kernels import recur_wide
from preview.dsp.regime_kernels import (
    ABOVE,
    AT_HIGH,
    AT_LOW,
    AT_WALL,
    BELOW,
    FOLLOWS,
    IN_RANGE,
    SLEWS_DOWN,
    SLEWS_UP,
)
from preview.dsp.visit_kernels import (
    CLIPPED,
    CURRENT_LIMIT,
    OUT_OF_RANGE,
    OUTSIDE,
    RAIL,
    SLEW,
    SLEWS,
    STARVED,
    begin_row,
    end_row,
    put_row,
)
from preview.dsp.walk_kernels import (
    HAS_WHOLE,
    fill_slot,
    key_of,
    place_of,
    rate_bounds,
    walk,
)


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
