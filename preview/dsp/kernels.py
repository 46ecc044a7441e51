"""The sample loops, compiled. One file, no module state that the loops read, no fast-math.

Shapes: c channels, n states, k op-amps, r = n + 3k + 1 rows of a step. Everything is passed in and changed in
place; nothing allocates. Arithmetic goes sample by sample in one fixed order, so the samples do not depend on
how the signal is cut into blocks.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from platformdirs import user_cache_dir


def _compiler() -> Callable[[Callable[..., Any]], Any]:
    """numba's decorator, with a cache in the user's cache folder where that can be written."""
    try:
        folder = Path(
            os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(user_cache_dir("preview")) / "kernels"))
        )
        folder.mkdir(parents=True, exist_ok=True)
        cached = os.access(folder, os.W_OK)
    except OSError:
        cached = False
    import numba

    decorate: Callable[[Callable[..., Any]], Any] = numba.njit(cache=cached, nogil=True, error_model="numpy")
    return decorate


compiled = _compiler()

MAX_ITERATIONS = 40
"""Newton steps that a limited step may take; 2 to 5 are usual."""

# columns of the op-amps' running statistics
HIGH, LOW, SLEW, CURRENT, EVENTS, CLIPPED, UNSOLVED, STATS = 0, 1, 2, 3, 4, 5, 6, 7


@compiled
def above_zero(a: float, b: float, c: float) -> tuple[float, float, float, float]:
    """Where ``q(t) = a t^2 + b t + c`` is above zero within 0..1.

    Returns the integrals over that region of q, of 1, of ``6 t (1 - t)`` and of ``3 t^2 - 2 t``.
    """
    r0, r1 = 0.0, 0.0
    count = 0
    if abs(a) <= 1e-14 * abs(b):
        if b != 0.0:
            r0 = -c / b
            count = 1
    else:
        disc = b * b - 4.0 * a * c
        if disc > 0.0:
            h = -0.5 * (b + (np.sqrt(disc) if b >= 0.0 else -np.sqrt(disc)))
            r0 = h / a
            r1 = c / h if h != 0.0 else r0
            if r0 > r1:
                r0, r1 = r1, r0
            count = 2
    edge = 0.0
    area, width, over_mean, over_end = 0.0, 0.0, 0.0, 0.0
    for i in range(3):
        nxt = 1.0
        if i < count:
            nxt = r0 if i == 0 else r1
            nxt = min(max(nxt, edge), 1.0)
        elif i > count:
            break
        if nxt > edge:
            mid = 0.5 * (edge + nxt)
            if (a * mid + b) * mid + c > 0.0:
                area += ((a / 3.0 * nxt + b / 2.0) * nxt + c) * nxt
                area -= ((a / 3.0 * edge + b / 2.0) * edge + c) * edge
                width += nxt - edge
                over_mean += nxt * nxt * (3.0 - 2.0 * nxt) - edge * edge * (3.0 - 2.0 * edge)
                over_end += nxt * nxt * (nxt - 1.0) - edge * edge * (edge - 1.0)
        edge = nxt
    return area, width, over_mean, over_end


@compiled
def clamped_mean(
    start: float, mean: float, end: float, low: float, high: float
) -> tuple[float, float, float, float]:
    """Mean over a step of a path clamped between two limits.

    The path is the parabola with the given ends and mean. Returns the clamped mean, its derivatives by the mean
    and by the end, and the share of the step spent at a limit.
    """
    bump = 6.0 * (mean - 0.5 * (start + end))
    a, b = -bump, end - start + bump
    area_h, width_h, mean_h, end_h = above_zero(a, b, start - high)
    area_l, width_l, mean_l, end_l = above_zero(-a, -b, low - start)
    return mean - area_h + area_l, 1.0 - mean_h - mean_l, -end_h - end_l, width_h + width_l


@compiled
def solve_small(matrix: Any, right: Any, size: int) -> bool:
    """Solve in place by elimination with row exchange; False if singular. Both arguments are overwritten."""
    for col in range(size):
        best = col
        for row in range(col + 1, size):
            if abs(matrix[row, col]) > abs(matrix[best, col]):
                best = row
        if abs(matrix[best, col]) < 1e-300:
            return False
        if best != col:
            for j in range(size):
                matrix[col, j], matrix[best, j] = matrix[best, j], matrix[col, j]
            right[col], right[best] = right[best], right[col]
        for row in range(col + 1, size):
            f = matrix[row, col] / matrix[col, col]
            if f != 0.0:
                for j in range(col, size):
                    matrix[row, j] -= f * matrix[col, j]
                right[row] -= f * right[col]
    for row in range(size - 1, -1, -1):
        t = right[row]
        for j in range(row + 1, size):
            t -= matrix[row, j] * right[j]
        right[row] = t / matrix[row, row]
    return True


@compiled
def bound_step(
    bound: Any, vector: Any, asked: Any, low: Any, high: Any, n: int, k: int, work: Any, matrix: Any, row: Any
) -> bool:
    """Solve one step in which an op-amp limits: means and end values of all op-amp outputs together.

    ``vector`` holds the step's columns: states, outputs at the start, signal at the start, mean signal, signal at
    the end, then mean outputs and end outputs, which are the unknowns and are left in it. ``asked`` is what each
    op-amp was asked for at the start. ``work`` (6, 2k): residual, trial, direction, base, kept, share at a limit.
    ``row`` receives the step's rows. Returns whether the equations were met.
    """
    c_mean = n + k + 3
    c_end = c_mean + k
    scale = 0.0
    for i in range(2 * k):  # what they are asked for without the unknowns' share
        t = 0.0
        for j in range(c_mean):
            t += bound[n + i, j] * vector[j]
        work[3, i] = t
    for i in range(k):
        start = vector[n + i]
        vector[c_mean + i] = start
        vector[c_end + i] = start
        if np.isfinite(high[i]):
            scale = max(scale, high[i], -low[i])
        scale = max(scale, abs(start))
    tolerance = 1e-13 * scale + 1e-300
    before = np.inf
    shrink = 1.0
    solved = False
    for _ in range(MAX_ITERATIONS):
        worst = 0.0
        for i in range(k):
            end = work[3, i]
            mean = work[3, k + i]
            for j in range(k):
                end += (
                    bound[n + i, c_mean + j] * vector[c_mean + j]
                    + bound[n + i, c_end + j] * vector[c_end + j]
                )
                mean += bound[n + k + i, c_mean + j] * vector[c_mean + j]
                mean += bound[n + k + i, c_end + j] * vector[c_end + j]
            value, by_mean, by_end, share = clamped_mean(asked[i], mean, end, low[i], high[i])
            inside = 1.0 if low[i] < end < high[i] else 0.0
            work[5, i] = share
            work[0, i] = vector[c_mean + i] - value
            work[0, k + i] = vector[c_end + i] - min(max(end, low[i]), high[i])
            worst = max(worst, abs(work[0, i]), abs(work[0, k + i]))
            for j in range(k):
                one = 1.0 if i == j else 0.0
                am, ae = bound[n + k + i, c_mean + j], bound[n + k + i, c_end + j]
                em, ee = bound[n + i, c_mean + j], bound[n + i, c_end + j]
                matrix[i, j] = one - by_mean * am - by_end * em
                matrix[i, k + j] = -by_mean * ae - by_end * ee
                matrix[k + i, j] = -inside * em
                matrix[k + i, k + j] = one - inside * ee
        if worst <= tolerance:
            solved = True
            break
        if worst > before and shrink > 0.02:  # no gain: go back half the way
            shrink *= 0.5
            for i in range(k):
                vector[c_mean + i] = work[4, i] - shrink * work[2, i]
                vector[c_end + i] = work[4, k + i] - shrink * work[2, k + i]
            continue
        before = worst
        shrink = 1.0
        for i in range(2 * k):
            work[2, i] = work[0, i]
        if not solve_small(matrix, work[2], 2 * k):
            break
        for i in range(k):
            work[4, i] = vector[c_mean + i]
            work[4, k + i] = vector[c_end + i]
            vector[c_mean + i] -= work[2, i]
            vector[c_end + i] -= work[2, k + i]
        if before <= 1e3 * tolerance:  # at the rounding floor: this last step ends it
            solved = True
            break
    for i in range(k):
        vector[c_mean + i] = min(max(vector[c_mean + i], low[i]), high[i])
        vector[c_end + i] = min(max(vector[c_end + i], low[i]), high[i])
    for i in range(n + 3 * k + 1):
        t = 0.0
        for j in range(c_end + k):
            t += bound[i, j] * vector[j]
        row[i] = t
    return solved


@compiled
def between_stations(free: Any, bound: Any, glide: Any, free_now: Any, bound_now: Any) -> None:
    """Matrices at the glide's present place, linear between way stations, and one step on."""
    leg = glide[0] // glide[1]
    last = glide[2] - 1
    part = 0.0
    if leg >= last:
        leg = last
    else:
        part = (glide[0] - leg * glide[1]) / glide[1]
        glide[0] += 1
    after = min(leg + 1, last)
    for a in range(free_now.shape[0]):
        for b in range(free_now.shape[1]):
            free_now[a, b] = free[leg, a, b] + part * (free[after, a, b] - free[leg, a, b])
    for a in range(bound_now.shape[0]):
        for b in range(bound_now.shape[1]):
            bound_now[a, b] = bound[leg, a, b] + part * (bound[after, a, b] - bound[leg, a, b])


@compiled
def limited_step(
    W: Any,
    v: Any,
    asked: Any,
    limited: Any,
    low: Any,
    high: Any,
    n: int,
    k: int,
    stats: Any,
    work: Any,
    matrix: Any,
    row: Any,
) -> None:
    """One step of one channel in which an op-amp limits, with its statistics; leaves the new state in ``v``."""
    solved = bound_step(W, v, asked, low, high, n, k, work, matrix, row)
    for j in range(k):
        y1 = v[n + 2 * k + 3 + j]
        note(stats[j], v[n + j], y1, row[n + 2 * k + 1 + j])
        stats[j, CLIPPED] += work[5, j]
        if work[5, j] > 0.0 and not limited[j]:
            stats[j, EVENTS] += 1.0
        if not solved:
            stats[j, UNSOLVED] += 1.0
        v[n + j] = y1
        asked[j] = row[n + j]
        limited[j] = not low[j] < row[n + j] < high[j]
    for b in range(n):
        v[b] = row[b]


@compiled
def note(s: Any, before: float, now: float, current: float) -> None:
    """Take one op-amp's step into its statistics."""
    s[HIGH] = max(s[HIGH], now)
    s[LOW] = min(s[LOW], now)
    s[SLEW] = max(s[SLEW], abs(now - before))
    s[CURRENT] = max(s[CURRENT], abs(current))


@compiled
def any_set(flags: Any) -> bool:
    """Whether any flag is set."""
    for j in range(flags.shape[0]):
        if flags[j]:
            return True
    return False


@compiled
def within(v: Any, row: Any, low: Any, high: Any, n: int, k: int) -> bool:
    """Whether every op-amp's path over a free step, a parabola, keeps off its limits for certain."""
    for j in range(k):
        y0, y1 = v[n + j], row[n + j]
        bow = 1.5 * abs(row[n + k + j] - 0.5 * (y0 + y1))
        if max(y0, y1) + bow > high[j] or min(y0, y1) - bow < low[j]:
            return False
    return True


@compiled
def mean_signal(u: Any, i: int) -> float:
    """Mean over the step from ``u[i + 1]`` to ``u[i + 2]`` of the cubic through four samples."""
    mean: float = (13.0 * (u[i + 1] + u[i + 2]) - (u[i] + u[i + 3])) * (1.0 / 24.0)
    return mean


@compiled
def glide_steps(
    free: Any,
    bound: Any,
    u: Any,
    mean_out: Any,
    steps: int,
    state: Any,
    asked: Any,
    limited: Any,
    low: Any,
    high: Any,
    stats: Any,
    glide: Any,
    free_now: Any,
    bound_now: Any,
    work: Any,
    matrix: Any,
    row: Any,
) -> None:
    """``run_steps`` while a part is on its way: every step has matrices of its own."""
    channels, k = asked.shape
    rows, columns = free_now.shape
    n = columns - k - 3
    for i in range(steps):
        between_stations(free, bound, glide, free_now, bound_now)
        for c in range(channels):
            v = state[c]
            v[n + k] = u[c, i + 1]
            v[n + k + 1] = mean_signal(u[c], i)
            v[n + k + 2] = u[c, i + 2]
            clean = not any_set(limited[c])
            if clean:
                for a in range(rows):
                    t = 0.0
                    for b in range(columns):
                        t += free_now[a, b] * v[b]
                    row[a] = t
                clean = within(v, row, low, high, n, k)
            if clean:
                for j in range(k):
                    note(stats[c, j], v[n + j], row[n + j], row[n + 2 * k + 1 + j])
                    asked[c, j] = row[n + j]
                for b in range(n + k):
                    v[b] = row[b]
            else:
                limited_step(bound_now, v, asked[c], limited[c], low, high, n, k, stats[c], work, matrix, row)
            mean_out[c, i] = row[n + 2 * k]


@compiled
def run_steps(
    free: Any,
    bound: Any,
    u: Any,
    mean_out: Any,
    steps: int,
    state: Any,
    asked: Any,
    limited: Any,
    low: Any,
    high: Any,
    stats: Any,
    glide: Any,
    free_now: Any,
    bound_now: Any,
    work: Any,
    matrix: Any,
    row: Any,
    track: Any,
    drive: Any,
    slow: Any,
) -> None:
    """Run the circuit over ``steps`` steps for every channel.

    What the signal adds to every row is computed for all steps at once, then the states step by step, then the
    rows that no state depends on for all steps at once. A step that may touch a limit is solved on its own.

    Parameters
    ----------
    free, bound : (g, r, n + k + 3), (g, r, n + 3k + 3)
        Matrices of the step, see ``bilinear.RunningStep``; g = 1, or the way stations of a glide.
    u : (c, steps + 3)
        Signal at the oversampled rate [V]; step i goes from ``u[:, i + 1]`` to ``u[:, i + 2]``.
    mean_out : (c, steps)
        Receives the mean of the output node over each step [V].
    state : (c, n + 3k + 3)
        Physical states, op-amp outputs, and room for the rest of a step's columns.
    asked, limited : (c, k)
        What the op-amps are asked for, whether they were at a limit.
    low, high : (k,)
        Limits of the outputs [V].
    stats : (c, k, STATS)
        Running statistics.
    glide : (3,) int64
        Steps done, steps between way stations, way stations in use; one station means no glide.
    free_now, bound_now : (r, n + k + 3), (r, n + 3k + 3)
        Room for the matrices between two way stations.
    work, matrix, row, track, drive, slow
        Room: (6, 2k), (2k, 2k), (r,), (n + k, steps + 1), (r, steps), (steps,) bool.
    """
    if glide[2] > 1:
        glide_steps(
            free,
            bound,
            u,
            mean_out,
            steps,
            state,
            asked,
            limited,
            low,
            high,
            stats,
            glide,
            free_now,
            bound_now,
            work,
            matrix,
            row,
        )
        return
    channels, k = asked.shape
    M, W = free[0], bound[0]
    rows, columns = M.shape
    n = columns - k - 3
    hot = n + 2 * k
    for c in range(channels):
        v, uc = state[c], u[c]
        for a in range(rows):
            m0, m1, m2 = M[a, n + k], M[a, n + k + 1] / 24.0, M[a, n + k + 2]
            first, second, third, fourth = -m1, m0 + 13.0 * m1, m2 + 13.0 * m1, -m1
            da = drive[a]
            for i in range(steps):
                da[i] = (first * uc[i] + second * uc[i + 1]) + (third * uc[i + 2] + fourth * uc[i + 3])
        stuck = any_set(limited[c])
        ask = asked[c]
        for i in range(steps):
            for b in range(n + k):
                track[b, i] = v[b]
            clean = not stuck
            if clean:
                for a in range(hot):
                    t = drive[a, i]
                    for b in range(n + k):
                        t += M[a, b] * v[b]
                    row[a] = t
                for j in range(k):
                    y0, y1 = v[n + j], row[n + j]
                    bow = 1.5 * abs(row[n + k + j] - 0.5 * (y0 + y1))
                    if y0 + bow > high[j] or y1 + bow > high[j] or y0 - bow < low[j] or y1 - bow < low[j]:
                        clean = False
            slow[i] = not clean
            if clean:
                for b in range(n + k):
                    v[b] = row[b]
            else:
                if not stuck:
                    for j in range(k):
                        ask[j] = v[n + j]
                v[n + k] = uc[i + 1]
                v[n + k + 1] = mean_signal(uc, i)
                v[n + k + 2] = uc[i + 2]
                limited_step(W, v, ask, limited[c], low, high, n, k, stats[c], work, matrix, row)
                mean_out[c, i] = row[n + 2 * k]
                stuck = any_set(limited[c])
        if not stuck:
            for j in range(k):
                ask[j] = v[n + j]
        for b in range(n + k):
            track[b, steps] = v[b]
        for a in range(hot, rows):
            da = drive[a]
            for b in range(n + k):
                m, tb = M[a, b], track[b]
                for i in range(steps):
                    da[i] += m * tb[i]
        da = drive[hot]
        for i in range(steps):
            if not slow[i]:
                mean_out[c, i] = da[i]
        for j in range(k):
            s, y, da = stats[c, j], track[n + j], drive[hot + 1 + j]
            top, bottom, fastest, most = s[HIGH], s[LOW], s[SLEW], s[CURRENT]
            for i in range(steps):
                top = max(top, y[i + 1])
                bottom = min(bottom, y[i + 1])
                fastest = max(fastest, abs(y[i + 1] - y[i]))
                if not slow[i]:
                    most = max(most, abs(da[i]))
            s[HIGH], s[LOW], s[SLEW], s[CURRENT] = top, bottom, fastest, most


@compiled
def convolve_phase(taps: Any, signal: Any, first: int, count: int, result: Any) -> None:
    """``result[i] = sum_j taps[j] signal[first + i - j]`` for i below ``count``, four taps at a time."""
    for i in range(count):
        result[i] = 0.0
    for j in range(0, taps.shape[0], 4):
        t0, t1, t2, t3 = taps[j], taps[j + 1], taps[j + 2], taps[j + 3]
        s0 = signal[first - j : first - j + count]
        s1 = signal[first - j - 1 : first - j - 1 + count]
        s2 = signal[first - j - 2 : first - j - 2 + count]
        s3 = signal[first - j - 3 : first - j - 3 + count]
        for i in range(count):
            result[i] += (t0 * s0[i] + t1 * s1[i]) + (t2 * s2[i] + t3 * s3[i])


@compiled
def up_block(
    volts_in: Any, first: int, count: int, x: Any, a: Any, u: Any, taps_1: Any, taps_2: Any, room: Any
) -> None:
    """Bring ``count`` frames to the oversampled rate: twice, then by the number of rows of ``taps_2``.

    Parameters
    ----------
    volts_in : (frames, c)
        Signal; frames ``first`` to ``first + count`` are used.
    x, a, u : (c, past + count), (c, past + 2 count), (c, 3 + steps)
        Signal at one, two and all times the rate, each behind its own past.
    taps_1, taps_2 : (2, taps), (phases, taps)
        Interpolators by phase.
    room : (2 count,)
        Room.
    """
    past_x, past_a = taps_1.shape[1] - 1, taps_2.shape[1] - 1
    phases = taps_2.shape[0]
    for c in range(x.shape[0]):
        for i in range(count):
            x[c, past_x + i] = volts_in[first + i, c]
        for phase in range(2):
            convolve_phase(taps_1[phase], x[c], past_x, count, room)
            for i in range(count):
                a[c, past_a + 2 * i + phase] = room[i]
        for phase in range(phases):
            convolve_phase(taps_2[phase], a[c], past_a, 2 * count, room)
            for i in range(2 * count):
                u[c, 3 + i * phases + phase] = room[i]
        for i in range(past_x):
            x[c, i] = x[c, count + i]
        for i in range(past_a):
            a[c, i] = a[c, 2 * count + i]


@compiled
def keep_last(u: Any, steps: int) -> None:
    """Move the last three samples to the front: the next block's past."""
    for c in range(u.shape[0]):
        for i in range(3):
            u[c, i] = u[c, steps + i]


@compiled
def down_block(
    mean_out: Any,
    first: int,
    count: int,
    split: Any,
    w: Any,
    volts_out: Any,
    taps_1: Any,
    taps_2: Any,
    room: Any,
) -> None:
    """Bring means at the oversampled rate back to ``count`` frames.

    Parameters
    ----------
    mean_out : (c, steps)
        Mean of the output over each step.
    split, w : (c, phases, past + 2 count), (c, 2, past + count)
        The same by phase, and at twice the rate by phase, each behind its own past.
    volts_out : (frames, c)
        Frames ``first`` to ``first + count`` are filled.
    taps_1, taps_2 : (2, taps), (phases, taps)
        Decimators by phase, to the rate and to twice the rate.
    room : (2, 2 count)
        Room.
    """
    past_w, past_s = taps_1.shape[1] - 1, taps_2.shape[1] - 1
    phases = taps_2.shape[0]
    for c in range(mean_out.shape[0]):
        for i in range(2 * count):
            for phase in range(phases):
                split[c, phase, past_s + i] = mean_out[c, i * phases + phase]
        for i in range(2 * count):
            room[1, i] = 0.0
        for phase in range(phases):
            convolve_phase(taps_2[phase], split[c, phase], past_s, 2 * count, room[0])
            for i in range(2 * count):
                room[1, i] += room[0, i]
            for i in range(past_s):
                split[c, phase, i] = split[c, phase, 2 * count + i]
        for i in range(count):
            w[c, 0, past_w + i] = room[1, 2 * i]
            w[c, 1, past_w + i] = room[1, 2 * i + 1]
        for phase in range(2):
            convolve_phase(taps_1[phase], w[c, phase], past_w, count, room[phase])
            for i in range(past_w):
                w[c, phase, i] = w[c, phase, count + i]
        for i in range(count):
            volts_out[first + i, c] = room[0, i] + room[1, i]
