"""The figures in words: corner and gain before and after, and how near what is heard comes to the circuit."""

from __future__ import annotations

from collections.abc import Sequence

from preview.ui.desk import Desk
from preview.ui.texts import corner_text, gain_text, heard_text
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, row

__all__ = ["FiguresPanel"]


class FiguresPanel(Board):
    """Two rows: before and after; the heard response."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="figures")
        self.desk = desk

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        palette = self.look.palette
        now, before = self.desk.figures.now, self.desk.figures.before
        if now is None:
            return [row((" computing the response", palette.faint))]
        if now.problem:
            return [row((f" {now.problem}", palette.strong))]
        pieces = [(" corner ", palette.faint)]
        for label, text in (("", corner_text), ("   gain ", gain_text)):
            pieces.append((label, palette.faint))
            if before is not None and not before.problem and text(before) != text(now):
                pieces += [(text(before), palette.plain), (" → ", palette.faint)]
            pieces.append((text(now), palette.strong))
        heard = heard_text(now)
        if len(heard) + 1 > width:
            heard = heard.replace("heard response within", "heard within").replace(" of the circuit", "")
        return [row(*pieces), row((f" {heard}", palette.plain))][:height]
