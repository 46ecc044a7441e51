"""The list of parts that can be set, the selected one marked."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from textual.events import Click, MouseScrollDown, MouseScrollUp

from preview.circuit.parts import Potentiometer, SettablePart, TwoTerminal
from preview.circuit.settings import setting_text
from preview.errors import printable
from preview.ui.changes import series_of
from preview.ui.desk import Desk
from preview.ui.partwork import kind_words
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, heading, row
from preview.ui.words import code
from preview.values.eseries import contains

__all__ = ["PartsPanel"]

_VALUE, _SERIES, _TOLERANCE = 9, 5, 6
_SLIDER = 9
"""Cells of a potentiometer's track."""
_SHORT = {"linear": "lin", "reverse-log": "r-log", "switch": ""}
_ROLE_FROM = 18
"""With so many cells to spare each row has its part's role."""


class PartsPanel(Board):
    """A row for each part: designator, value, E series, tolerance, value before, role.

    A click selects a part; the wheel over the list steps the selected one.
    """

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="parts")
        self.desk = desk
        self._first = 0

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        work, palette = self.desk.parts, self.look.palette
        parts = work.parts
        result = [heading("parts", f"{len(parts)}" if len(parts) >= height else "", width - 1, self.look)]
        if not parts:
            return [*result, row((" this stage has no part to set", palette.faint))]
        at = min(work.chosen, len(parts) - 1)
        about = self._about(parts[at], width - 3)
        about_rows = len(about) + 1 if height >= len(parts) + len(about) + 2 else 0
        room = max(1, height - 1 - about_rows)
        self._first = max(0, min(self._first, at, len(parts) - room))
        if at >= self._first + room:
            self._first = at - room + 1
        names = min(8, max(2, *(len(part.designator) for part in parts), 2))
        for index in range(self._first, min(len(parts), self._first + room)):
            result.append(self._part_row(parts[index], index == at, names, width))
        if about_rows:
            result.append(row(("", palette.plain)))
            result += [row((f"  {line}", palette.faint)) for line in about]
        return result[:height]

    def _part_row(self, part: SettablePart, chosen: bool, names: int, width: int) -> Row:
        palette = self.look.palette
        series, tolerance = kind_words(part)
        series = _SHORT.get(series, series)
        fits = not isinstance(part, TwoTerminal) or contains(part.value, series_of(part))
        text = f"{fit(printable(part.designator), names)} {fit(setting_text(part), _VALUE)} {' ' if fits else '≠'}"
        text += fit(series, _SERIES)
        left = width - len(text) - 4
        if left >= _TOLERANCE + 7 or (left >= _TOLERANCE and width < 30):
            text += fit(tolerance, _TOLERANCE)
            left -= _TOLERANCE
        was = self.desk.parts.before(part.designator)
        changed = was is not None and was.setting != part.setting
        notes = []
        if changed and was is not None:
            notes.append(f"was {code(was)}")
        if self.desk.parts.tied_to(part.designator):
            notes.append("tied")
        if isinstance(part, Potentiometer) and left > _SLIDER + 8:
            notes.insert(0, _slider(part.position))
        if left - len("  ".join(notes)) >= _ROLE_FROM:
            notes.append(printable(part.role))
        note = "  ".join(note for note in notes if note)
        tail = f" {fit(note, left)}" if left >= 7 else "•" if changed else ""
        if chosen:
            return row(("▸", palette.mark), (f" {text} ", palette.selected), (tail, palette.strong))
        return row((f"  {text} ", palette.plain), (tail, palette.strong if changed else palette.faint))

    def _about(self, part: SettablePart, width: int) -> list[str]:
        """The selected part's role and ties, in lines."""
        words = printable(part.role) or str(part.kind)
        tied = self.desk.parts.tied_to(part.designator)
        lines = textwrap.wrap(words, max(8, width))
        return [*lines, *textwrap.wrap(f"tied to {', '.join(tied)}", max(8, width))] if tied else lines

    def on_click(self, event: Click) -> None:
        """Select the part that was clicked."""
        index = self._first + event.y - 1
        if event.y >= 1 and index < len(self.desk.parts.parts):
            self.act(lambda: self.desk.parts.choose(index))

    def on_mouse_scroll_up(self, event: MouseScrollUp) -> None:
        """Step up."""
        event.stop()
        self.act(self.desk.parts.do_value_up)

    def on_mouse_scroll_down(self, event: MouseScrollDown) -> None:
        """Step down."""
        event.stop()
        self.act(self.desk.parts.do_value_down)


def _slider(position: float) -> str:
    """A potentiometer's track with its wiper."""
    cells = ["─"] * _SLIDER
    cells[round(position * (_SLIDER - 1))] = "◆"
    return "".join(cells)
