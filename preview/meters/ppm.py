"""Peak programme meters of types I, IIa and IIb [IEC 60268], part 10.

The standard says what bursts of 5 kHz read and how fast the reading returns. Here a rectifier charges a capacitor
(type I), or two of which the reading is the mean by shares (type II), through a resistor each; they leak so that the
return is as the standard says. The time constants of charging are fitted to the standard's bursts, the one of the
integration time exactly: type I 10, 5, 3, 0.4 ms read -0.7, -2.0, -3.6, -15.6 dB (wanted -1, -2, -4, -15), type II
100, 10, 5, 1.5, 0.5 ms read 0.0, -2.0, -3.9, -9.2, -16.4 dB (wanted 0, -2, -4, -9, -17).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from preview.meters import kernels
from preview.meters.ballistics import steady_ratio, taken_per_step
from preview.meters.intake import CHUNK_FRAMES, Intake, interpolator
from preview.meters.reading import PpmReading
from preview.values.levels import dbu_from_vrms

__all__ = ["PpmMeter", "PpmType"]

PpmType = Literal["I", "IIa", "IIb"]


@dataclass(frozen=True, slots=True)
class _Ballistics:
    charge_s: tuple[float, float]
    """Time constants of charging [s]."""
    share: float
    """Share of the first in the reading."""
    return_db: float
    return_s: float
    """The reading falls by so many dB in so many seconds."""


_ONE = _Ballistics((1.36e-3, 1.36e-3), 1.0, 20.0, 1.7)
_TWO = _Ballistics((1.13e-3, 5.0e-3), 0.51, 24.0, 2.8)
_BALLISTICS: dict[PpmType, _Ballistics] = {"I": _ONE, "IIa": _TWO, "IIb": _TWO}


def mark_of(kind: PpmType, level_vrms: float) -> float:
    """Reading on the scale: I 0 dB is +6 dBu, IIa mark 4 is 0 dBu with 4 dB a mark, IIb 0 dB (TEST) is 0 dBu."""
    dbu = dbu_from_vrms(level_vrms)
    if kind == "I":
        return dbu - 6.0
    return 4.0 + dbu / 4.0 if kind == "IIa" else dbu


class PpmMeter:
    """Quasi-peak of a signal in volts; a steady sine reads its RMS.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    kind : {"I", "IIa", "IIb"}
        Type of meter.
    """

    def __init__(self, sample_rate_hz: float, channels: int, *, kind: PpmType) -> None:
        self._kind: PpmType = kind
        motion = _BALLISTICS[kind]
        self._taps = interpolator(sample_rate_hz)
        self._room = np.zeros((len(self._taps), CHUNK_FRAMES))
        self._intake = Intake(channels, past=self._taps.shape[1])
        rate = sample_rate_hz * len(self._taps)
        leak_s = motion.return_s / (math.log(10.0) * motion.return_db / 20.0)
        self._charge = np.array([taken_per_step(charge_s, rate) for charge_s in motion.charge_s])
        self._leak = taken_per_step(leak_s, rate)
        self._share = motion.share
        steady = [steady_ratio(charge_s, leak_s) for charge_s in motion.charge_s]
        self._rms = math.sqrt(0.5) / (self._share * steady[0] + (1.0 - self._share) * steady[1])
        self._state, self._highest = np.zeros((channels, 2)), np.zeros(channels)
        self.feed(np.zeros((1, channels)))  # compiles

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.charge_pair(
                take.rows,
                take.first,
                count,
                self._taps,
                self._room,
                self._charge,
                self._leak,
                self._share,
                self._state,
                self._highest,
            )

    def read(self) -> PpmReading:
        """The present reading."""
        level = (self._share * self._state[:, 0] + (1.0 - self._share) * self._state[:, 1]) * self._rms
        return PpmReading(
            level_vrms=tuple(level.tolist()),
            max_vrms=tuple((self._highest * self._rms).tolist()),
            mark=tuple(mark_of(self._kind, v) for v in level.tolist()),
            kind=self._kind,
        )

    def reset(self) -> None:
        """Back to silence."""
        self._intake.reset()
        self._state.fill(0.0)
        self._highest.fill(0.0)
