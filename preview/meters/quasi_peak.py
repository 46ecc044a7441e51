"""The quasi-peak meter for noise: the 468 network and a detector that short bursts move little [ITU 468].

The standard says what single and repeated bursts of 5 kHz read. Two detectors in a row do: the first charges through
a rectifier and leaks, the second follows it. Their time constants are fitted to the standard's tables; no burst uses
more than 0.4 of its limits.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import steady_ratio, taken_per_step
from preview.meters.intake import CHUNK_FRAMES, Intake, interpolator
from preview.meters.reading import QuasiPeakReading
from preview.meters.weighting import Weighting, sections

__all__ = ["QuasiPeakMeter"]

CHARGE_S = (1.55e-3, 0.180)
LEAK_S = (0.430, 0.430)


class QuasiPeakMeter:
    """Weighted quasi-peak of a signal in volts; a steady sine of 1 kHz reads its RMS.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz], from 8 kHz on.
    channels : int
        Number of channels.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self._taps = interpolator(sample_rate_hz)
        self._room = np.zeros((len(self._taps), CHUNK_FRAMES))
        self._intake = Intake(
            channels, past=self._taps.shape[1], sections=sections(Weighting.ITU_468, sample_rate_hz)
        )
        rate = sample_rate_hz * len(self._taps)
        self._charge = np.array([taken_per_step(charge_s, rate) for charge_s in CHARGE_S])
        self._leak = np.array([taken_per_step(leak_s, rate) for leak_s in LEAK_S])
        self._rms = math.sqrt(0.5) / steady_ratio(CHARGE_S[0], LEAK_S[0])
        self._state, self._highest = np.zeros((channels, 2)), np.zeros(channels)
        self.feed(np.zeros((1, channels)))  # compiles

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.charge_chain(
                take.rows,
                take.first,
                count,
                self._taps,
                self._room,
                self._charge,
                self._leak,
                self._state,
                self._highest,
            )

    def read(self) -> QuasiPeakReading:
        """The present reading."""
        level = self._state[:, 1] * self._rms
        return QuasiPeakReading(tuple(level.tolist()), tuple((self._highest * self._rms).tolist()))

    def reset(self) -> None:
        """Back to silence."""
        self._intake.reset()
        self._state.fill(0.0)
        self._highest.fill(0.0)
