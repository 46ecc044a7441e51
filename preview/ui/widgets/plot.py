"""What plots share: a logarithmic frequency axis, labels, and rows of cells that become segments."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from rich.style import Style

__all__ = ["Cells", "FrequencyAxis", "merged"]

_NAMES = ((1.0, "1"), (10.0, "10"), (100.0, "100"), (1e3, "1k"), (10e3, "10k"), (100e3, "100k"), (1e6, "1M"))

Cells = list[tuple[str, Style]]


@dataclass(frozen=True, slots=True)
class FrequencyAxis:
    """Frequency from left to right, equal ratios equally far apart."""

    low_hz: float
    """Left end [Hz]."""
    high_hz: float
    """Right end [Hz]."""
    cells: int
    """Length [cells]."""

    def column(self, frequency_hz: float) -> int:
        """The cell in which a frequency lies, the nearest end for one outside."""
        ratio = math.log(frequency_hz / self.low_hz) / math.log(self.high_hz / self.low_hz)
        return max(0, min(self.cells - 1, int(ratio * self.cells)))

    def holds(self, frequency_hz: float) -> bool:
        """Whether a frequency is on the axis."""
        return self.low_hz <= frequency_hz <= self.high_hz

    def frequency_hz(self, column: int) -> float:
        """The frequency in the middle of a cell [Hz]."""
        return float(self.low_hz * (self.high_hz / self.low_hz) ** ((column + 0.5) / self.cells))

    @property
    def decades(self) -> list[tuple[int, str]]:
        """Cell and label of each power of ten."""
        return [(self.column(hz), name) for hz, name in _NAMES if self.low_hz <= hz <= self.high_hz * 1.0001]

    def sampled(
        self, frequency_hz: NDArray[np.float64], values: NDArray[np.float64], dots: int = 2
    ) -> NDArray[np.float64]:
        """A curve at every dot column; NaN where it has none."""
        wanted = np.linspace(math.log10(self.low_hz), math.log10(self.high_hz), dots * self.cells)
        return np.interp(wanted, np.log10(frequency_hz), values)

    def labels(self, indent: int) -> str:
        """The line of labels below a plot that begins ``indent`` cells from the left."""
        cells = [" "] * (self.cells + indent)
        for place, (column, name) in enumerate(self.decades):
            label = name if place else f"{name} Hz"
            at = min(column + indent, len(cells) - len(label))
            if at > 0 and all(cell == " " for cell in cells[at - 1 : at + len(label)]):
                cells[at : at + len(label)] = list(label)
        return "".join(cells)


def merged(pieces: Cells) -> Cells:
    """Neighbours of one style in one piece."""
    result: Cells = []
    for text, style in pieces:
        if result and result[-1][1] is style:
            result[-1] = (result[-1][0] + text, style)
        else:
            result.append((text, style))
    return result
