"""The schematic with the values as they are, the selected part marked."""

from __future__ import annotations

import re
from collections.abc import Sequence

from textual.events import Click

from preview.circuit.parts import Part, Stage
from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.texts import node_lines, part_line
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, heading, row, row_cells
from preview.ui.words import code, value

__all__ = ["CircuitPanel", "annotated", "drawing_width"]


def drawing_width(stage: Stage) -> int:
    """Width of the stage's drawing [cells]; 0 where it has none."""
    return max((len(line) for line in stage.drawing.splitlines()), default=0)


def annotated(stage: Stage, selected: str | None) -> list[list[tuple[str, str | None]]]:
    """The drawing in lines of pieces: text and, where it stands for a part, its designator.

    Each designator is followed by the part's value, written over the blanks behind it; where there is no room
    for it the designator stands alone. An arrow points at the selected part.
    """
    parts = {part.designator: part for part in stage.parts}
    if not parts:
        return [[(printable(line), None)] for line in stage.drawing.splitlines()]
    names = "|".join(re.escape(name) for name in sorted(parts, key=len, reverse=True))
    pattern = re.compile(rf"(?<!\w)(?:{names})(?!\w)")
    lines = []
    for raw in stage.drawing.rstrip("\n").splitlines():
        line = printable(raw)
        pieces: list[tuple[str, str | None]] = []
        end = 0
        for found in pattern.finditer(line):
            before = line[end : found.start()]
            if found[0] == selected and before.endswith(" "):
                before = before[:-1] + "▸"
            pieces.append((before, None))
            blanks = len(line) - len(line[found.end() :].lstrip(" ")) - found.end()
            at_end = found.end() + blanks == len(line)
            label = _label(parts[found[0]], 99 if at_end else blanks)
            pieces.append((label, found[0]))
            end = min(len(line), found.start() + len(label))
        pieces.append((line[end:], None))
        lines.append(pieces)
    return lines


def _label(part: Part, blanks: int) -> str:
    """Designator and value in no more than the blanks behind the designator, one of them left free."""
    text = code(part)
    return f"{part.designator} {text}" if len(text) + 2 <= blanks else part.designator


class CircuitPanel(Board):
    """The stage's drawing with live values, or a list of its parts where it has none; volts at the nodes on request.

    A click on a part selects it.
    """

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="circuit")
        self.desk = desk
        self._places: list[tuple[int, int, int, str]] = []

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        stage, palette = self.desk.session.stage, self.look.palette
        drawn = bool(stage.drawing.strip())
        nodes = node_lines(self.desk) if self.desk.view.node_volts else []
        wide = max((len(line) for line in nodes), default=0) + 3
        note = printable(stage.name) + (", volts at the nodes" if nodes else "")
        result = [heading("circuit", note, width - 1, self.look)]
        room = max(0, height - 1)
        own = drawing_width(stage) + 2 if drawn else max(len(part_line(part)) for part in stage.parts) + 3
        lines = len(stage.drawing.rstrip("\n").splitlines()) if drawn else len(stage.parts)
        self._places = []
        if not nodes:
            return [*result, *self._parts(room, drawn)][:height]
        told = [
            row((f" {line}", palette.strong if n == 0 else palette.plain)) for n, line in enumerate(nodes)
        ]
        if width >= own + wide:
            beside = self._parts(room, drawn)
            blank: Row = row(("", palette.plain))
            for y in range(max(len(beside), min(room, len(told)))):
                left = beside[y] if y < len(beside) else blank
                right = told[y] if y < len(told) else blank
                result.append((*left, *row((" " * (own - row_cells(left)), palette.plain)), *right))
            return result[:height]
        if room >= lines + len(told):
            return [*result, *self._parts(lines, drawn), *told]
        return [*result, *told][:height]

    def _parts(self, room: int, drawn: bool) -> list[Row]:
        """The drawing or the list, in no more than so many rows, the selected part in view."""
        stage, palette = self.desk.session.stage, self.look.palette
        part = self.desk.parts.part
        selected = part.designator if part else None
        if drawn:
            lines = annotated(stage, selected)
        else:
            names = max(len(p.designator) for p in stage.parts)
            values = max(len(value(p)) for p in stage.parts)
            lines = [[(printable(part_line(p, names, values)), p.designator)] for p in stage.parts]
        first = _first_line([any(name == selected for _, name in line) for line in lines], room)
        rows = []
        for y, line in enumerate(lines[first : first + room]):
            here = next((name for _, name in line if name == selected), None)
            mark = "▸" if not drawn and here else " "
            pieces = [(mark, palette.mark if mark == "▸" else palette.plain)]
            x = 1
            for text, name in line:
                style = (
                    palette.plain if not name else palette.selected if name == selected else palette.strong
                )
                pieces.append((text, style))
                if name:
                    self._places.append((y + 1, x, x + len(text), name))
                x += len(text)
            rows.append(row(*pieces))
        return rows

    def on_click(self, event: Click) -> None:
        """Select the part that was clicked."""
        here = (name for y, left, right, name in self._places if event.y == y and left <= event.x < right)
        if name := next(here, None):
            self.act(lambda: self._choose(name))

    def _choose(self, name: str) -> None:
        """A part that can be set is selected in the list, an op-amp for its type and verdicts."""
        if not self.desk.parts.choose_named(name) and name in {
            o.designator for o in self.desk.session.stage.opamps
        }:
            self.desk.view.choose_opamp(name)


def _first_line(has_selected: list[bool], room: int) -> int:
    """The first line to show so that the selected part is in view."""
    if len(has_selected) <= room or not any(has_selected):
        return 0
    at = has_selected.index(True)
    return max(0, min(at - room // 2, len(has_selected) - room))
