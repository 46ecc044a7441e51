"""Levels of a signal over a whole recording: peaks, RMS, crest factor, DC, loudness."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.dsp.block import Volts
from preview.engine.check.results import LevelsRead
from preview.meters import kernels
from preview.meters.loudness import LoudnessMeter
from preview.meters.true_peak import TruePeakMeter
from preview.values.levels import ratio_db

__all__ = ["LOUDNESS_FROM_HZ", "Levels"]

LOUDNESS_FROM_HZ = 8_000.0
"""Lowest sample rate at which loudness means anything."""
CHUNK_FRAMES = 2400
"""Frames that the meters take at a time: fewer calls than live."""


class Levels:
    """Takes a signal block by block.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate [Hz].
    channels : int
        Channels.
    full_scale_v : float
        Volts of a sample of 1.0, from which loudness is counted.
    """

    def __init__(self, sample_rate_hz: float, channels: int, full_scale_v: float) -> None:
        self._true_peak = TruePeakMeter(sample_rate_hz, channels, only_peak=True, chunk_frames=CHUNK_FRAMES)
        self._loudness: LoudnessMeter | None = None
        if sample_rate_hz >= LOUDNESS_FROM_HZ:
            self._loudness = LoudnessMeter(
                sample_rate_hz, channels, full_scale_v=full_scale_v, chunk_frames=CHUNK_FRAMES
            )
        self._peak: NDArray[np.float64] = np.zeros(channels)
        self._latest = np.zeros(channels)
        self._sum, self._square = np.zeros(channels), np.zeros(channels)
        self.frames = 0
        """Frames taken."""

    @property
    def peak_v(self) -> float:
        """Largest magnitude of a sample so far [V]."""
        return float(self._peak.max())

    def add(self, volts: Volts) -> float:
        """Take the next frames; the largest magnitude in them [V]."""
        if not len(volts):
            return 0.0
        self._latest.fill(0.0)
        kernels.note_plain(volts, self._latest, self._sum, self._square)
        np.maximum(self._peak, self._latest, out=self._peak)
        self.frames += len(volts)
        self._true_peak.feed(volts)
        if self._loudness is not None:
            self._loudness.feed(volts)
        return float(self._latest.max())

    def read(self) -> LevelsRead:
        """The levels of all that was taken."""
        frames = max(self.frames, 1)
        rms = np.sqrt(self._square / frames)
        mean = self._sum / frames
        # the meter hears what lies around the last samples once silence follows
        self._true_peak.feed(np.zeros((64, len(mean))))
        crest = [ratio_db(p / r) for p, r in zip(self._peak.tolist(), rms.tolist(), strict=True) if r > 0.0]
        loudness = None if self._loudness is None else self._loudness.read()
        return LevelsRead(
            peak_v=self.peak_v,
            true_peak_v=max(self._true_peak.read().peak_v),
            rms_v=float(rms.max()),
            crest_db=max(crest, default=math.nan),
            dc_v=float(mean[np.abs(mean).argmax()]),
            loudness_lufs=math.nan if loudness is None else loudness.integrated_lufs,
            loudness_range_lu=math.nan if loudness is None else loudness.range_lu,
        )
