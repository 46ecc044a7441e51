"""Op-amps and supply: what this signal asks of each, a line for each limit with reason and cure."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from textual.events import Click

from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.verdicts import Grade, Verdict, verdicts
from preview.ui.widgets.board import Board, Row, heading, row
from preview.ui.words import limits, rails, type_name

__all__ = ["OpAmpsPanel"]


class OpAmpsPanel(Board):
    """A heading for each op-amp, its verdicts below it; what must be seen is reversed and has a mark.

    A click on an op-amp's heading selects it.
    """

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="opamps")
        self.desk = desk
        self._heads: dict[int, str] = {}

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        desk, palette = self.desk, self.look.palette
        note = f"supply {rails(desk.session.supply)}"
        if desk.session.without:
            note += f", without {', '.join(desk.session.without)}"
        if progress := desk.clips.progress():
            note += f"; {progress}"
        result = [heading("op-amps", note, width - 1, self.look)]
        self._heads = {}
        sites = [site for site in desk.sites() if desk.view.opamp in (None, site.designator)]
        if not sites:
            return [*result, row((" this stage has no op-amp", palette.faint))]
        lines = {site.designator: verdicts(desk, site.designator) for site in sites}
        # Where not all fit, what is fine goes first.
        least = Grade.OPEN
        while least < Grade.LIMITS and self._needed(lines, least, width) > height - 1:
            least = Grade(least + 1)
        for site in sites:
            self._heads[len(result)] = site.designator
            words = f" {site.designator} {type_name(site.type)}"
            about = f"  output {limits(site.low_v, site.high_v)}" if site.high_v < float("inf") else ""
            shown = [verdict for verdict in lines[site.designator] if verdict.grade >= least]
            fine = len(lines[site.designator]) - len(shown)
            about += f"  {fine} more fine" if fine and shown else "  all fine" if fine else ""
            selected = palette.selected if site.designator == desk.view.opamp else palette.strong
            result.append(row((words, selected), (about, palette.faint)))
            for verdict in shown:
                style = palette.alarm if verdict.grade is Grade.LIMITS else palette.plain
                style = palette.faint if verdict.grade is Grade.OPEN else style
                for n, line in enumerate(_wrapped(verdict.line, width)):
                    mark = verdict.grade.glyph if n == 0 else " "
                    result.append(row((f" {mark} ", palette.mark), (printable(line), style)))
        return result[:height]

    @staticmethod
    def _needed(lines: dict[str, list[Verdict]], least: Grade, width: int) -> int:
        shown = [v for found in lines.values() for v in found if v.grade >= least]
        return len(lines) + sum(len(_wrapped(verdict.line, width)) for verdict in shown)

    def on_click(self, event: Click) -> None:
        """Select the op-amp whose heading was clicked."""
        name = self._heads.get(event.y)
        if name is not None:
            self.act(lambda: self.desk.view.choose_opamp(name))


def _wrapped(text: str, width: int) -> list[str]:
    return textwrap.wrap(text, max(20, width - 4), subsequent_indent="  ")
