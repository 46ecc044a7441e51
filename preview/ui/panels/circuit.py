"""The schematic with the values as they are, the selected part marked."""

from __future__ import annotations

import re
from collections.abc import Sequence

from rich.style import Style

from preview.circuit.parts import OpAmp, Part, Potentiometer, Stage
from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, heading, row
from preview.ui.words import code, value

__all__ = ["CircuitPanel", "annotated", "drawing_width", "part_line"]


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
    """The stage's drawing with live values, or a plain list where it has none."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="circuit")
        self.desk = desk

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        stage, palette = self.desk.session.stage, self.look.palette
        part = self.desk.parts.part
        selected = part.designator if part else None
        result = [heading("circuit", printable(stage.name), width - 1, self.look)]
        room = max(0, height - 1)
        if not stage.drawing.strip():
            return [*result, *self._list(stage, selected)][:height]
        lines = annotated(stage, selected)
        first = _first_line([any(name == selected for _, name in line) for line in lines], room)
        styles: dict[bool, Style] = {True: palette.selected, False: palette.strong}
        for line in lines[first : first + room]:
            pieces = [(text, styles[name == selected] if name else palette.plain) for text, name in line]
            result.append(row((" ", palette.plain), *pieces))
        return result

    def _list(self, stage: Stage, selected: str | None) -> list[Row]:
        """Every part with its nodes, where there is no drawing."""
        palette = self.look.palette
        rows = []
        for part in stage.parts:
            text = part_line(part)
            chosen = part.designator == selected
            mark = "▸" if chosen else " "
            rows.append(
                row(
                    (mark, palette.mark),
                    (f" {printable(text)} ", palette.selected if chosen else palette.plain),
                )
            )
        return rows


def part_line(part: Part) -> str:
    """A part in words: what it is, and where it is connected."""
    return f"{part.designator}  {value(part)}  {_connections(part)}"


def _connections(part: Part) -> str:
    """Where it is connected, in words."""
    if isinstance(part, OpAmp):
        return f"+ {part.plus}, - {part.minus}, out {part.out}"
    wiper = f", wiper {part.wiper}" if isinstance(part, Potentiometer) else ""
    return f"from {part.nodes[0]} to {part.nodes[1]}{wiper}"


def _first_line(has_selected: list[bool], room: int) -> int:
    """The first line to show so that the selected part is in view."""
    if len(has_selected) <= room or not any(has_selected):
        return 0
    at = has_selected.index(True)
    return max(0, min(at - room // 2, len(has_selected) - room))
