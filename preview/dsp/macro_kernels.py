"""The sample loops for op-amps with gain-bandwidth, slew rate and output resistance, compiled.

Between its limits such a circuit is linear: each op-amp either follows its input (its rate of change is a linear
function of the state), slews at a constant rate, or stands at a rail. In each of these regimes the state over any
time is a matrix exponential, exact however stiff the op-amp is. A step in which the regime changes is walked in
halves of halves down to 1/128 of it.

Shapes: c channels, n states, k op-amps, d = n + 2k + 5 rows of the augmented state
``[states, op-amps, signal and its two derivatives, slew rates in force, 1, mean of the output]``.
Time is in steps, so every rate is a change per step.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.dsp.kernels import (
    CLIPPED,
    CURRENT,
    EVENTS,
    HIGH,
    LOW,
    SLEW,
    UNSOLVED,
    add_states,
    compiled,
    note_path,
    recur,
    signal_part,
    take_steps,
)

LEVELS = 7
"""Halvings of a step in which the regime changes."""

FOLLOWS, SLEWS_UP, SLEWS_DOWN, AT_HIGH, AT_LOW = 0, 1, 2, 3, 4


@compiled
def multiply(a: Any, b: Any, result: Any) -> None:
    """``result = a b`` for square matrices, in one fixed order."""
    size = a.shape[0]
    for i in range(size):
        for j in range(size):
            result[i, j] = 0.0
        for m in range(size):
            f = a[i, m]
            if f != 0.0:
                for j in range(size):
                    result[i, j] += f * b[m, j]


@compiled
def exponential(a: Any, scale: float, result: Any, power: Any, other: Any) -> None:
    """``result = exp(a scale)`` by Taylor's series of a scaled matrix, squared back."""
    size = a.shape[0]
    norm = 0.0
    for i in range(size):
        t = 0.0
        for j in range(size):
            t += abs(a[i, j])
        norm = max(norm, t)
    norm *= scale
    halvings = 0
    while norm > 0.5:
        norm *= 0.5
        halvings += 1
    f = scale / 2.0**halvings
    for i in range(size):
        for j in range(size):
            one = 1.0 if i == j else 0.0
            result[i, j] = one + a[i, j] * f
            power[i, j] = a[i, j] * f
    for order in range(2, 15):
        multiply(power, a, other)
        for i in range(size):
            for j in range(size):
                power[i, j] = other[i, j] * f / order
                result[i, j] += power[i, j]
    for _ in range(halvings):
        multiply(result, result, other)
        result[:, :] = other


@compiled
def generator(base: Any, turn: Any, rate: Any, out: Any, mask: int, n: int, k: int, result: Any) -> None:
    """Derivative of the augmented state by itself, per step, with the op-amps of ``mask`` following."""
    d = result.shape[0]
    at_u, at_s, at_1 = n + k, n + k + 3, n + 2 * k + 3
    result[:, :] = 0.0
    for i in range(n):
        for j in range(d):
            result[i, j] = base[i, j]
    for o in range(k):
        if mask >> o & 1:
            for j in range(d):
                result[n + o, j] = rate[o, j]
        else:
            result[n + o, at_s + o] = 1.0
        for i in range(n):
            if turn[i, o] != 0.0:
                for j in range(d):
                    result[i, j] -= turn[i, o] * result[n + o, j]
    result[at_u, at_u + 1] = 1.0
    result[at_u + 1, at_u + 2] = 1.0
    for j in range(d):
        result[at_1 + 1, j] = out[j]


@compiled
def step_matrix(
    base: Any,
    turn: Any,
    rate: Any,
    out: Any,
    current: Any,
    mask: int,
    work: Any,
    M: Any,
    constant: Any,
    by_slew: Any,
) -> None:
    """Matrices of a whole step in which the op-amps of ``mask`` follow and the others move at a constant rate.

    Rows: states, op-amps, rate that each op-amp would follow with at the end, mean of the output, output currents at
    the end. Columns of ``M``: states and op-amps at the start, signal at the start, its mean, at the end;
    ``by_slew``: constant rates; ``constant``: what remains.
    """
    n, k = turn.shape
    d = base.shape[1]
    at_u, at_s, at_1 = n + k, n + k + 3, n + 2 * k + 3
    phi, line = work[0], work[1]
    generator(base, turn, rate, out, mask, n, k, work[3])
    exponential(work[3], 1.0, phi, work[1], work[2])
    for r in range(n + 3 * k + 1):
        for j in range(d):
            t = 0.0
            if r < n + k:
                t = phi[r, j]
            elif r < n + 2 * k:
                for m in range(d):
                    t += rate[r - n - k, m] * phi[m, j]
            elif r == n + 2 * k:
                t = phi[at_1 + 1, j]
            else:
                for m in range(d):
                    t += current[r - n - 2 * k - 1, m] * phi[m, j]
            line[0, j] = t
        for j in range(n + k):
            M[r, j] = line[0, j]
        u, v1, v2 = line[0, at_u], line[0, at_u + 1], line[0, at_u + 2]
        M[r, n + k] = u - 4.0 * v1 + 6.0 * v2
        M[r, n + k + 1] = 6.0 * v1 - 12.0 * v2
        M[r, n + k + 2] = -2.0 * v1 + 6.0 * v2
        for o in range(k):
            by_slew[r, o] = line[0, at_s + o]
        constant[r] = line[0, at_1]


@compiled
def fill_levels(
    base: Any, turn: Any, rate: Any, out: Any, mask: int, n: int, k: int, levels: Any, work: Any
) -> None:
    """Matrices of a whole step, its half, quarter ... with the op-amps of ``mask`` following."""
    generator(base, turn, rate, out, mask, n, k, work[3])
    exponential(work[3], 1.0 / 2**LEVELS, levels[LEVELS], work[1], work[2])
    for j in range(LEVELS, 0, -1):
        multiply(levels[j], levels[j], levels[j - 1])


@compiled
def regime(w: float, rate: float, low: float, high: float, up: float, down: float) -> int:
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
    """Whether an op-amp is still in the regime it was in."""
    if kind == FOLLOWS:
        return -down * (1 + 1e-9) <= rate <= up * (1 + 1e-9) and low <= w <= high
    if kind == SLEWS_UP:
        return rate >= up * (1 - 1e-9) and w <= high
    if kind == SLEWS_DOWN:
        return rate <= -down * (1 - 1e-9) and w >= low
    if kind == AT_HIGH:
        return rate >= 0.0
    return rate <= 0.0


@compiled
def walk(
    base: Any,
    turn: Any,
    rate: Any,
    out: Any,
    levels: Any,
    known: Any,
    z: Any,
    trial: Any,
    kinds: Any,
    low: Any,
    high: Any,
    up: Any,
    down: Any,
    st: Any,
    n: int,
    k: int,
    work: Any,
) -> None:
    """One step of the augmented state ``z`` through every change of regime."""
    d = z.shape[0]
    at_s, at_1 = n + k + 3, n + 2 * k + 3
    z[at_1] = 1.0
    z[at_1 + 1] = 0.0
    whole = 1 << LEVELS
    done = 0
    level = 0
    while done < whole:
        mask = 0
        for o in range(k):
            kind = kinds[o]
            z[at_s + o] = 0.0
            if kind == FOLLOWS:
                mask |= 1 << o
            elif kind == SLEWS_UP:
                z[at_s + o] = up[o]
            elif kind == SLEWS_DOWN:
                z[at_s + o] = -down[o]
        if known[mask, 1] == 0:
            fill_levels(base, turn, rate, out, mask, n, k, levels[mask], work)
            known[mask, 1] = 1
        while level > 0 and done % (1 << (LEVELS - level + 1)) == 0:
            level -= 1
        while True:
            P = levels[mask, level]
            for i in range(d):
                t = 0.0
                for j in range(d):
                    t += P[i, j] * z[j]
                trial[i] = t
            if level == LEVELS:
                break
            keeps = True
            for o in range(k):
                r = 0.0
                for j in range(d):
                    r += rate[o, j] * trial[j]
                keeps = keeps and keeps_regime(kinds[o], trial[n + o], r, low[o], high[o], up[o], down[o])
            if keeps:
                break
            level += 1
        part = 1.0 / (1 << level)
        for o in range(k):
            w0 = z[n + o]
            w1 = min(max(trial[n + o], w0 - down[o] * part), w0 + up[o] * part)
            w1 = min(max(w1, low[o]), high[o])
            for i in range(n):  # what a clamp takes from the op-amp is taken from the states that hang on it
                trial[i] += turn[i, o] * (trial[n + o] - w1)
            trial[n + o] = w1
            st[o, HIGH] = max(st[o, HIGH], w1)
            st[o, LOW] = min(st[o, LOW], w1)
            st[o, SLEW] = max(st[o, SLEW], abs(w1 - w0) / part)
            if kinds[o] == AT_HIGH or kinds[o] == AT_LOW:
                st[o, CLIPPED] += part
        for i in range(d):
            z[i] = trial[i]
        done += 1 << (LEVELS - level)
        for o in range(k):
            r = 0.0
            for j in range(d):
                r += rate[o, j] * z[j]
            kind = regime(z[n + o], r, low[o], high[o], up[o], down[o])
            if kind >= AT_HIGH and kinds[o] < AT_HIGH:
                st[o, EVENTS] += 1.0
            kinds[o] = kind


@compiled
def lasts(kind: int, w: Any, r: Any, count: int, low: float, high: float, up: float, down: float) -> int:
    """How many steps, from the first, one op-amp stays in its regime."""
    if kind == FOLLOWS:
        for i in range(count):
            if not (-down <= r[i] <= up and low <= w[i + 1] <= high):
                return i
    elif kind == SLEWS_UP:
        for i in range(count):
            if not (r[i] >= up and w[i + 1] <= high):
                return i
    elif kind == SLEWS_DOWN:
        for i in range(count):
            if not (r[i] <= -down and w[i + 1] >= low):
                return i
    elif kind == AT_HIGH:
        for i in range(count):
            if not r[i] >= 0.0:
                return i
    else:
        for i in range(count):
            if not r[i] <= 0.0:
                return i
    return count


@compiled
def regime_steps(
    M: Any,
    constant: Any,
    by_slew: Any,
    uc: Any,
    first: int,
    count: int,
    v: Any,
    kinds: Any,
    low: Any,
    high: Any,
    up: Any,
    down: Any,
    st: Any,
    track: Any,
    drive: Any,
    out: Any,
) -> int:
    """Take up to ``count`` steps in which every op-amp stays in its regime; how many were taken."""
    size = v.shape[0]
    k = kinds.shape[0]
    n = size - k
    rows = n + 3 * k + 1
    hot = n + 2 * k
    for a in range(rows):
        t = constant[a]
        for o in range(k):
            if kinds[o] == SLEWS_UP:
                t += by_slew[a, o] * up[o]
            elif kinds[o] == SLEWS_DOWN:
                t -= by_slew[a, o] * down[o]
        signal_part(M, size, uc, first, count, t, a, drive[a])
    for b in range(size):
        track[b, 0] = v[b]
    recur(M, drive, track, size, count)
    taken = count
    for o in range(k):
        r = drive[size + o]
        add_states(M, track, size + o, size, taken, r)
        taken = lasts(kinds[o], track[n + o], r, taken, low[o], high[o], up[o], down[o])
    if taken == 0:
        return 0
    take_steps(M, track, drive, hot, size, first, taken, v, out)
    for o in range(k):
        note_path(st[o], track[n + o], drive[hot + 1 + o], taken)
        if kinds[o] == FOLLOWS:  # its rate at the end of a step, not only its mean over one
            fastest = st[o, SLEW]
            r = drive[size + o]
            for i in range(taken):
                fastest = max(fastest, abs(r[i]))
            st[o, SLEW] = fastest
        if kinds[o] >= AT_HIGH:
            st[o, CLIPPED] += taken
    return taken


@compiled
def run_macro(
    free: Any,
    constant: Any,
    base: Any,
    turn: Any,
    rate: Any,
    out_row: Any,
    current: Any,
    u: Any,
    mean_out: Any,
    steps: int,
    state: Any,
    regimes: Any,
    low: Any,
    high: Any,
    up: Any,
    down: Any,
    stats: Any,
    at: int,
    leg_steps: int,
    matrices: Any,
    constants: Any,
    slews: Any,
    levels: Any,
    known: Any,
    free_now: Any,
    constant_now: Any,
    z: Any,
    trial: Any,
    work: Any,
    track: Any,
    drive: Any,
) -> None:
    """Run the circuit over ``steps`` steps for every channel.

    Parameters
    ----------
    free, constant : (g, r, n + k + 3), (g, r)
        Matrix of a step while every op-amp follows, at the way stations of a glide, r = n + 3k + 1; g = 1 without one.
    base, turn, rate, out_row, current : (g, n, d), (g, n, k), (g, k, d), (g, d), (g, k, d)
        Continuous equations at each station, see ``macromodel``.
    u, mean_out : (c, steps + 3), (c, steps)
        As in ``kernels.run_steps``.
    state : (c, n + k)
        States and op-amps.
    regimes : (c, k) int64
        What each op-amp does.
    low, high, up, down : (k,)
        Limits of each op-amp's voltage [V] and of its rate [V/step].
    stats : (c, k, STATS)
        Running statistics.
    at, leg_steps : int
        Steps that the glide has taken, steps between its way stations; ``leg_steps`` is 0 without a glide.
    matrices, constants, slews, levels, known
        Regimes that have been met, by mask of the op-amps that follow: (m, r, n + k + 3), (m, r), (m, r, k),
        (m, LEVELS + 1, d, d), and (m + 1, 2) int64: whether the step and the levels are there; the last row holds the
        station they are of.
    free_now, constant_now, z, trial, work, track, drive
        Room: (r, n + k + 3), (r,), (d,), (d,), (4, d, d), (n + k, CHUNK + 1), (r, CHUNK).
    """
    channels, size = state.shape
    k = low.shape[0]
    n = size - k
    rows = n + 3 * k + 1
    chunk = drive.shape[1]
    last = free.shape[0] - 1
    whole = (1 << k) - 1
    for c in range(channels):
        v, uc, out, st, kinds = state[c], u[c], mean_out[c], stats[c], regimes[c]
        done = 0
        span = chunk
        while done < steps:
            mask = 0
            for o in range(k):
                if kinds[o] == FOLLOWS:
                    mask |= 1 << o
            place = at + done
            leg = min(place // leg_steps, last) if leg_steps > 0 else last
            if known[whole + 1, 0] != leg:  # what was met belongs to another station
                known[:, :] = 0
                known[whole + 1, 0] = leg
            taken = 0
            if leg_steps > 0:
                after = min(leg + 1, last)
                part = (place - leg * leg_steps) / leg_steps if leg < last else 0.0
                count = 1
                if mask == whole:
                    for a in range(rows):
                        constant_now[a] = constant[leg, a] + part * (constant[after, a] - constant[leg, a])
                        for b in range(size + 3):
                            free_now[a, b] = free[leg, a, b] + part * (free[after, a, b] - free[leg, a, b])
                    taken = regime_steps(
                        free_now,
                        constant_now,
                        slews[mask],
                        uc,
                        done,
                        1,
                        v,
                        kinds,
                        low,
                        high,
                        up,
                        down,
                        st,
                        track,
                        drive,
                        out,
                    )
            else:
                count = min(span, steps - done)
                if known[mask, 0] == 0:
                    step_matrix(
                        base[leg],
                        turn[leg],
                        rate[leg],
                        out_row[leg],
                        current[leg],
                        mask,
                        work,
                        matrices[mask],
                        constants[mask],
                        slews[mask],
                    )
                    known[mask, 0] = 1
                taken = regime_steps(
                    matrices[mask],
                    constants[mask],
                    slews[mask],
                    uc,
                    done,
                    count,
                    v,
                    kinds,
                    low,
                    high,
                    up,
                    down,
                    st,
                    track,
                    drive,
                    out,
                )
            done += taken
            if taken == count:
                span = min(2 * span, chunk)
                continue
            span = max(8, span // 2)
            u0, u1 = uc[done + 1], uc[done + 2]
            um = (13.0 * (u0 + u1) - (uc[done] + uc[done + 3])) * (1.0 / 24.0)
            for b in range(size):
                z[b] = v[b]
            z[size] = u0
            z[size + 1] = 6.0 * um - 4.0 * u0 - 2.0 * u1
            z[size + 2] = 6.0 * (u0 + u1) - 12.0 * um
            walk(
                base[leg],
                turn[leg],
                rate[leg],
                out_row[leg],
                levels,
                known,
                z,
                trial,
                kinds,
                low,
                high,
                up,
                down,
                st,
                n,
                k,
                work,
            )
            for b in range(size):
                v[b] = z[b]
            out[done] = z[n + 2 * k + 4]
            for o in range(k):
                amps = 0.0
                for j in range(z.shape[0]):
                    amps += current[leg, o, j] * z[j]
                st[o, CURRENT] = max(st[o, CURRENT], abs(amps))
                if not np.isfinite(z[n + o]):
                    st[o, UNSOLVED] += 1.0
            done += 1
