"""The feedback guard: hears howl-round, sound that feeds itself through loudspeaker and microphone, while it grows.

What comes round is like what went round: the last sixth of a second is sought in the half second before it. Where it
is found there, louder each time for a while, the loop gain is above one. A held note is found as well, but it does not
go on growing; speech and music do not repeat so closely. The long buffers of live input make a round last longer than
a look, so a howl is caught as it grows; one that stands at the limit already is told from a note by ``standing``.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.engine.spectrum import Tap

__all__ = ["HowlGuard"]

RECENT_SHARE = 4
SHORTEST_S = 0.05
ALIKE = 0.9
GROWTH, GROWTH_MAX = 1.06, 30.0
LOOKS, FAST_LOOKS, FAST_DB = 8, 4, 20.0
STEADY = 0.6
QUIET_V = 1e-5


class HowlGuard:
    """Judges the output about 15 times a second; on the control thread.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the frames [Hz].
    """

    def __init__(self, sample_rate_hz: float) -> None:
        self._rate_hz = sample_rate_hz
        self._levels_db: list[float] = []
        self.frequency_hz = 0.0
        """The strongest line of the last howl [Hz]."""

    def hears(self, tap: Tap) -> bool:
        """Whether the last moments of a signal are a howl that grows."""
        volts = tap.last()
        signal = volts[:, int(np.argmax(np.einsum("ij,ij->j", volts, volts)))]
        level_db = self._grown_to_db(signal)
        if level_db is None:
            self._levels_db.clear()
            return False
        self._levels_db = [*self._levels_db[-LOOKS:], level_db]
        if not (self._grew(LOOKS, 0.0) or self._grew(FAST_LOOKS, FAST_DB)):
            return False
        self._levels_db.clear()
        lines = np.abs(np.fft.rfft(signal * np.hanning(len(signal))))
        self.frequency_hz = float(np.argmax(lines)) * self._rate_hz / len(signal)
        return True

    def _grew(self, looks: int, by_db: float) -> bool:
        """Whether it has grown for so many looks by so much; a swell, or a room that fills, grows ever less."""
        levels_db = self._levels_db[-looks - 1 :]
        if len(levels_db) <= looks:
            return False
        first, middle, last = levels_db[0], levels_db[looks // 2], levels_db[-1]
        return last - first >= by_db and last - middle >= STEADY * (middle - first)

    def _grown_to_db(self, signal: NDArray[np.float64]) -> float | None:
        """Level of the end of a signal [dB re 1 V] where it is an earlier part of it, louder; None where it is not."""
        count = len(signal) // RECENT_SHARE
        recent = signal[-count:]
        power = float(np.dot(recent, recent))
        if power < count * QUIET_V**2:
            return None
        latest = len(signal) - count - round(SHORTEST_S * self._rate_hz)
        spectrum = np.fft.rfft(signal) * np.conj(np.fft.rfft(recent, len(signal)))
        product = np.abs(np.fft.irfft(spectrum, len(signal))[:latest])  # a loop may also turn its signal over
        squares = np.concatenate([[0.0], np.cumsum(signal * signal)])
        before = np.maximum(squares[count:] - squares[:-count], GROWTH_MAX**-2 * power)[:latest]
        alike = product / np.sqrt(before * power)
        best = int(np.argmax(alike))
        if alike[best] < ALIKE or product[best] / before[best] < GROWTH:
            return None
        return 10.0 * math.log10(power / count)
