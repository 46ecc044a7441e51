"""The schematic with the values as they are, the selected part marked."""

from __future__ import annotations

import re
from collections.abc import Sequence

from textual.events import Click, MouseScrollDown, MouseScrollLeft, MouseScrollRight, MouseScrollUp
from textual.strip import Strip

from preview.circuit.parts import Part, Stage
from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.texts import node_lines, part_line
from preview.ui.theme import Look
from preview.ui.view import PAN_COLUMNS, PAN_LINES
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

    The selected part is always in view; a drawing that is larger than the panel is moved by keys and wheel. A click on
    a part selects it.
    """

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="circuit")
        self.desk = desk
        self._places: list[tuple[int, int, int, str]] = []
        self._panned: tuple[str, str | None] | None = None
        self._beyond = ""

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        stage, palette = self.desk.session.stage, self.look.palette
        drawn = bool(stage.drawing.strip())
        nodes = node_lines(self.desk) if self.desk.view.node_volts else []
        wide = max((len(line) for line in nodes), default=0) + 3
        note = printable(stage.name) + (", volts at the nodes" if nodes else "")
        room = max(0, height - 1)
        own = drawing_width(stage) + 2 if drawn else max(len(part_line(part)) for part in stage.parts) + 3
        lines = len(stage.drawing.rstrip("\n").splitlines()) if drawn else len(stage.parts)
        self._places, self._beyond = [], ""
        told = [
            row((f" {line}", palette.strong if n == 0 else palette.plain)) for n, line in enumerate(nodes)
        ]
        if not nodes:
            below = self._parts(width, room, drawn)
        elif width >= own + wide:
            beside = self._parts(own, room, drawn)
            below = []
            blank: Row = row(("", palette.plain))
            for y in range(max(len(beside), min(room, len(told)))):
                left = beside[y] if y < len(beside) else blank
                right = told[y] if y < len(told) else blank
                below.append((*left, *row((" " * (own - row_cells(left)), palette.plain)), *right))
        else:
            below = [*(self._parts(width, lines, drawn) if room >= lines + len(told) else []), *told]
        return [heading("circuit", self._beyond + note, width - 1, self.look), *below][:height]

    def _parts(self, width: int, room: int, drawn: bool) -> list[Row]:
        """The drawing or the list, in no more than so many columns and rows, the selected part in view."""
        stage, palette = self.desk.session.stage, self.look.palette
        part = self.desk.parts.part
        selected = part.designator if part else None
        if drawn:
            lines = annotated(stage, selected)
        else:
            names = max(len(p.designator) for p in stage.parts)
            values = max(len(value(p)) for p in stage.parts)
            lines = [[(printable(part_line(p, names, values)), p.designator)] for p in stage.parts]
        left, first = self._corner(lines, selected, width - 1, room)
        rows = []
        for y, line in enumerate(lines[first : first + room]):
            here = next((name for _, name in line if name == selected), None)
            mark = "▸" if not drawn and here else " "
            pieces = []
            x = 0
            for text, name in line:
                style = (
                    palette.plain if not name else palette.selected if name == selected else palette.strong
                )
                pieces.append((text, style))
                if name:
                    self._places.append((y + 1, x + 1 - left, x + 1 - left + len(text), name))
                x += len(text)
            margin = row((mark, palette.mark if mark == "▸" else palette.plain))
            rows.append((*margin, *Strip(row(*pieces)).crop(left, left + width - 1)))
        return rows

    def _corner(
        self, lines: Sequence[Sequence[tuple[str, str | None]]], selected: str | None, width: int, room: int
    ) -> tuple[int, int]:
        """The first column and line to show: the selected part in view, and from there as far as was panned."""
        view, keys = self.desk.view, self.desk.keys
        of = (self.desk.session.stage.name, selected)
        if of != self._panned:
            self._panned, view.pan = of, (0, 0)
        place = (0, 0, 0)
        for y, line in enumerate(lines):
            x = 0
            for text, name in line:
                if name is not None and name == selected:
                    place = (x, x + len(text), y)
                x += len(text)
        wide = max((sum(len(text) for text, _ in line) for line in lines), default=0)
        at = (_first(place[0], place[1], wide, width), _first(place[2], place[2] + 1, len(lines), room))
        most = (max(0, wide - width), max(0, len(lines) - room))
        left, first = (min(max(a + by, 0), end) for a, by, end in zip(at, view.pan, most, strict=True))
        view.pan = (left - at[0], first - at[1])
        beyond = (
            (left > 0, "◂", "pan_left"),
            (first > 0, "▴", "pan_up"),
            (first < most[1], "▾", "pan_down"),
            (left < most[0], "▸", "pan_right"),
        )
        more = " ".join(f"{mark} {keys.shown(name)}" for there, mark, name in beyond if there)
        self._beyond = f"more {more}; " if more else ""
        return left, first

    def on_mouse_scroll_up(self, _: MouseScrollUp) -> None:
        """What lies above."""
        self.act(lambda: self.desk.view.pan_by(0, -PAN_LINES))

    def on_mouse_scroll_down(self, _: MouseScrollDown) -> None:
        """What lies below."""
        self.act(lambda: self.desk.view.pan_by(0, PAN_LINES))

    def on_mouse_scroll_left(self, _: MouseScrollLeft) -> None:
        """What lies to the left."""
        self.act(lambda: self.desk.view.pan_by(-PAN_COLUMNS, 0))

    def on_mouse_scroll_right(self, _: MouseScrollRight) -> None:
        """What lies to the right."""
        self.act(lambda: self.desk.view.pan_by(PAN_COLUMNS, 0))

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


def _first(start: int, end: int, whole: int, room: int) -> int:
    """The first column or line to show so that ``start`` to ``end`` is in view, the beginning where it can be."""
    if whole <= room or end <= room:
        return 0
    if end - start >= room:
        return start
    return max(0, min((start + end - room) // 2, whole - room))
