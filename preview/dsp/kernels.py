"""The sample loops of ideal op-amps, compiled; no module state that the loops read, no fast-math.

The room's other kernel files take what they share from here.

Shapes: c channels, n states, k op-amps, r = n + 3k + 1 rows of a step. Everything is passed in and changed in
place; nothing allocates. Arithmetic goes sample by sample in one fixed order, so the samples do not depend on
how the signal is cut into blocks.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled as compiled
from preview.dsp.visit_kernels import (
    CLIPPED,
    CURRENT,
    EVENTS,
    HIGH,
    LOW,
    RAIL,
    SLEW,
    UNSOLVED,
    begin_row,
    end_row,
    put_row,
)

MAX_ITERATIONS = 40
"""Newton steps that a limited step may take; 2 to 5 are usual."""

MAX_ROUNDS = 200
"""Rounds over the op-amps of a step that Newton's method does not solve."""

CHUNK = 128
"""Steps that are taken at a time while nobody limits."""


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
def between_stations(free: Any, bound: Any, at: int, leg_steps: int, free_now: Any, bound_now: Any) -> None:
    """Matrices of a glide after ``at`` steps, linear between way stations."""
    last = free.shape[0] - 1
    leg = min(at // leg_steps, last)
    after = min(leg + 1, last)
    part = (at - leg * leg_steps) / leg_steps if leg < last else 0.0
    for a in range(free_now.shape[0]):
        for b in range(free_now.shape[1]):
            free_now[a, b] = free[leg, a, b] + part * (free[after, a, b] - free[leg, a, b])
    for a in range(bound_now.shape[0]):
        for b in range(bound_now.shape[1]):
            bound_now[a, b] = bound[leg, a, b] + part * (bound[after, a, b] - bound[leg, a, b])


@compiled
def newton(
    W: Any, v: Any, ask: Any, low: Any, high: Any, n: int, k: int, work: Any, matrix: Any, direction: Any
) -> bool:
    """Means and end values of all op-amp outputs over a step in which an op-amp limits, by Newton's method.

    ``v`` holds the step's columns: states and outputs at the start, signal at the start, on average and at the end;
    then mean outputs and end outputs, the unknowns, which are left in it. ``ask`` is what each op-amp was asked for at
    the start. ``work`` (5, 2k): residual, step, what is asked without the unknowns' share (given, row 2), last point,
    and, left in row 4, the share of the step at a limit. Returns whether the equations were met.
    """
    c_mean = n + k + 3
    c_end = c_mean + k
    scale = 0.0
    for i in range(k):
        v[c_mean + i] = v[n + i]
        v[c_end + i] = v[n + i]
        if np.isfinite(high[i]):
            scale = max(scale, high[i], -low[i])
        scale = max(scale, abs(v[n + i]))
    tolerance = 1e-13 * scale + 1e-300
    before = np.inf
    shrink = 1.0
    solved = False
    for _ in range(MAX_ITERATIONS):
        worst = 0.0
        for i in range(k):
            end = work[2, i]
            mean = work[2, k + i]
            for j in range(k):
                end += W[n + i, c_mean + j] * v[c_mean + j] + W[n + i, c_end + j] * v[c_end + j]
                mean += W[n + k + i, c_mean + j] * v[c_mean + j] + W[n + k + i, c_end + j] * v[c_end + j]
            value, by_mean, by_end, share = clamped_mean(ask[i], mean, end, low[i], high[i])
            inside = 1.0 if low[i] < end < high[i] else 0.0
            work[4, i] = share
            work[0, i] = v[c_mean + i] - value
            work[0, k + i] = v[c_end + i] - min(max(end, low[i]), high[i])
            worst = max(worst, abs(work[0, i]), abs(work[0, k + i]))
            for j in range(k):
                one = 1.0 if i == j else 0.0
                am, ae = W[n + k + i, c_mean + j], W[n + k + i, c_end + j]
                em, ee = W[n + i, c_mean + j], W[n + i, c_end + j]
                matrix[i, j] = one - by_mean * am - by_end * em
                matrix[i, k + j] = -by_mean * ae - by_end * ee
                matrix[k + i, j] = -inside * em
                matrix[k + i, k + j] = one - inside * ee
        if worst <= tolerance:
            solved = True
            break
        if worst > before and shrink > 0.02:  # no gain: go back half the way
            shrink *= 0.5
            for i in range(2 * k):
                v[c_mean + i] = work[3, i] - shrink * work[1, i]
            continue
        before = worst
        shrink = 1.0
        for i in range(2 * k):
            direction[i] = work[0, i]
        if not solve_small(matrix, direction, 2 * k):
            break
        for i in range(2 * k):
            work[1, i] = direction[i]
            work[3, i] = v[c_mean + i]
            v[c_mean + i] -= direction[i]
        if before <= 1e3 * tolerance:  # at the rounding floor: this last step ends it
            solved = True
            break
    for i in range(k):
        v[c_mean + i] = min(max(v[c_mean + i], low[i]), high[i])
        v[c_end + i] = min(max(v[c_end + i], low[i]), high[i])
    return solved


@compiled
def one_by_one(W: Any, v: Any, ask: Any, low: Any, high: Any, n: int, k: int, work: Any) -> bool:
    """What ``newton`` solves, where its steps go round in circles: one op-amp at a time, the others held.

    With the others held the mean of one output is the root of a continuous function that is not above zero at the
    lower rail and not below it at the upper one, so halving finds it. A cascade is done in one round.
    """
    c_mean = n + k + 3
    c_end = c_mean + k
    for _ in range(MAX_ROUNDS):
        change = 0.0
        scale = 0.0
        for i in range(k):
            end0, mean0 = work[2, i], work[2, k + i]
            for j in range(k):
                if j != i:
                    end0 += W[n + i, c_mean + j] * v[c_mean + j] + W[n + i, c_end + j] * v[c_end + j]
                    mean0 += W[n + k + i, c_mean + j] * v[c_mean + j] + W[n + k + i, c_end + j] * v[c_end + j]
            end_m, end_e = W[n + i, c_mean + i], W[n + i, c_end + i]
            mean_m, mean_e = W[n + k + i, c_mean + i], W[n + k + i, c_end + i]
            if np.isfinite(low[i]) and np.isfinite(high[i]):
                below, above = low[i], high[i]
                y, y1, share = 0.0, 0.0, 0.0
                for _turn in range(64):
                    y = 0.5 * (below + above)
                    y1 = min(max((end0 + end_m * y) / (1.0 - end_e), low[i]), high[i])
                    end = end0 + end_m * y + end_e * y1
                    value, _m, _e, share = clamped_mean(
                        ask[i], mean0 + mean_m * y + mean_e * y1, end, low[i], high[i]
                    )
                    if y - value > 0.0:
                        above = y
                    else:
                        below = y
            else:  # no rails: two linear equations
                det = (1.0 - mean_m) * (1.0 - end_e) - mean_e * end_m
                y = (mean0 * (1.0 - end_e) + mean_e * end0) / det
                y1 = (end0 * (1.0 - mean_m) + end_m * mean0) / det
                share = 0.0
            change = max(change, abs(y - v[c_mean + i]), abs(y1 - v[c_end + i]))
            scale = max(scale, abs(y), abs(y1))
            v[c_mean + i] = y
            v[c_end + i] = y1
            work[4, i] = share
        if change <= 1e-12 * scale + 1e-300:
            return True
    return False


@compiled
def checked_steps(
    free: Any,
    bound: Any,
    at: int,
    leg_steps: int,
    uc: Any,
    first: int,
    count: int,
    v: Any,
    ask: Any,
    limited: Any,
    low: Any,
    high: Any,
    stats: Any,
    free_now: Any,
    bound_now: Any,
    work: Any,
    matrix: Any,
    direction: Any,
    row: Any,
    out: Any,
) -> None:
    """Steps ``first`` to ``first + count`` of one channel, each checked; one that may touch a limit is solved alone.

    With ``leg_steps`` above zero the matrices glide, and ``at`` is how many steps the glide had taken.
    """
    k = ask.shape[0]
    rows, columns = free_now.shape
    n = columns - k - 3
    c_mean, c_end = n + k + 3, n + 2 * k + 3
    moving = leg_steps > 0
    M = free_now if moving else free[0]
    W = bound_now if moving else bound[0]
    stuck = False
    for j in range(k):
        stuck = stuck or limited[j]
    for i in range(first, first + count):
        if moving:
            between_stations(free, bound, at + i, leg_steps, free_now, bound_now)
        v[n + k] = uc[i + 1]
        # mean over the step of the cubic through four samples
        v[n + k + 1] = (13.0 * (uc[i + 1] + uc[i + 2]) - (uc[i] + uc[i + 3])) * (1.0 / 24.0)
        v[n + k + 2] = uc[i + 2]
        clean = not stuck
        if clean:
            for a in range(rows):
                t = 0.0
                for b in range(columns):
                    t += M[a, b] * v[b]
                row[a] = t
            for j in range(k):
                y0, y1 = v[n + j], row[n + j]
                bow = 1.5 * abs(row[n + k + j] - 0.5 * (y0 + y1))
                if y0 + bow > high[j] or y1 + bow > high[j] or y0 - bow < low[j] or y1 - bow < low[j]:
                    clean = False
        if clean:
            for j in range(k):
                v[c_end + j] = row[n + j]
                work[4, j] = 0.0
        else:
            if not stuck:
                for j in range(k):
                    ask[j] = v[n + j]
            for a in range(2 * k):
                t = 0.0
                for b in range(c_mean):
                    t += W[n + a, b] * v[b]
                work[2, a] = t
            if not newton(W, v, ask, low, high, n, k, work, matrix, direction) and not one_by_one(
                W, v, ask, low, high, n, k, work
            ):
                for j in range(k):
                    stats[j, UNSOLVED] += 1.0
            for a in range(rows):
                t = 0.0
                for b in range(c_end + k):
                    t += W[a, b] * v[b]
                row[a] = t
        stuck = False
        for j in range(k):
            y1 = v[c_end + j]
            stats[j, HIGH] = max(stats[j, HIGH], y1)
            stats[j, LOW] = min(stats[j, LOW], y1)
            stats[j, SLEW] = max(stats[j, SLEW], abs(y1 - v[n + j]))
            stats[j, CURRENT] = max(stats[j, CURRENT], abs(row[n + 2 * k + 1 + j]))
            share = work[4, j]
            stats[j, CLIPPED] += share
            if share > 0.0 and not limited[j]:
                stats[j, EVENTS] += 1.0
            v[n + j] = y1
            ask[j] = row[n + j]
            limited[j] = not low[j] < row[n + j] < high[j]
            stuck = stuck or limited[j]
        for b in range(n):
            v[b] = row[b]
        out[i] = row[n + 2 * k]


@compiled
def recur(M: Any, drive: Any, track: Any, size: int, count: int) -> None:
    """``track[:, i + 1] = M track[:, i] + drive[:, i]``; sizes up to three are written out."""
    if size == 1:
        a = M[0, 0]
        x = track[0, 0]
        d0, t0 = drive[0], track[0]
        for i in range(count):
            x = d0[i] + a * x
            t0[i + 1] = x
    elif size == 2:
        a, b, c, d = M[0, 0], M[0, 1], M[1, 0], M[1, 1]
        x, y = track[0, 0], track[1, 0]
        d0, d1, t0, t1 = drive[0], drive[1], track[0], track[1]
        for i in range(count):
            x, y = d0[i] + (a * x + b * y), d1[i] + (c * x + d * y)
            t0[i + 1] = x
            t1[i + 1] = y
    elif size == 3:
        a, b, c = M[0, 0], M[0, 1], M[0, 2]
        d, e, f = M[1, 0], M[1, 1], M[1, 2]
        g, h, k = M[2, 0], M[2, 1], M[2, 2]
        x, y, z = track[0, 0], track[1, 0], track[2, 0]
        d0, d1, d2, t0, t1, t2 = drive[0], drive[1], drive[2], track[0], track[1], track[2]
        for i in range(count):
            x, y, z = (
                (d0[i] + a * x) + (b * y + c * z),
                (d1[i] + d * x) + (e * y + f * z),
                (d2[i] + g * x) + (h * y + k * z),
            )
            t0[i + 1] = x
            t1[i + 1] = y
            t2[i + 1] = z
    else:
        for i in range(count):
            for r in range(size):
                t = drive[r, i]
                for j in range(size):
                    t += M[r, j] * track[j, i]
                track[r, i + 1] = t


@compiled
def add_states(M: Any, track: Any, row: int, size: int, count: int, total: Any) -> None:
    """Add to one row what the states of each step put in, all steps at once."""
    for j in range(size):
        m, t = M[row, j], track[j]
        for i in range(count):
            total[i] += m * t[i]


@compiled
def take_steps(
    M: Any, track: Any, drive: Any, hot: int, size: int, first: int, taken: int, v: Any, out: Any
) -> None:
    """Move the states on by the steps taken, finish the rows that no state depends on, put out the first of them."""
    for b in range(size):
        v[b] = track[b, taken]
    for a in range(hot, M.shape[0]):
        add_states(M, track, a, size, taken, drive[a])
    mean = drive[hot]
    for i in range(taken):
        out[first + i] = mean[i]


@compiled
def note_path(s: Any, path: Any, current: Any, count: int) -> None:
    """Take the ends of some steps of one op-amp, and its currents, into its statistics."""
    top, bottom, fastest, most = s[HIGH], s[LOW], s[SLEW], s[CURRENT]
    for i in range(count):
        end = path[i + 1]
        move = abs(end - path[i])
        amps = abs(current[i])
        top = end if end > top else top
        bottom = end if end < bottom else bottom
        fastest = move if move > fastest else fastest
        most = amps if amps > most else most
    s[HIGH], s[LOW], s[SLEW], s[CURRENT] = top, bottom, fastest, most


@compiled
def steps_off(y: Any, mean: Any, count: int, low: float, high: float) -> int:
    """How many steps, from the first, one op-amp's free path keeps off its limits for certain."""
    for i in range(count):
        y0, y1 = y[i], y[i + 1]
        bow = 1.5 * abs(mean[i] - 0.5 * (y0 + y1))
        if y0 + bow > high or y1 + bow > high or y0 - bow < low or y1 - bow < low:
            return i
    return count


@compiled
def steps_at(ask: float, end: Any, mean: Any, count: int, rail: float, side: float) -> int:
    """How many steps, from the first, one op-amp is asked for more than its rail all the time.

    ``side`` is 1 at the upper rail and -1 at the lower one.
    """
    before = ask
    for i in range(count):
        bow = 1.5 * abs(mean[i] - 0.5 * (before + end[i]))
        if side * (before - rail) < bow or side * (end[i] - rail) < bow:
            return i
        before = end[i]
    return count


@compiled
def signal_part(
    matrix: Any, column: int, uc: Any, first: int, count: int, constant: float, row: int, result: Any
) -> None:
    """What the signal, and a constant, put into one row of some steps."""
    m0, m1, m2 = matrix[row, column], matrix[row, column + 1] / 24.0, matrix[row, column + 2]
    # mean over the step of the cubic through four samples: (13 (u1 + u2) - u0 - u3) / 24
    t0, t1, t2 = -m1, m0 + 13.0 * m1, m2 + 13.0 * m1
    u0, u1, u2, u3 = uc[first:], uc[first + 1 :], uc[first + 2 :], uc[first + 3 :]
    for i in range(count):
        result[i] = (t0 * (u0[i] + u3[i]) + (t1 * u1[i] + t2 * u2[i])) + constant


@compiled
def free_steps(
    M: Any,
    uc: Any,
    first: int,
    count: int,
    v: Any,
    ask: Any,
    low: Any,
    high: Any,
    st: Any,
    track: Any,
    drive: Any,
    out: Any,
) -> int:
    """Take up to ``count`` steps in which no op-amp limits; how many were taken."""
    k = ask.shape[0]
    rows, columns = M.shape
    size = columns - 3
    n = size - k
    hot = n + 2 * k
    for a in range(rows):
        signal_part(M, size, uc, first, count, 0.0, a, drive[a])
    for b in range(size):
        track[b, 0] = v[b]
    recur(M, drive, track, size, count)
    taken = count
    for j in range(k):
        add_states(M, track, size + j, size, taken, drive[size + j])
        taken = steps_off(track[n + j], drive[size + j], taken, low[j], high[j])
    if taken == 0:
        return 0
    take_steps(M, track, drive, hot, size, first, taken, v, out)
    for j in range(k):
        ask[j] = v[n + j]
        note_path(st[j], track[n + j], drive[hot + 1 + j], taken)
    return taken


@compiled
def held_steps(
    W: Any,
    uc: Any,
    first: int,
    count: int,
    v: Any,
    ask: Any,
    high: Any,
    st: Any,
    track: Any,
    drive: Any,
    out: Any,
) -> int:
    """Take up to ``count`` steps in which every op-amp stays at the rail it is at; how many were taken."""
    k = ask.shape[0]
    rows = W.shape[0]
    n = rows - 3 * k - 1
    hot = n + 2 * k
    for a in range(rows):
        constant = 0.0
        for j in range(k):
            constant += (W[a, n + j] + W[a, n + k + 3 + j] + W[a, n + 2 * k + 3 + j]) * v[n + j]
        signal_part(W, n + k, uc, first, count, constant, a, drive[a])
    for b in range(n):
        track[b, 0] = v[b]
    recur(W, drive, track, n, count)
    taken = count
    for j in range(k):
        end, mean = drive[n + j], drive[n + k + j]
        add_states(W, track, n + j, n, taken, end)
        add_states(W, track, n + k + j, n, taken, mean)
        side = 1.0 if v[n + j] == high[j] else -1.0
        taken = steps_at(ask[j], end, mean, taken, v[n + j], side)
    if taken == 0:
        return 0
    take_steps(W, track, drive, hot, n, first, taken, v, out)
    for j in range(k):
        ask[j] = drive[n + j, taken - 1]
        most = st[j, CURRENT]
        da = drive[hot + 1 + j]
        for i in range(taken):
            current = abs(da[i])
            most = current if current > most else most
        st[j, CURRENT] = most
        st[j, CLIPPED] += taken
    return taken


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
    at: int,
    leg_steps: int,
    free_now: Any,
    bound_now: Any,
    work: Any,
    matrix: Any,
    direction: Any,
    row: Any,
    track: Any,
    drive: Any,
    log: Any,
    written: Any,
) -> None:
    """Run the circuit over ``steps`` steps for every channel.

    While no op-amp limits, and while all of them stay at a rail, many steps are taken at a time: what the signal
    adds to every row first, then the states one after the other, then the rows that no state depends on. A step in
    which an op-amp comes to a limit or leaves it is solved for itself, and so is every step while a part glides.

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
    at, leg_steps : int
        Steps that the glide has taken, steps between its way stations; ``leg_steps`` is 0 without a glide.
    free_now, bound_now : (r, n + k + 3), (r, n + 3k + 3)
        Room for the matrices between two way stations.
    work, matrix, direction, row, track, drive
        Room: (5, 2k), (2k, 2k), (2k,), (r,), (n + k, CHUNK + 1), (r, CHUNK).
    log, written : (m, LOG), (2,) int64
        Receives visits to limits while no part glides, see ``visit_kernels``, their count, and the steps run; what
        finds no room is left out, so m = 0 for none, and c k rows a step for all.
    """
    channels, k = asked.shape
    n = state.shape[1] - 3 * k - 3
    rows = log.shape[0] if leg_steps == 0 else 0
    for c in range(channels):
        v, uc, ask, lim, out, st = state[c], u[c], asked[c], limited[c], mean_out[c], stats[c]
        done = 0
        span = CHUNK
        while done < steps:
            count = min(span, steps - done)
            taken = 0
            if leg_steps == 0:
                limits = 0
                for j in range(k):
                    limits += 1 if lim[j] else 0
                if limits == 0:
                    taken = free_steps(free[0], uc, done, count, v, ask, low, high, st, track, drive, out)
                elif limits == k:
                    taken = held_steps(bound[0], uc, done, count, v, ask, high, st, track, drive, out)
                done += taken
                if taken == count:
                    span = min(2 * span, CHUNK)
                    continue
                count = 1
                span = max(16, span // 2)
            logs = written[0] + k <= rows
            if logs:
                for j in range(k):
                    begin_row(log[written[0] + j], written[1] + done, c, j, RAIL if lim[j] else 0, st[j])
            checked_steps(
                free,
                bound,
                at,
                leg_steps,
                uc,
                done,
                count,
                v,
                ask,
                lim,
                low,
                high,
                st,
                free_now,
                bound_now,
                work,
                matrix,
                direction,
                row,
                out,
            )
            if logs:
                kept = written[0]
                for j in range(k):
                    line = log[written[0] + j]
                    if end_row(line, RAIL if lim[j] else 0, v[n + j], np.inf, np.inf, st[j]):
                        put_row(log[kept], line)
                        kept += 1
                written[0] = kept
            done += count
    written[1] += steps
