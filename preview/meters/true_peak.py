"""The true peak meter: the peak between the samples, by oversampling [ITU 1770], annex 2."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import fall_per_frame
from preview.meters.intake import CHUNK_FRAMES, Intake, interpolator
from preview.meters.reading import TruePeakReading
from preview.meters.sample_peak import FALL_DB_PER_S

__all__ = ["TruePeakMeter"]


class TruePeakMeter:
    """Largest magnitudes of a signal in volts, between its samples too.

    A sample counts at once, what lies around it 20 frames later. The standard attenuates by 12 dB first, for integer
    arithmetic; here nothing overflows.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    only_peak : bool
        Whether ``shown_v`` is not wanted; much of a signal is then too low to be looked at.
    chunk_frames : int
        Most frames taken at a time; the reading does not depend on it.
    """

    def __init__(
        self,
        sample_rate_hz: float,
        channels: int,
        *,
        only_peak: bool = False,
        chunk_frames: int = CHUNK_FRAMES,
    ) -> None:
        self._fall = 0.0 if only_peak else fall_per_frame(FALL_DB_PER_S, sample_rate_hz)
        self._taps = interpolator(sample_rate_hz)
        self._room = np.zeros((len(self._taps), chunk_frames))
        self._intake = Intake(channels, past=self._taps.shape[1], chunk_frames=chunk_frames)
        self._shown, self._peak = np.zeros(channels), np.zeros(channels)
        self.feed(np.zeros((1, channels)))  # compiles

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_true_peaks(
                take.rows, take.first, count, self._taps, self._room, self._fall, self._shown, self._peak
            )

    def read(self) -> TruePeakReading:
        """The present reading."""
        return TruePeakReading(tuple(self._shown.tolist()), tuple(self._peak.tolist()))

    def reset(self) -> None:
        """Back to silence."""
        self._intake.reset()
        self._shown.fill(0.0)
        self._peak.fill(0.0)
