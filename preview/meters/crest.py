"""The crest factor: peak over RMS since the start."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.meters.reading import CrestReading
from preview.meters.rms import RmsMeter
from preview.meters.sample_peak import SamplePeakMeter
from preview.values.levels import ratio_db

__all__ = ["CrestMeter"]


class CrestMeter:
    """Crest factor of a signal in volts, by its samples; 1.414 (3.01 dB) for a sine.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self._peak, self._rms = SamplePeakMeter(sample_rate_hz, channels), RmsMeter(sample_rate_hz, channels)

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        self._peak.feed(volts)
        self._rms.feed(volts)

    def read(self) -> CrestReading:
        """The present reading."""
        peak, rms = self._peak.read().peak_v, self._rms.read().mean_rms_v
        ratio = tuple(p / r if r > 0.0 else math.nan for p, r in zip(peak, rms, strict=True))
        return CrestReading(peak, rms, ratio, tuple(ratio_db(r) for r in ratio))

    def reset(self) -> None:
        """Back to the start."""
        self._peak.reset()
        self._rms.reset()
