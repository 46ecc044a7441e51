"""The response curve: gain, and phase if wanted, over a logarithmic frequency axis."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from rich.style import Style

from preview.ui.desk import Desk
from preview.ui.figures import HIGHEST_HZ, LOWEST_HZ, Figures
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, heading, row
from preview.ui.widgets.dots import DotField
from preview.ui.words import hertz

__all__ = ["CurvePanel"]

_LABEL = 5
"""Cells of the gain labels at the left."""
_PHASE_LABEL = 5
"""Cells of the phase labels at the right."""
_MOST_DB, _LEAST_DB = 80.0, 30.0
"""Largest and smallest span of the gain axis [dB]."""
_CORNER, _GRID = "╎", "·"
_DECADES = ((10.0, "10"), (100.0, "100"), (1e3, "1k"), (10e3, "10k"), (100e3, "100k"))


@dataclass(frozen=True, slots=True)
class _GainAxis:
    """Gain from top to bottom of the plot [dB]."""

    top_db: float
    bottom_db: float

    @classmethod
    def around(cls, *figures: Figures) -> _GainAxis:
        """An axis in whole tens that holds these curves, from the highest down to 80 dB below."""
        gains = np.concatenate([f.gain_db[np.isfinite(f.gain_db)] for f in figures])
        if len(gains) == 0:
            return cls(10.0, -20.0)
        top_db = 10.0 * math.ceil((float(gains.max()) + 0.5) / 10.0)
        bottom_db = max(10.0 * math.floor(float(gains.min()) / 10.0), top_db - _MOST_DB)
        return cls(top_db, min(bottom_db, top_db - _LEAST_DB))

    def dots(self, gain_db: NDArray[np.float64], height: int) -> NDArray[np.float64]:
        """Heights in dots from the top of a plot of ``height`` cells; -inf dB lies below the plot."""
        scaled = (self.top_db - gain_db) / (self.top_db - self.bottom_db) * (4 * height - 1)
        return np.where(np.isneginf(gain_db), 4.0 * height + 4.0, scaled)


class CurvePanel(Board):
    """The gain of the circuit now as a line, of the circuit before as dots, corners marked with figures."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="curve")
        self.desk = desk
        self._drawn_for: tuple[object, object, object] = (None, None, None)
        self._drawn: Sequence[Row] = ()

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`; drawn again only when what it shows has changed, for a held key asks often."""
        figures, frame = self.desk.figures, (self.desk.phase_shown, self.look.palette, width, height)
        was_now, was_before, was_frame = self._drawn_for
        if figures.now is not was_now or figures.before is not was_before or frame != was_frame:
            self._drawn_for, self._drawn = (figures.now, figures.before, frame), self._draw(width, height)
        return self._drawn

    def _draw(self, width: int, height: int) -> Sequence[Row]:
        desk, palette = self.desk, self.look.palette
        now, before = desk.figures.now, desk.figures.before
        note = "gain in dB"
        if desk.phase_shown:
            note += ", phase in degrees (dotted)"
        if before is not None and now is not None and not np.array_equal(before.gain_db, now.gain_db):
            note += "; ⠒ ⠒ before"
        result = [heading("response", note, width - 1, self.look)]
        if now is None or now.problem or len(now.frequency_hz) == 0:
            return [*result, row((" no curve yet" if now is None else " no curve", palette.faint))]
        plot_width = width - _LABEL - 1 - (_PHASE_LABEL if desk.phase_shown else 0)
        plot_height = height - 3
        if plot_width < 10 or plot_height < 2:
            return result
        return [*result, *self._plot(now, before, plot_width, plot_height)]

    def _plot(self, now: Figures, before: Figures | None, width: int, height: int) -> list[Row]:
        old = before if before is not None and len(before.frequency_hz) else None
        axis = _GainAxis.around(now, *([old] if old else []))
        front, back = DotField(width, height), DotField(width, height)
        front.trace(axis.dots(_sampled(now, now.gain_db, width), height))
        if old is not None:
            back.trace(axis.dots(_sampled(old, old.gain_db, width), height), every=3)
        phase = DotField(width, height)
        if self.desk.phase_shown:
            wrapped = (_sampled(now, now.phase_deg, width) + 180.0) % 360.0 - 180.0
            phase.trace((180.0 - wrapped) / 360.0 * (4 * height - 1), every=2)
        corners: dict[int, float] = {}
        for corner_hz in now.corners_hz:
            if LOWEST_HZ <= corner_hz <= HIGHEST_HZ:
                corners.setdefault(_column(corner_hz, width), corner_hz)
        lines = [self._corner_labels(corners, width)]
        labels = _gain_labels(axis, height)
        for y in range(height):
            lines.append(self._line(y, width, height, labels, (front, back, phase), corners))
        lines.append(self._frequency_labels(width))
        return lines

    def _line(
        self,
        y: int,
        width: int,
        height: int,
        labels: dict[int, str],
        fields: tuple[DotField, DotField, DotField],
        corners: dict[int, float],
    ) -> Row:
        palette = self.look.palette
        front, back, phase = fields
        decades = {_column(hz, width) for hz, _ in _DECADES}
        pieces: list[tuple[str, Style]] = []
        for x in range(width):
            if front.filled(x, y):
                pieces.append((front.glyph(x, y), palette.output))
            elif phase.filled(x, y):
                pieces.append((phase.glyph(x, y), palette.input))
            elif x in corners:
                pieces.append((_CORNER, palette.mark))
            elif back.filled(x, y):
                pieces.append((back.glyph(x, y), palette.faint))
            elif y in labels or x in decades:
                pieces.append((_GRID, palette.faint))
            else:
                pieces.append((" ", palette.plain))
        right = ""
        if self.desk.phase_shown:
            right = {0: " 180°", height // 2: "   0°", height - 1: "-180°"}.get(y, "")
        label = labels.get(y, "").rjust(_LABEL - 1) + " "
        return row((label, palette.faint), *_merged(pieces), (right, palette.input))

    def _corner_labels(self, corners: dict[int, float], width: int) -> Row:
        """The corners' frequencies above their marks, as many as have room."""
        cells = [" "] * (width + _LABEL)
        free_from = 0
        for x, corner_hz in sorted(corners.items()):
            label = f"▾ {hertz(corner_hz)}"
            at = x + _LABEL
            if at + len(label) > len(cells):
                label = f"{hertz(corner_hz)} ▾"
                at = x + _LABEL - len(label) + 1
            if at >= free_from:
                cells[at : at + len(label)] = list(label)
                free_from = at + len(label) + 1
            elif x + _LABEL >= free_from:
                cells[x + _LABEL] = "▾"
        return row(("".join(cells), self.look.palette.mark))

    def _frequency_labels(self, width: int) -> Row:
        cells = [" "] * (width + _LABEL)
        for frequency_hz, label in _DECADES:
            at = min(_column(frequency_hz, width) + _LABEL, len(cells) - len(label))
            if cells[at - 1] == " ":
                cells[at : at + len(label)] = list(label)
        place = _column(300.0, width) + _LABEL
        if all(cell == " " for cell in cells[place - 1 : place + 3]):
            cells[place : place + 2] = list("Hz")
        return row(("".join(cells), self.look.palette.faint))


def _column(frequency_hz: float, width: int) -> int:
    """The cell in which a frequency lies."""
    ratio = math.log(frequency_hz / LOWEST_HZ) / math.log(HIGHEST_HZ / LOWEST_HZ)
    return max(0, min(width - 1, int(ratio * width)))


def _sampled(figures: Figures, values: NDArray[np.float64], width: int) -> NDArray[np.float64]:
    """The curve at every dot column; NaN outside its frequencies."""
    wanted = np.linspace(math.log10(LOWEST_HZ), math.log10(HIGHEST_HZ), 2 * width)
    return np.interp(wanted, np.log10(figures.frequency_hz), values, left=np.nan, right=np.nan)


def _gain_labels(axis: _GainAxis, height: int) -> dict[int, str]:
    """Labels by line: whole tens, spaced at least two lines apart."""
    span_db = axis.top_db - axis.bottom_db
    every_db = next((e for e in (10.0, 20.0, 40.0) if height * e / span_db >= 2.0), 40.0)
    labels: dict[int, str] = {}
    level_db = every_db * math.floor(axis.top_db / every_db)
    while level_db >= axis.bottom_db:
        dot = (axis.top_db - level_db) / span_db * (4 * height - 1)
        labels.setdefault(min(height - 1, int(dot) // 4), f"{level_db:.0f}")
        level_db -= every_db
    return labels


def _merged(pieces: list[tuple[str, Style]]) -> list[tuple[str, Style]]:
    """Neighbours of one style in one piece."""
    merged: list[tuple[str, Style]] = []
    for text, style in pieces:
        if merged and merged[-1][1] is style:
            merged[-1] = (merged[-1][0] + text, style)
        else:
            merged.append((text, style))
    return merged
