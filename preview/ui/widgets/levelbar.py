"""A level as a bar on a logarithmic axis of volts, so that the room to a wall is headroom in dB."""

from __future__ import annotations

import math
from dataclasses import dataclass

from preview.ui.theme import Palette
from preview.ui.units import LevelUnit
from preview.ui.widgets.board import Row, row

__all__ = ["VoltAxis", "level_bar", "scale_line"]

_SPAN_DB = 63.0
"""Lowest to highest level on the axis [dB]."""
_OVER_DB = 3.0
"""What the axis shows above the highest wall [dB]."""
RMS, PEAK, HOLD, RAIL, CEILING, BEYOND = "▆", "▂", "╿", "▐", "┊", "░"
"""RMS stands tall, the peak lies low; rails are solid with hatching behind, full scale is a dotted line."""


@dataclass(frozen=True, slots=True)
class VoltAxis:
    """A logarithmic axis of volts."""

    top_v: float
    """Right end [V]."""
    cells: int
    """Its length [cells]."""

    @classmethod
    def up_to(cls, highest_v: float, cells: int) -> VoltAxis:
        """An axis that ends a little above the highest wall."""
        return cls(highest_v * 10.0 ** (_OVER_DB / 20.0), cells)

    def place(self, level_v: float) -> float:
        """Distance from the left end [cells], not cut at the ends."""
        if not level_v > 0.0:
            return -math.inf
        return self.cells * (1.0 + 20.0 * math.log10(level_v / self.top_v) / _SPAN_DB)


def scale_line(axis: VoltAxis, unit: LevelUnit = LevelUnit.VOLTS, full_scale_v: float = 1.0) -> str:
    """The scale above the bars: round levels in that unit, as many as have room."""
    cells = [" "] * axis.cells
    free_from = 0
    bottom_v = axis.top_v * 10.0 ** (-_SPAN_DB / 20.0)
    for mark_v, label in unit.marks(bottom_v, axis.top_v, full_scale_v):
        at = int(axis.place(mark_v))
        if at >= free_from and at + len(label) <= axis.cells:
            cells[at : at + len(label)] = list(label)
            free_from = at + len(label) + 1
    return "".join(cells)


def level_bar(
    axis: VoltAxis,
    palette: Palette,
    *,
    rms_v: float,
    peak_v: float,
    hold_v: float,
    wall_v: float | None,
    rail: bool,
) -> Row:
    """One channel's bar.

    Parameters
    ----------
    rms_v, peak_v, hold_v : float
        The levels [V].
    wall_v : float, optional
        The limit [V]; None for none.
    rail : bool
        Whether the wall is a supply rail (solid) and not digital full scale (dotted); output, not input.
    """
    tone = palette.output if rail else palette.input
    glyphs = [" "] * axis.cells
    kinds = ["ground"] * axis.cells

    def fill(level_v: float, glyph: str) -> None:
        for x in range(max(0, min(axis.cells, round(axis.place(level_v)))) if level_v > 0.0 else 0):
            glyphs[x], kinds[x] = glyph, "tone"

    fill(peak_v, PEAK)
    fill(rms_v, RMS)
    if wall_v is not None and math.isfinite(wall_v):
        at = int(axis.place(wall_v))
        for x in range(max(0, at), axis.cells):
            if kinds[x] == "ground" and (rail or x == at):
                glyphs[x] = (RAIL if rail else CEILING) if x == at else BEYOND
                kinds[x] = "wall"
    if hold_v > 0.0:
        at = int(axis.place(hold_v) - 1e-9)
        if 0 <= at < axis.cells and (kinds[at] != "wall" or glyphs[at] == BEYOND):
            glyphs[at], kinds[at] = HOLD, "hold"
    styles = {"ground": palette.faint, "tone": tone, "wall": palette.faint, "hold": palette.strong}
    pieces: list[tuple[str, str]] = []
    for glyph, kind in zip(glyphs, kinds, strict=True):
        if pieces and pieces[-1][1] == kind:
            pieces[-1] = (pieces[-1][0] + glyph, kind)
        else:
            pieces.append((glyph, kind))
    return row(*((text, styles[kind]) for text, kind in pieces))
