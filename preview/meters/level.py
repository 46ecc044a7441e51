"""The level meter: sample peak, peak hold and RMS of each channel, in volts."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.meters.reading import LevelReading

__all__ = ["RMS_TIME_S", "LevelMeter"]

RMS_TIME_S = 0.3
"""Time constant of the RMS: after a step the mean square has come 63 % of the way [s]."""

_CHUNK_FRAMES = 4096


class LevelMeter:
    """Peak, hold and RMS of a signal in volts.

    The mean square follows ``y += a (x^2 - y)`` frame by frame with ``a = 1 - exp(-1 / (RMS_TIME_S fs))``;
    its value after a chunk is one weighted sum, so the result does not depend on how the signal is cut.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        step = -1.0 / (RMS_TIME_S * sample_rate_hz)
        self._decay = np.exp(step * np.arange(_CHUNK_FRAMES + 1))
        self._weights = -math.expm1(step) * self._decay[_CHUNK_FRAMES - 1 :: -1]
        self._scratch = np.zeros((channels, _CHUNK_FRAMES))  # one row a channel: three times as fast
        self._chunk_peak = np.zeros(channels)
        self._chunk_square = np.zeros(channels)
        self._mean_square = np.zeros(channels)
        self._peak = np.zeros(channels)
        self._hold = np.zeros(channels)
        self._read_before = np.zeros(channels)
        self._reported = np.zeros(channels)
        self.non_finite_count = 0
        """Samples that were not finite; they count as 0 V."""

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        for start in range(0, len(volts), _CHUNK_FRAMES):
            self._feed_chunk(volts[start : start + _CHUNK_FRAMES])

    def _feed_chunk(self, volts: NDArray[np.float64]) -> None:
        frames = len(volts)
        scratch = self._scratch[:, :frames]
        np.abs(volts.T, out=scratch)
        chunk_peak = self._chunk_peak
        np.maximum.reduce(scratch, axis=1, out=chunk_peak)
        if not np.isfinite(chunk_peak).all():
            bad = ~np.isfinite(scratch)
            self.non_finite_count += int(np.count_nonzero(bad))
            scratch[bad] = 0.0
            np.maximum.reduce(scratch, axis=1, out=chunk_peak)
        peak, hold = self._peak, self._hold  # the reader may exchange them at any moment
        np.maximum(peak, chunk_peak, out=peak)
        np.maximum(hold, chunk_peak, out=hold)
        np.multiply(scratch, scratch, out=scratch)
        np.dot(scratch, self._weights[_CHUNK_FRAMES - frames :], out=self._chunk_square)
        self._mean_square *= self._decay[frames]
        self._mean_square += self._chunk_square

    def read(self) -> LevelReading:
        """The present reading; the peak starts anew. May be called from another thread than ``feed``."""
        taken = self._peak
        self._peak = np.zeros_like(taken)
        # A feed that had picked up the former array just before it was exchanged writes to it afterwards.
        late = np.where(self._read_before > self._reported, self._read_before, 0.0)
        self._read_before, self._reported = taken, taken.copy()
        return LevelReading(
            peak_v=tuple(np.maximum(self._reported, late).tolist()),
            hold_v=tuple(self._hold.tolist()),
            rms_v=tuple(np.sqrt(self._mean_square).tolist()),
        )

    def clear_hold(self) -> None:
        """Start the hold anew."""
        self._hold = np.zeros_like(self._hold)

    def reset(self) -> None:
        """Back to silence."""
        for array in (self._mean_square, self._peak, self._hold, self._read_before, self._reported):
            array.fill(0.0)
