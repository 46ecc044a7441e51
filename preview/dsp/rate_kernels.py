"""The loops that change the sample rate, compiled. Shapes: c channels."""

from __future__ import annotations

from typing import Any

from preview.compiled import compiled


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
