"""Levels in the unit that the desk shows: volts, dBu, dBV or dBFS."""

from __future__ import annotations

import math
from enum import StrEnum

from preview.ui.words import scale_volts, volts
from preview.values.levels import (
    dbfs_from_vpk,
    dbu_from_vpk,
    dbv_from_vpk,
    ratio_from_db,
    vpk_from_dbu,
    vpk_from_vrms,
)

__all__ = ["LevelUnit"]

_SMALLEST_V = 1e-6
"""Below this a level is written as none [V]."""


class LevelUnit(StrEnum):
    """The unit of every level on the desk. A peak in dBu or dBV is the level of the sine with that peak."""

    VOLTS = "V"
    """Volts: rms is V rms, peaks are V peak."""
    DBU = "dBu"
    """re 0.775 V rms."""
    DBV = "dBV"
    """re 1 V rms."""
    DBFS = "dBFS"
    """re full scale: a sine that peaks there has 0 dBFS, its rms too (AES17)."""

    @property
    def next(self) -> LevelUnit:
        """The unit after this one, round and round."""
        units = list(LevelUnit)
        return units[(units.index(self) + 1) % len(units)]

    def peak(self, level_v: float, full_scale_v: float) -> str:
        """A peak voltage [V]: ``8.70 V``, ``+18.0`` dBu; ``-`` for silence in decibels."""
        if self is LevelUnit.VOLTS:
            return volts(level_v)
        return f"{self._db(level_v, full_scale_v):+.1f}" if level_v >= _SMALLEST_V else "-"

    def rms(self, level_v: float, full_scale_v: float) -> str:
        """An rms voltage [V]."""
        return volts(level_v) if self is LevelUnit.VOLTS else self.peak(vpk_from_vrms(level_v), full_scale_v)

    def _db(self, peak_v: float, full_scale_v: float) -> float:
        if self is LevelUnit.DBU:
            return dbu_from_vpk(peak_v)
        return dbv_from_vpk(peak_v) if self is LevelUnit.DBV else dbfs_from_vpk(peak_v, full_scale_v)

    def marks(self, bottom_v: float, top_v: float, full_scale_v: float) -> list[tuple[float, str]]:
        """Round levels from the bottom to the top of an axis of peak volts, with their labels."""
        if self is LevelUnit.VOLTS:
            first = math.floor(math.log10(bottom_v))
            levels_v = [float(f"{digit}e{power}") for power in range(first, first + 6) for digit in (1, 3)]
            return [(v, scale_volts(v)) for v in levels_v if bottom_v <= v <= top_v]
        zero_v = {
            LevelUnit.DBU: vpk_from_dbu(0.0),
            LevelUnit.DBV: vpk_from_vrms(1.0),
            LevelUnit.DBFS: full_scale_v,
        }[self]
        lowest = math.ceil(20.0 * math.log10(bottom_v / zero_v) / 10.0)
        highest = math.floor(20.0 * math.log10(top_v / zero_v) / 10.0 + 1e-9)
        return [
            (zero_v * ratio_from_db(10.0 * n), f"{10 * n:+d}" if n else "0")
            for n in range(lowest, highest + 1)
        ]
