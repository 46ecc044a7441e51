"""The sample loops of the meters, compiled; no module state that the loops read, no fast-math.

Shapes: c channels, k second-order sections, p phases of the interpolator. ``rows`` (c, first + room) has a
channel a row; ``count`` frames from column ``first`` on are new, what stands before them is their past.
Everything is changed in place; nothing allocates. Arithmetic goes frame by frame in one fixed order, so that a
reading does not depend on how the signal is cut. What has decayed below ``TINY`` is set to 0: numbers near the
smallest that float64 can hold are a hundred times slower.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled

TINY = 1e-100
HUGE_V = 1e100
"""A sample beyond this is no voltage; it counts as 0 V, as one that is not a number does."""

FEW_FRAMES = 32
"""Frames that the true peak meter looks at together where it may pass over them."""

BLOCKS_PER_S, GATING_BLOCKS, MOMENTARY_BLOCKS, SHORT_TERM_BLOCKS = 100, 10, 40, 300
"""Loudness: blocks of 10 ms, gating every 100 ms, windows of 400 ms and of 3 s [ITU 1770]."""

GATE_LUFS, BIN_LU, OFFSET_DB = -70.0, 0.01, -0.691
"""Absolute gate, width of a bin of the histograms, and the constant of the loudness formula [ITU 1770]."""

# columns of the clip log, and of what it keeps on each channel
CHANNEL, SIDE, START, FRAMES, LOG_COLUMNS = 0, 1, 2, 3, 4
NOW_SIDE, NOW_START, NOW_FRAMES, VISITS, CLIPPED, STATE_COLUMNS = 0, 1, 2, 3, 4, 5


@compiled
def clean_rows(rows: Any, first: int, count: int) -> None:
    """Set to 0 what is not a voltage."""
    for c in range(rows.shape[0]):
        for i in range(first, first + count):
            if not abs(rows[c, i]) < HUGE_V:
                rows[c, i] = 0.0


@compiled
def weight_rows(rows: Any, first: int, count: int, sections: Any, state: Any) -> None:
    """Filter by ``sections`` (k, 5: b0 b1 b2 a1 a2) in transposed direct form II; ``state`` (c, k, 2)."""
    for c in range(rows.shape[0]):
        for k in range(sections.shape[0]):
            b0, b1, b2 = sections[k, 0], sections[k, 1], sections[k, 2]
            a1, a2 = sections[k, 3], sections[k, 4]
            s1, s2 = state[c, k, 0], state[c, k, 1]
            for i in range(first, first + count):
                x = rows[c, i]
                y = b0 * x + s1
                s1 = (b1 * x + s2) - a1 * y
                s2 = b2 * x - a2 * y
                if abs(y) < TINY and abs(s1) < TINY and abs(s2) < TINY:
                    y, s1, s2 = 0.0, 0.0, 0.0
                rows[c, i] = y
            state[c, k, 0], state[c, k, 1] = s1, s2


@compiled
def shift_rows(rows: Any, past: int, count: int) -> None:
    """The last ``past`` columns of the ``past + count`` in use become the past of what comes next."""
    for c in range(rows.shape[0]):
        for i in range(past):
            rows[c, i] = rows[c, count + i]


@compiled
def interpolate(row: Any, first: int, count: int, taps: Any, result: Any) -> None:
    """``result[p, i] = sum_j taps[p, j] row[first + i - j]``; phase 0 is the sample in the middle itself.

    The taps, a multiple of 8, go 8 at a time.
    """
    middle = first - taps.shape[1] // 2
    for i in range(count):
        result[0, i] = row[middle + i]
    for p in range(1, taps.shape[0]):
        to = result[p, :count]
        for i in range(count):
            to[i] = 0.0
        for j in range(0, taps.shape[1], 8):
            t = taps[p, j : j + 8]
            t0, t1, t2, t3, t4, t5, t6, t7 = t[0], t[1], t[2], t[3], t[4], t[5], t[6], t[7]
            s = row[first - j - 7 : first - j + count]
            for i in range(count):
                early = (t0 * s[i + 7] + t1 * s[i + 6]) + (t2 * s[i + 5] + t3 * s[i + 4])
                to[i] += early + ((t4 * s[i + 3] + t5 * s[i + 2]) + (t6 * s[i + 1] + t7 * s[i]))


@compiled
def note_peaks(rows: Any, first: int, count: int, fall: float, shown: Any, highest: Any, lowest: Any) -> None:
    """Magnitude that rises at once and falls by the factor ``fall`` a frame; extremes of either sign; (c,) each."""
    for c in range(rows.shape[0]):
        y, high, low = shown[c], highest[c], lowest[c]
        for i in range(first, first + count):
            x = rows[c, i]
            y *= fall
            if abs(x) > y:
                y = abs(x)
            elif y < TINY:
                y = 0.0
            if x > high:
                high = x
            if x < low:
                low = x
        shown[c], highest[c], lowest[c] = y, high, low


@compiled
def largest_of(row: Any, first: int, end: int) -> float:
    """Largest magnitude in the columns from ``first`` to before ``end``, four lanes at a time."""
    a0 = a1 = a2 = a3 = 0.0
    whole = end - (end - first) % 4
    for i in range(first, whole, 4):
        v0, v1, v2, v3 = abs(row[i]), abs(row[i + 1]), abs(row[i + 2]), abs(row[i + 3])
        a0 = v0 if v0 > a0 else a0
        a1 = v1 if v1 > a1 else a1
        a2 = v2 if v2 > a2 else a2
        a3 = v3 if v3 > a3 else a3
    for i in range(whole, end):
        a0 = max(a0, abs(row[i]))
    return max(max(a0, a1), max(a2, a3))


@compiled
def note_true_peaks(
    rows: Any, first: int, count: int, taps: Any, room: Any, fall: float, shown: Any, highest: Any
) -> None:
    """As ``note_peaks``, with what lies between the samples; ``room`` (p, count).

    What is so low that nothing between it can change a reading is passed over. A ``fall`` of 0 asks for the highest
    alone: then it is passed over a few frames at a time.
    """
    reach = 1.0  # of the interpolator, over the largest of its samples
    for p in range(taps.shape[0]):
        sum_of_taps = 0.0
        for j in range(taps.shape[1]):
            sum_of_taps += abs(taps[p, j])
        reach = max(reach, sum_of_taps)
    for c in range(rows.shape[0]):
        y, high = shown[c], highest[c]
        if fall == 0.0:
            for start in range(first, first + count, FEW_FRAMES):
                few = min(FEW_FRAMES, first + count - start)
                if reach * largest_of(rows[c], start - taps.shape[1], start + few) <= high:
                    continue
                interpolate(rows[c], start, few, taps, room)
                for i in range(few):
                    high = max(high, abs(rows[c, start + i]))
                    for p in range(taps.shape[0]):
                        high = max(high, abs(room[p, i]))
            highest[c] = high
            continue
        if reach * largest_of(rows[c], 0, first + count) <= y * fall**count * (1.0 - 1e-9):
            for _ in range(count):
                y *= fall
            shown[c] = y if y >= TINY else 0.0
            continue
        interpolate(rows[c], first, count, taps, room)
        for i in range(count):
            most = abs(rows[c, first + i])  # at once; what lies around it comes half the taps later
            for p in range(taps.shape[0]):
                if abs(room[p, i]) > most:
                    most = abs(room[p, i])
            y *= fall
            if most > y:
                y = most
            elif y < TINY:
                y = 0.0
            if most > high:
                high = most
        shown[c], highest[c] = y, high


@compiled
def note_plain(volts: Any, highest: Any, total: Any, square: Any) -> None:
    """Largest magnitude, sum and sum of squares of each channel of ``volts`` (frames, c); (c,) each."""
    for c in range(volts.shape[1]):
        high, added, power = highest[c], total[c], square[c]
        for i in range(volts.shape[0]):
            x = volts[i, c]
            high = abs(x) if abs(x) > high else high
            added += x
            power += x * x
        highest[c], total[c], square[c] = high, added, power


@compiled
def note_squares(
    rows: Any, first: int, count: int, step: float, square: Any, highest: Any, total: Any
) -> None:
    """Exponential mean square ``y += step (x^2 - y)``, its highest, and the plain sum of squares; (c,) each."""
    for c in range(rows.shape[0]):
        y, high, added = square[c], highest[c], total[c]
        for i in range(first, first + count):
            x2 = rows[c, i] * rows[c, i]
            added += x2
            y += step * (x2 - y)
            if y < TINY:
                y = 0.0
            if y > high:
                high = y
        square[c], highest[c], total[c] = y, high, added


@compiled
def note_means(rows: Any, first: int, count: int, step: float, mean: Any, total: Any) -> None:
    """Two one-pole low-passes in a row, ``mean`` (c, 2), and the plain sum, ``total`` (c,)."""
    for c in range(rows.shape[0]):
        y, z, added = mean[c, 0], mean[c, 1], total[c]
        for i in range(first, first + count):
            x = rows[c, i]
            added += x
            y += step * (x - y)
            z += step * (y - z)
            if abs(y) < TINY and abs(z) < TINY:
                y, z = 0.0, 0.0
        mean[c, 0], mean[c, 1], total[c] = y, z, added


@compiled
def block_end(block: int, block_frames: float) -> int:
    """First frame after a block of loudness, counted from the start."""
    return int(np.floor((block + 1) * block_frames + 0.5))


@compiled
def loudness_bin(power: float, bins: int) -> int:
    """Bin of a weighted mean square; -1 at or below the absolute gate."""
    if power <= 0.0:
        return -1
    above = OFFSET_DB + 10.0 * np.log10(power) - GATE_LUFS
    return min(int(above / BIN_LU), bins - 1) if above > 0.0 else -1


@compiled
def end_block(
    place: Any, block_frames: float, sums: Any, power: Any, highest: Any, counts: Any, powers: Any
) -> None:
    """Bring the windows up to date at the end of a block; see ``note_loudness``."""
    block = place[1]
    ended = block_end(block, block_frames)
    for window in range(2):
        blocks = MOMENTARY_BLOCKS if window == 0 else SHORT_TERM_BLOCKS
        added = 0.0
        for b in range(block - blocks + 1, block + 1):
            added += sums[b % SHORT_TERM_BLOCKS]
        power[window] = added / (ended - block_end(block - blocks, block_frames))
        highest[window] = max(highest[window], power[window])
        if block + 1 >= blocks and (block + 1) % GATING_BLOCKS == 0:
            b = loudness_bin(power[window], counts.shape[1])
            if b >= 0:
                counts[window, b] += 1
                powers[window, b] += power[window]
    place[1] = block + 1


@compiled
def note_loudness(
    rows: Any,
    first: int,
    count: int,
    gains: Any,
    block_frames: float,
    place: Any,
    sums: Any,
    power: Any,
    highest: Any,
    counts: Any,
    powers: Any,
) -> None:
    """Sum the weighted squares of all channels into blocks of 10 ms.

    Parameters
    ----------
    gains : (c,)
        Weight of each channel, over the square of full scale.
    place : (2,)
        Frames and blocks taken so far.
    sums : (SHORT_TERM_BLOCKS + 1,)
        Ring of the last blocks; last the one under way.
    power, highest : (2,)
        Mean square in the windows of 400 ms and 3 s, and the highest of each.
    counts, powers : (2, bins)
        Histograms over loudness: windows in each bin, and the sum of their mean squares.
    """
    frame, added = place[0], sums[SHORT_TERM_BLOCKS]
    end = block_end(place[1], block_frames)
    for i in range(first, first + count):
        for c in range(rows.shape[0]):
            added += gains[c] * (rows[c, i] * rows[c, i])
        frame += 1
        if frame == end:
            sums[place[1] % SHORT_TERM_BLOCKS] = added
            added = 0.0
            end_block(place, block_frames, sums, power, highest, counts, powers)
            end = block_end(place[1], block_frames)
    place[0], sums[SHORT_TERM_BLOCKS] = frame, added


@compiled
def move_needle(
    rows: Any, first: int, count: int, taps: Any, room: Any, step: Any, state: Any, highest: Any
) -> None:
    """A movement of second order driven by the rectified signal; ``room`` (p, count), ``highest`` (c,).

    ``step`` (2, 3) takes ``state`` (c, 2: deflection, speed) and the mean over a frame one frame on.
    """
    phases = taps.shape[0]
    for c in range(rows.shape[0]):
        interpolate(rows[c], first, count, taps, room)
        at, speed, high = state[c, 0], state[c, 1], highest[c]
        for i in range(count):
            u = 0.0
            for p in range(phases):
                u += abs(room[p, i])
            u /= phases
            was = at
            at = step[0, 0] * was + step[0, 1] * speed + step[0, 2] * u
            speed = step[1, 0] * was + step[1, 1] * speed + step[1, 2] * u
            if abs(at) < TINY and abs(speed) < TINY:
                at, speed = 0.0, 0.0
            if at > high:
                high = at
        state[c, 0], state[c, 1], highest[c] = at, speed, high


@compiled
def charge_pair(
    rows: Any,
    first: int,
    count: int,
    taps: Any,
    room: Any,
    charge: Any,
    leak: float,
    share: float,
    state: Any,
    highest: Any,
) -> None:
    """Two capacitors charged through a rectifier, ``charge`` (2,) a step, else leaking alike, read as one voltage.

    ``state`` (c, 2); the reading is ``share`` of the first and the rest of the second; ``room`` (p, count).
    """
    for c in range(rows.shape[0]):
        interpolate(rows[c], first, count, taps, room)
        y, z, high = state[c, 0], state[c, 1], highest[c]
        for i in range(count):
            for p in range(taps.shape[0]):
                u = abs(room[p, i])
                y += charge[0] * (u - y) if u > y else -leak * y
                z += charge[1] * (u - z) if u > z else -leak * z
            if y < TINY:
                y = 0.0
            if z < TINY:
                z = 0.0
            high = max(high, share * y + (1.0 - share) * z)
        state[c, 0], state[c, 1], highest[c] = y, z, high


@compiled
def charge_chain(
    rows: Any,
    first: int,
    count: int,
    taps: Any,
    room: Any,
    charge: Any,
    leak: Any,
    state: Any,
    highest: Any,
) -> None:
    """Two rectifying detectors in a row, the second fed by the first; ``charge``, ``leak`` (2,) a step.

    ``state`` (c, 2); the reading is the second; ``room`` (p, count).
    """
    for c in range(rows.shape[0]):
        interpolate(rows[c], first, count, taps, room)
        y, z, high = state[c, 0], state[c, 1], highest[c]
        for i in range(count):
            for p in range(taps.shape[0]):
                u = abs(room[p, i])
                y += charge[0] * (u - y) if u > y else -leak[0] * y
                z += charge[1] * (y - z) if y > z else -leak[1] * z
            if y < TINY:
                y = 0.0
            if z < TINY:
                z = 0.0
            high = max(high, z)
        state[c, 0], state[c, 1], highest[c] = y, z, high


@compiled
def end_visit(now: Any, peak_v: Any, c: int, min_frames: int, log: Any, log_v: Any) -> None:
    """Write down the visit to a limit that ends on channel ``c``, where it was long enough and there is room.

    ``now`` has a row a channel and one more, whose first column counts the rows of the log in use.
    """
    if now[c, NOW_FRAMES] >= min_frames:
        now[c, VISITS] += 1
        now[c, CLIPPED] += now[c, NOW_FRAMES]
        row = now[-1, 0]
        if row < log.shape[0]:
            log[row, CHANNEL], log[row, SIDE] = c, now[c, NOW_SIDE]
            log[row, START], log[row, FRAMES] = now[c, NOW_START], now[c, NOW_FRAMES]
            log_v[row] = peak_v[c]
            now[-1, 0] = row + 1
    now[c, NOW_SIDE] = 0


@compiled
def note_visits(
    rows: Any,
    first: int,
    count: int,
    high_v: float,
    low_v: float,
    min_frames: int,
    now: Any,
    peak_v: Any,
    log: Any,
    log_v: Any,
) -> None:
    """Log each visit to a limit: from the first frame at or beyond it to the last.

    Parameters
    ----------
    now : (c + 1, STATE_COLUMNS)
        The visit under way and the sums of each channel; last the rows of the log in use and the frames taken.
    peak_v : (c,)
        Farthest voltage of the visit under way.
    log, log_v : (n, LOG_COLUMNS), (n,)
        Visits in the order of their ends, and their farthest voltages.
    """
    frame = now[-1, 1]
    for i in range(first, first + count):
        for c in range(rows.shape[0]):
            x = rows[c, i]
            side = 1 if x >= high_v else (-1 if x <= low_v else 0)
            if now[c, NOW_SIDE] != 0 and side != now[c, NOW_SIDE]:
                end_visit(now, peak_v, c, min_frames, log, log_v)
            if side != 0:
                if now[c, NOW_SIDE] == 0:
                    now[c, NOW_SIDE], now[c, NOW_START], now[c, NOW_FRAMES] = side, frame, 0
                    peak_v[c] = x
                now[c, NOW_FRAMES] += 1
                if side * x > side * peak_v[c]:
                    peak_v[c] = x
        frame += 1
    now[-1, 1] = frame
