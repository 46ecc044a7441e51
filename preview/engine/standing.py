"""Howl-round that stands at a limit already: it is told from a held note by making the output quieter for a moment.

What comes round follows the output, down, for as long as that is quieter, and up again; an instrument does not. It is
tried where a steady sound is at a limit, 6 dB for a second and a half at most, three times for one sound; 5 s lie
between two trials, later up to 40 s. A howl may come round with gaps in it, so what counts is the loudest moment of the
last third of a second. Input that is cut off far above full scale by its own converter does not follow, and is not
found.
"""

from __future__ import annotations

import math
from enum import Enum, auto

import numpy as np
from numpy.typing import NDArray

from preview.engine.spectrum import Tap

__all__ = ["DUCK_DB", "StandingGuard"]

DUCK_DB = -6.0
"""Gain of the output while it is tried [dB]."""
FALL_DB, FALL_MOST_DB, BACK_DB = 3.0, 9.0, 1.5
"""What comes round falls with the output, not by less and not by more; then it comes back to within this."""
STEADY_DB = 1.5
HOLD_LOOKS, STEADY_LOOKS, ANSWER_LOOKS, STAY_LOOKS, REST_LOOKS = 5, 4, 15, 5, 75
MOST_TRIES, REST_TIMES = 3, 8
WINDOW_S = 0.08
FLAT, FLAT_SHARE = 0.97, 0.25
"""Share of the time that a signal is near its largest value: 0.16 for a sine, more where it is cut off."""
QUIET_V = 1e-4


class _Stage(Enum):
    LISTENING = auto()
    DOWN = auto()
    STAYING = auto()
    UP = auto()


class StandingGuard:
    """Judges input and output about 15 times a second; on the control thread.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the frames [Hz].
    """

    def __init__(self, sample_rate_hz: float) -> None:
        self._rate_hz = sample_rate_hz
        self._window = round(WINDOW_S * sample_rate_hz)
        self._stage = _Stage.LISTENING
        self._moments: list[tuple[float, bool]] = []
        self._levels_db: list[float] = []
        self._before_db = 0.0
        self._looks = 0
        self._rest = 0
        self._tries = self._failed = 0
        self.ducked = False
        """Whether the output is to be quieter by ``DUCK_DB``."""
        self.frequency_hz = 0.0
        """The strongest line of the last howl [Hz]."""

    def hears(self, tap_in: Tap, tap_out: Tap, *, limited: bool) -> bool:
        """Whether what comes in has followed the output; ``limited`` says that the device's limit had to act."""
        heard = _louder(tap_in)
        recent = heard[-self._window :]
        moment_db = 10.0 * math.log10(float(np.dot(recent, recent)) / len(recent) + QUIET_V**2 / 100.0)
        at_limit = limited or _flat(recent) or _flat(_louder(tap_out)[-self._window :])
        self._moments = [*self._moments[1 - HOLD_LOOKS :], (moment_db, at_limit)]
        level_db = max(db for db, _ in self._moments)
        self._rest = max(self._rest - 1, 0)
        if self._stage is _Stage.LISTENING:
            self._listen(level_db, at_limit=any(at for _, at in self._moments))
            return False
        self._looks += 1
        if level_db < self._before_db - FALL_MOST_DB:
            self.forget()  # it has ended by itself
            return False
        if self._stage is _Stage.DOWN:
            if level_db <= self._before_db - FALL_DB:
                self._stage, self._looks = _Stage.STAYING, 0
            elif self._looks >= ANSWER_LOOKS:
                self.forget()
            return False
        if self._stage is _Stage.STAYING:
            if level_db > self._before_db - FALL_DB:
                self.forget()  # it goes its own way
            elif self._looks >= STAY_LOOKS:
                self._stage, self._looks, self.ducked = _Stage.UP, 0, False
            return False
        if level_db < self._before_db - BACK_DB:
            if self._looks >= ANSWER_LOOKS:
                self.forget()
            return False
        self.forget()
        self._failed = 0
        lines = np.abs(np.fft.rfft(heard * np.hanning(len(heard))))
        self.frequency_hz = float(np.argmax(lines)) * self._rate_hz / len(heard)
        return True

    def forget(self) -> None:
        """Listen anew, and try nothing for a while."""
        self._stage, self._looks, self.ducked = _Stage.LISTENING, 0, False
        self._moments.clear()
        self._levels_db.clear()

    def _listen(self, level_db: float, *, at_limit: bool) -> None:
        self._levels_db = [*self._levels_db[1 - STEADY_LOOKS :], level_db]
        if max(self._levels_db) - min(self._levels_db) > STEADY_DB:
            self._tries = 0
        elif (
            at_limit
            and len(self._levels_db) == STEADY_LOOKS
            and level_db > 20.0 * math.log10(QUIET_V)
            and self._tries < MOST_TRIES
            and not self._rest
        ):
            self._stage, self._looks, self._before_db = _Stage.DOWN, 0, level_db
            self._tries, self.ducked = self._tries + 1, True
            self._rest = REST_LOOKS * min(2**self._failed, REST_TIMES)
            self._failed += 1


def _louder(tap: Tap) -> NDArray[np.float64]:
    """The louder channel of what a tap kept."""
    volts = tap.last()
    return volts[:, int(np.argmax(np.einsum("ij,ij->j", volts, volts)))]


def _flat(signal: NDArray[np.float64]) -> bool:
    """Whether a signal is cut off."""
    magnitude = np.abs(signal)
    return float(np.mean(magnitude >= FLAT * magnitude.max())) >= FLAT_SHARE
