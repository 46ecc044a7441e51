"""The live spectrum in 1/6-octave bands on a scale of volts."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from preview.engine.messages import SpectrumReading
from preview.ui.units import LevelUnit
from preview.ui.view import Behind
from preview.ui.widgets.plot import FrequencyAxis

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Spectrum", "VoltScale"]

_SPAN_DB = 140.0
"""Top to bottom of the scale of volts [dB]: from the rails to microvolts."""
_BAND_OCTAVE = 1.0 / 6.0
_INPUT = "╴"
_COLUMN = "░"
_TOPS = "▁▂▃▄▅▆▇"
_BELOW = 1e6
"""Lines from the top of what is not on the plot."""


@dataclass(frozen=True, slots=True)
class VoltScale:
    """RMS volts from the top to the bottom of a plot, in decibels."""

    top_vrms: float
    """Upper end [V rms]."""

    @classmethod
    def of(cls, desk: Desk) -> VoltScale:
        """A scale that begins at the power of ten about full scale or the output's limit."""
        wall_v, _ = desk.output_wall()
        highest_v = max(desk.session.full_scale.volts, wall_v or 0.0)
        return cls(10.0 ** math.ceil(math.log10(highest_v / math.sqrt(2.0) / 1.25)))

    def dots(self, vrms: NDArray[np.float64], height: int) -> NDArray[np.float64]:
        """Heights in dots from the top; what is below the scale lies below the plot."""
        with np.errstate(divide="ignore"):
            level_db = 20.0 * np.log10(np.maximum(vrms, 1e-30) / self.top_vrms)
        return np.asarray(-level_db / _SPAN_DB * (4 * height - 1), dtype=np.float64)

    def labels(self, height: int, unit: LevelUnit, full_scale_v: float) -> dict[int, str]:
        """Labels by line, every 20 dB or 40 dB."""
        every_db = 20.0 if height >= 12 else 40.0
        labels: dict[int, str] = {}
        for n in range(int(_SPAN_DB / every_db)):
            level_vrms = self.top_vrms * 10.0 ** (-every_db * n / 20.0)
            line = int(every_db * n / _SPAN_DB * (4 * height - 1)) // 4
            text = f"{level_vrms:.0e}"
            if unit is LevelUnit.VOLTS:
                for factor, mark in ((1.0, ""), (1e3, "m"), (1e6, "µ")):
                    if level_vrms * factor >= 0.999:
                        text = f"{level_vrms * factor:.0f}{mark}V"
                        break
            else:
                text = f"{float(unit.rms(level_vrms, full_scale_v)):+.0f}" if level_vrms >= 1e-6 else ""
            labels[line] = f" {text}"
        return labels

    @staticmethod
    def noise_band_v(
        frequency_hz: NDArray[np.float64], density_v_rthz: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Noise in a sixth of an octave about each frequency [V rms], comparable with the spectrum."""
        half = 2.0 ** (_BAND_OCTAVE / 2.0)
        return np.asarray(density_v_rthz * np.sqrt(frequency_hz * (half - 1.0 / half)), dtype=np.float64)

    def reading(
        self, spectrum: SpectrumReading, frequency_hz: float, unit: LevelUnit, full_scale_v: float
    ) -> list[str]:
        """Input and output of the band at a frequency, in words; empty outside of the bands."""
        at = _band(spectrum.center_hz, frequency_hz)
        if at is None:
            return []
        pairs = (("in", spectrum.input_vrms[at]), ("out", spectrum.output_vrms[at]))
        suffix = "" if unit is LevelUnit.VOLTS else f" {unit}"
        return [f"{word} {unit.rms(level_v, full_scale_v)}{suffix}" for word, level_v in pairs]


def _band(center_hz: Sequence[float], frequency_hz: float) -> int | None:
    """The band in which a frequency lies."""
    if not center_hz:
        return None
    distances = [abs(math.log2(frequency_hz / hz)) for hz in center_hz]
    at = min(range(len(distances)), key=distances.__getitem__)
    return at if distances[at] <= 0.51 * _BAND_OCTAVE else None


class Spectrum:
    """A spectrum as columns of cells behind a plot: the output filled, the input as its upper edge.

    Parameters
    ----------
    reading : SpectrumReading
        The bands.
    behind : Behind
        Which of the two is shown.
    scale : VoltScale
        Volts from top to bottom.
    axis : FrequencyAxis
        Frequency from left to right.
    height : int
        Lines of the plot.
    """

    def __init__(
        self, reading: SpectrumReading, behind: Behind, scale: VoltScale, axis: FrequencyAxis, height: int
    ) -> None:
        bands = [_band(reading.center_hz, axis.frequency_hz(x)) for x in range(axis.cells)]
        self._tops: dict[str, list[float]] = {}
        wanted = {
            "out": (reading.output_vrms, behind in (Behind.BOTH, Behind.OUTPUT)),
            "in": (reading.input_vrms, behind in (Behind.BOTH, Behind.INPUT)),
        }
        for word, (levels_v, shown) in wanted.items():
            dots = scale.dots(np.asarray(levels_v, dtype=np.float64), height) if shown and levels_v else None
            self._tops[word] = [
                _BELOW if dots is None or band is None else float(dots[band]) / 4.0 for band in bands
            ]

    def glyph(self, x: int, y: int) -> str:
        """What stands in a cell; empty for nothing."""
        top = self._tops["in"][x]
        if y == math.floor(top):
            return _INPUT
        top = self._tops["out"][x]
        if y > top:
            return _COLUMN
        if y == math.floor(top):
            return _TOPS[min(6, int((1.0 - (top - y)) * 7.0))]
        return ""
