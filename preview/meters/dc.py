"""The DC meter: the mean, of late and since the start."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import taken_per_step
from preview.meters.intake import Intake
from preview.meters.reading import DcReading

__all__ = ["DC_TIME_S", "DcMeter"]

DC_TIME_S = 0.5
"""Time constant of each of the two low-passes: 20 Hz is 72 dB down [s]."""


class DcMeter:
    """DC of a signal in volts.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self._step = taken_per_step(DC_TIME_S, sample_rate_hz)
        self._intake = Intake(channels)
        self._mean, self._total = np.zeros((channels, 2)), np.zeros(channels)
        self._frames = 0
        self.feed(np.zeros((1, channels)))  # compiles
        self.reset()

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_means(take.rows, 0, count, self._step, self._mean, self._total)
            self._frames += count

    def read(self) -> DcReading:
        """The present reading."""
        mean = self._total / max(self._frames, 1)
        return DcReading(tuple(self._mean[:, 1].tolist()), tuple(mean.tolist()))

    def reset(self) -> None:
        """Back to the start."""
        self._mean.fill(0.0)
        self._total.fill(0.0)
        self._frames = 0
