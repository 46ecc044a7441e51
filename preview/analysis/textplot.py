"""The gain curve in plain characters, for a terminal, a log or a letter."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.analysis.curves import Curves
from preview.values.notation import format_value

__all__ = ["gain_drawing"]

Real = NDArray[np.float64]

_MARGIN = 8
"""Columns before the axis."""
_STEPS_DB = (0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0)
_LOWEST_DB = 80.0
"""What is farther than this below the top is not drawn [dB]."""
_NARROWEST_DB = 6.0


def gain_drawing(found: Curves, *, rows: int) -> list[str]:
    """Gain over frequency, a column for each of the curves' frequencies.

    ``*`` is the circuit as driven and loaded, ``.`` as drawn where that is another one, ``^`` a corner.
    """
    shown = [("*", found.driven)] if found.drawn is None else [(".", found.drawn), ("*", found.driven)]
    f = found.driven.frequency_hz
    top_db, step_db = _scale([response.gain_db for _, response in shown], rows)
    field = [[" "] * len(f) for _ in range(rows)]
    for mark, response in shown:
        _trace(field, (top_db - response.gain_db) / step_db, mark)
    used = max((row for row, cells in enumerate(field) if set(cells) != {" "}), default=0)
    field = field[: _every(rows) * -(-used // _every(rows)) + 1]
    lines = [f"{'dB':>{_MARGIN - 2}}"]
    for row, cells in enumerate(field):
        labelled = row % _every(rows) == 0
        text = f"{top_db - row * step_db:.4g}" if labelled else ""
        lines.append(f"{text:>{_MARGIN - 2}} {'+' if labelled else '|'}{''.join(cells)}".rstrip())
    decades = [10.0**k for k in range(round(math.log10(f[0])), round(math.log10(f[-1])) + 1)]
    axis = ["-"] * len(f)
    for hz in decades:
        axis[_column(f, hz)] = "+"
    lines.append(f"{'':>{_MARGIN}}{''.join(axis)}")
    marks = {_column(f, hz): "^" for hz in found.driven.corners_hz if f[0] <= hz <= f[-1]}
    lines.append(f"{'':>{_MARGIN}}" + "".join(marks.get(i, " ") for i in range(len(f))).rstrip())
    labels = [" "] * (len(f) + 4)
    for hz in decades:
        word = format_value(hz, "frequency").replace(" ", "").removesuffix("Hz")
        at = _column(f, hz)
        labels[at : at + len(word)] = word
    lines.append(f"{'':>{_MARGIN}}{''.join(labels).rstrip()} Hz")
    legend = ["* as driven and loaded, . as drawn"] if found.drawn is not None else []
    corners = ", ".join(format_value(hz, "frequency", digits=4) for hz in found.driven.corners_hz)
    lines += [f"{'':>{_MARGIN}}{word}" for word in (*legend, *([f"^ corners {corners}"] if corners else []))]
    return [line for i, line in enumerate(lines) if line.strip() or i == 0]


def _every(rows: int) -> int:
    """Rows from one label to the next."""
    return 2 if rows <= 24 else 5


def _scale(curves: list[Real], rows: int) -> tuple[float, float]:
    """Gain of the top row and from row to row [dB], on round figures at the labels."""
    finite = np.concatenate([curve[np.isfinite(curve)] for curve in curves])
    if not finite.size:
        return 0.0, 1.0
    highest = float(finite.max())
    lowest = max(float(finite.min()), highest - _LOWEST_DB)
    labels = max(1, (rows - 1) // _every(rows))
    for step in _STEPS_DB:
        top = math.ceil(highest / step - 1e-9) * step
        if top - labels * step <= lowest and labels * step >= _NARROWEST_DB:
            break
    return top, step / _every(rows)


def _trace(field: list[list[str]], depth: Real, mark: str) -> None:
    """Mark each column at its row; between two columns that are rows apart the way is filled."""
    before: int | None = None
    for column, value in enumerate(depth):
        row = round(float(value)) if math.isfinite(value) else len(field)
        near = row if before is None else before + (1 if row > before else -1 if row < before else 0)
        for at in range(min(near, row), max(near, row) + 1):
            if 0 <= at < len(field):
                field[at][column] = mark
        before = row


def _column(frequency_hz: Real, hz: float) -> int:
    """The column of a frequency."""
    return int(np.argmin(np.abs(np.log(frequency_hz / hz))))
