"""The RMS meter, with a frequency weighting or none.

The reading is in volts RMS. As a level in dBFS it follows AES17: a sine at full scale is 0 dBFS, 3.01 dB more than
its mean square says; ``scale.on_scale`` takes that as an option.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import taken_per_step
from preview.meters.intake import Intake
from preview.meters.reading import RmsReading
from preview.meters.weighting import Weighting, sections

__all__ = ["FAST_S", "SLOW_S", "RmsMeter"]

FAST_S = 0.125
"""Time weighting F [IEC 61672] [s]."""

SLOW_S = 1.0
"""Time weighting S [s]."""


class RmsMeter:
    """RMS of a signal in volts, running and since the start.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    weighting : Weighting, optional
        Frequency weighting.
    time_s : float
        Time constant of the running mean square [s].
    """

    def __init__(
        self,
        sample_rate_hz: float,
        channels: int,
        *,
        weighting: Weighting | None = None,
        time_s: float = FAST_S,
    ) -> None:
        self._weighting, self._time_s = weighting, time_s
        self._step = taken_per_step(time_s, sample_rate_hz)
        self._intake = Intake(
            channels, sections=None if weighting is None else sections(weighting, sample_rate_hz)
        )
        self._square, self._highest, self._total = np.zeros(channels), np.zeros(channels), np.zeros(channels)
        self._frames = 0
        self.feed(np.zeros((1, channels)))  # compiles
        self.reset()

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_squares(take.rows, 0, count, self._step, self._square, self._highest, self._total)
            self._frames += count

    def read(self) -> RmsReading:
        """The present reading."""
        return RmsReading(
            rms_v=tuple(np.sqrt(self._square).tolist()),
            max_rms_v=tuple(np.sqrt(self._highest).tolist()),
            mean_rms_v=tuple(np.sqrt(self._total / max(self._frames, 1)).tolist()),
            time_s=self._time_s,
            weighting="" if self._weighting is None else self._weighting.value,
        )

    def reset(self) -> None:
        """Back to silence."""
        self._intake.reset()
        for array in (self._square, self._highest, self._total):
            array.fill(0.0)
        self._frames = 0
