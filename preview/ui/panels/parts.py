"""The list of valued parts, the selected one marked."""

from __future__ import annotations

from collections.abc import Sequence

from textual.events import Click
from textual.message import Message

from preview.errors import printable
from preview.ui.changes import series_of
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, heading, row
from preview.ui.words import code, value
from preview.values.eseries import contains

__all__ = ["PartsPanel"]


class PartsPanel(Board):
    """A row for each part: designator, value, series, value before, role. A click selects."""

    class Chosen(Message):
        """A click on a part."""

        def __init__(self, index: int) -> None:
            super().__init__()
            self.index = index
            """Place of the part in the list."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="parts")
        self.desk = desk
        self._first = 0

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        desk, palette = self.desk, self.look.palette
        parts = desk.session.stage.valued
        result = [heading("parts", f"{len(parts)}" if len(parts) >= height else "", width - 1, self.look)]
        if not parts:
            return [*result, row((" this stage has no part with a value", palette.faint))]
        names = max(2, *(len(p.designator) for p in parts)) if len(parts) > 1 else len(parts[0].designator)
        names = min(names, 8)
        role_rows = 2 if height >= len(parts) + 4 else 0
        room = max(1, height - 1 - role_rows)
        self._first = max(0, min(self._first, desk.chosen, len(parts) - room))
        if desk.chosen >= self._first + room:
            self._first = desk.chosen - room + 1
        for index in range(self._first, min(len(parts), self._first + room)):
            part = parts[index]
            was = desk.value_before(part.designator)
            chosen = index == desk.chosen
            series = series_of(part)
            fits = " " if contains(part.value, series) else "≠"
            text = f"{fit(printable(part.designator), names)} {fit(value(part), 9)} {fits}{fit(series, 4)}"
            changed = was is not None and was != part.value
            note = ""
            if changed:
                before = next(p for p in desk.before.stage.valued if p.designator == part.designator)
                note = f"was {code(before)}"
            elif not role_rows:
                note = printable(part.role)
            left = width - 3 - len(text) - 2
            tail = f" {fit(note, left)}" if left >= 7 else " •" if changed else ""
            if chosen:
                result.append(
                    row(("▸", palette.mark), (f" {text} ", palette.selected), (tail, palette.strong))
                )
            else:
                result.append(
                    row(
                        ("  " + text + " ", palette.plain),
                        (tail, palette.strong if changed else palette.faint),
                    )
                )
        if role_rows and desk.part is not None:
            role = printable(desk.part.role) or str(desk.part.kind)
            result.append(row(("", palette.plain)))
            result += [row((f"  {line}", palette.faint)) for line in _wrapped(role, width - 3)]
        return result[:height]

    def on_click(self, event: Click) -> None:
        """Select the part that was clicked."""
        index = self._first + event.y - 1
        if event.y >= 1 and index < len(self.desk.session.stage.valued):
            self.post_message(self.Chosen(index))


def _wrapped(text: str, width: int) -> list[str]:
    """The text in lines of that width."""
    lines = [""]
    for word in text.split():
        joined = f"{lines[-1]} {word}".strip()
        if len(joined) <= width or not lines[-1]:
            lines[-1] = joined
        else:
            lines.append(word)
    return lines
