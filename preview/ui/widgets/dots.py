"""A field of braille dots: two across and four down in each cell."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["DotField"]

_BITS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]], dtype=np.uint16)
"""Unicode braille patterns: the bit of the dot at [row, column] of a cell."""
_BLANK = 0x2800


class DotField:
    """Dots that become text.

    Parameters
    ----------
    width, height : int
        Size [cells]; the field has ``2 * width`` by ``4 * height`` dots, the first at the upper left.
    """

    def __init__(self, width: int, height: int) -> None:
        self.width = width
        self.height = height
        self._cells = np.zeros((height, width), dtype=np.uint16)

    def set(self, x: int, y: int) -> None:
        """Set one dot; outside the field nothing happens."""
        if 0 <= x < 2 * self.width and 0 <= y < 4 * self.height:
            self._cells[y // 4, x // 2] |= _BITS[y % 4, x % 2]

    def trace(self, y: NDArray[np.float64], *, every: int = 1) -> None:
        """Join the heights ``y`` (dots from the top, one for each dot column; NaN for none) into a line.

        ``every`` above 1 sets only every so many-th column: a dotted line.
        """
        last: int | None = None
        for x, height in enumerate(y.tolist()):
            if not math.isfinite(height):
                last = None
                continue
            here = max(-4, min(round(height), 4 * self.height + 4))
            if every == 1 and last is not None and abs(here - last) > 1:
                middle = (here + last) // 2
                for between in range(min(last, middle), max(last, middle) + 1):
                    self.set(x - 1, between)
                for between in range(min(here, middle), max(here, middle) + 1):
                    self.set(x, between)
            elif x % every == 0:
                self.set(x, here)
            last = here

    def filled(self, column: int, line: int) -> bool:
        """Whether the cell has any dot."""
        return bool(self._cells[line, column])

    def glyph(self, column: int, line: int) -> str:
        """The cell as a braille character."""
        return chr(_BLANK + int(self._cells[line, column]))
