"""Random numbers for noise, compiled: each is a function of seed, step and place alone, so cutting changes nothing."""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled


@compiled
def evenly(place: Any) -> Any:
    """A number between -sqrt 3 and sqrt 3, of unit variance; after the mixing function of [SteeleLeaFlood2014]."""
    z = place * np.uint64(0x9E3779B97F4A7C15)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    z = z ^ (z >> np.uint64(31))
    return np.float64(z >> np.uint64(11)) * (2.0 * np.sqrt(3.0) / 9007199254740992.0) - np.sqrt(3.0)


@compiled
def fill_noise(
    seed: int,
    channel: int,
    at: int,
    steps: int,
    hold: int,
    white: Any,
    slow: Any,
    levels: Any,
    poles: Any,
    zeros: Any,
    memory: Any,
    result: Any,
) -> None:
    """What noise adds to the states and to the output's mean in each step.

    Parameters
    ----------
    seed, channel, at, steps : int
        Which numbers; ``at`` is the first step's place since the beginning.
    hold : int
        Steps between two values of the 1/f parts.
    white : (N + 1, N + 1)
        Root of the covariance that white noise leaves after a step.
    slow : (N + 1, f)
        What one volt or ampere of each 1/f source leaves after a step.
    levels : (f,)
        Strength of each.
    poles, zeros : (p,)
        Sections that make white noise fall by 10 dB a decade of its power.
    memory : (f, p + 1, 2)
        State of the sections, and the present values.
    result : (N + 1, steps or more)
        Receives it.
    """
    rows, sources = slow.shape
    count = poles.shape[0]
    stream = np.uint64(seed) * np.uint64(0x9E3779B97F4A7C15) + np.uint64(channel) * np.uint64(
        0xD1B54A32D192ED03
    )
    each = np.uint64(rows + sources)
    for i in range(steps):
        place = stream + np.uint64(at + i) * each
        for r in range(rows):
            result[r, i] = 0.0
        for j in range(rows):
            x = evenly(place + np.uint64(j))
            for r in range(rows):
                result[r, i] += white[r, j] * x
        if sources and (at + i) % hold == 0:
            for f in range(sources):
                x = evenly(place + np.uint64(rows + f))
                for p in range(count):  # y = x - zero x' + pole y'
                    y = x - zeros[p] * memory[f, p, 0] + poles[p] * memory[f, p, 1]
                    memory[f, p, 0], memory[f, p, 1] = x, y
                    x = y
                memory[f, count, 0] = x * levels[f]
        for f in range(sources):
            x = memory[f, count, 0]
            for r in range(rows):
                result[r, i] += slow[r, f] * x
