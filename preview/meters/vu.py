"""The VU meter: a needle that a step of 1 kHz brings to 99 % in 300 ms, then 1.25 % too far [IEC 60268], part 17."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import movement, movement_step
from preview.meters.intake import CHUNK_FRAMES, Intake, interpolator
from preview.meters.reading import VuReading
from preview.values.levels import ratio_db, vrms_from_dbu

__all__ = ["ZERO_VU_VRMS", "VuMeter"]

ZERO_VU_VRMS = vrms_from_dbu(4.0)
"""0 VU is +4 dBu, 1.228 V rms."""

RMS_OF_SINE = math.pi / (2.0 * math.sqrt(2.0))
"""RMS of a sine whose rectified mean is 1; the scale is marked with it."""

RISE_S, RISE_RATIO, OVERSHOOT_RATIO = 0.3, 0.99, 0.0125


class VuMeter:
    """Mean of the rectified signal in volts, as a needle shows it.

    The signal is rectified at several times the sample rate, as it is between its samples.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    reference_vrms : float
        RMS of the sine that reads 0 VU [V rms].
    """

    def __init__(self, sample_rate_hz: float, channels: int, *, reference_vrms: float = ZERO_VU_VRMS) -> None:
        self._reference_vrms = reference_vrms
        self._taps = interpolator(sample_rate_hz)
        self._room = np.zeros((len(self._taps), CHUNK_FRAMES))
        self._intake = Intake(channels, past=self._taps.shape[1])
        self._step = movement_step(*movement(RISE_S, RISE_RATIO, OVERSHOOT_RATIO), 1.0 / sample_rate_hz)
        self._state, self._highest = np.zeros((channels, 2)), np.zeros(channels)
        self.feed(np.zeros((1, channels)))  # compiles

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.move_needle(
                take.rows, take.first, count, self._taps, self._room, self._step, self._state, self._highest
            )

    def read(self) -> VuReading:
        """The present reading."""
        level = np.maximum(self._state[:, 0], 0.0) * RMS_OF_SINE
        return VuReading(
            level_vrms=tuple(level.tolist()),
            max_vrms=tuple((self._highest * RMS_OF_SINE).tolist()),
            vu=tuple(ratio_db(v / self._reference_vrms) for v in level.tolist()),
            reference_vrms=self._reference_vrms,
        )

    def reset(self) -> None:
        """Needle at rest."""
        self._intake.reset()
        self._state.fill(0.0)
        self._highest.fill(0.0)
