"""Levels over time in a bounded number of entries: when they are full, each two become one."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.engine.check.results import TraceRead

__all__ = ["Trace"]

ENTRIES = 2048
"""Most entries; half as many stay when they are full."""
BINS = 60
"""Headroom is counted in steps of 1 dB up to this."""


class Trace:
    """Takes the peaks of one piece of signal after the other.

    Parameters
    ----------
    piece_s : float
        Length of every piece but the last [s].
    opamps : int
        Op-amps whose headroom is followed.
    """

    def __init__(self, piece_s: float, opamps: int) -> None:
        self._step_s = piece_s
        self._piece_s = piece_s
        self._rows: NDArray[np.float64] = np.zeros((ENTRIES, 2 + opamps))  # peaks, headrooms
        self._count, self._pieces, self._each = 0, 0, 1
        self._time_s = np.zeros((opamps, BINS + 1))

    def add(
        self, input_peak_v: float, output_peak_v: float, headroom_db: list[float], length_s: float
    ) -> None:
        """Take the next piece."""
        row = np.array(
            [input_peak_v, output_peak_v, *(-h for h in headroom_db)]
        )  # all rows join by their maximum
        for j, value in enumerate(headroom_db):
            self._time_s[j, min(int(value), BINS) if math.isfinite(value) else BINS] += length_s
        if self._pieces % self._each == 0:
            if self._count == ENTRIES:
                self._rows[: ENTRIES // 2] = np.maximum(self._rows[::2], self._rows[1::2])
                self._count //= 2
                self._each *= 2
                self._step_s *= 2.0
            self._rows[self._count] = row
            self._count += 1
        else:
            np.maximum(self._rows[self._count - 1], row, out=self._rows[self._count - 1])
        self._pieces += 1

    def read(self) -> TraceRead:
        """What was taken."""
        rows = self._rows[: self._count]
        return TraceRead(
            step_s=self._step_s,
            input_peak_v=tuple(rows[:, 0].tolist()),
            output_peak_v=tuple(rows[:, 1].tolist()),
            headroom_db=tuple(tuple((-rows[:, 2 + j]).tolist()) for j in range(rows.shape[1] - 2)),
            headroom_s=tuple(tuple(row.tolist()) for row in self._time_s),
        )
