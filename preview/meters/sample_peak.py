"""The sample peak meter: rises at once, falls 20 dB in 1.7 s, keeps the extremes [IEC 60268], part 18."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import fall_per_frame
from preview.meters.intake import Intake
from preview.meters.reading import PeakReading

__all__ = ["FALL_DB_PER_S", "SamplePeakMeter"]

FALL_DB_PER_S = 20.0 / 1.7
"""Return of a digital peak meter [dB/s]."""


class SamplePeakMeter:
    """Largest samples of a signal in volts.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self._fall = fall_per_frame(FALL_DB_PER_S, sample_rate_hz)
        self._intake = Intake(channels)
        self._shown, self._high, self._low = np.zeros(channels), np.zeros(channels), np.zeros(channels)
        self.feed(np.zeros((1, channels)))  # compiles

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_peaks(take.rows, 0, count, self._fall, self._shown, self._high, self._low)

    def read(self) -> PeakReading:
        """The present reading."""
        return PeakReading(tuple(self._shown.tolist()), tuple(self._high.tolist()), tuple(self._low.tolist()))

    def reset(self) -> None:
        """Back to silence."""
        for array in (self._shown, self._high, self._low):
            array.fill(0.0)
