"""The foot of the desk: the latest message, and the keys that matter most."""

from __future__ import annotations

import textwrap
import time
from collections.abc import Callable, Sequence

from rich.cells import cell_len
from rich.style import Style

from preview.errors import printable
from preview.ui.actions import footer_actions
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row

__all__ = ["FooterPanel"]

_SHOWN_S = 6.0
_ERROR_SHOWN_S = 20.0
_MOST_ROWS = 4


class FooterPanel(Board):
    """Hints from the table of actions, as many as fit; a message takes the first row while it is new."""

    def __init__(self, look: Look, *, now_s: Callable[[], float] = time.monotonic) -> None:
        super().__init__(look, name="foot")
        self.message = ""
        self._severity = "information"
        self._until_s = 0.0
        self._base = 1
        self._now_s = now_s

    def say(self, text: str, severity: str = "information") -> None:
        """Show a message for some seconds, an error for longer."""
        self.message = " ".join(printable(text).split())
        self._severity = severity
        self._until_s = self._now_s() + (_SHOWN_S if severity == "information" else _ERROR_SHOWN_S)
        self._grow()
        self.rebuild()

    def stand(self, height: int) -> None:
        """Rows without a message."""
        self._base = height
        self._grow()

    def _grow(self) -> None:
        """As many rows as a long message needs."""
        wanted = max(self._base, len(self._message_lines(self.size.width)))
        if self.styles.height is None or self.styles.height.value != wanted:
            self.styles.height = wanted

    def _message_lines(self, width: int) -> list[str]:
        if not self.message:
            return []
        word = {"warning": "caution: ", "error": "error: "}.get(self._severity, "")
        return textwrap.wrap(f"{word}{self.message}", max(20, width - 2))[:_MOST_ROWS]

    def tick(self) -> None:
        """Take an old message away."""
        if self.message and self._now_s() > self._until_s:
            self.message = ""
            self._grow()
            self.rebuild()

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        palette = self.look.palette
        hints = _hint_rows(width, height, palette.mark, palette.faint)
        style = palette.strong if self._severity == "information" else palette.alarm
        lines = [row((fit(f" {line}", width), style)) for line in self._message_lines(width)]
        return [*lines, *hints[: height - len(lines)]]


def _hint_rows(width: int, height: int, key: Style, text: Style) -> list[Row]:
    """The hints in so many rows."""
    rows: list[Row] = []
    pieces: list[tuple[str, Style]] = [(" ", text)]
    used = 1
    for action in footer_actions():
        shown = action.shown.partition(" or ")[0]
        cells = cell_len(shown) + 1 + cell_len(action.hint) + 2
        if used + cells > width + 2:
            if len(rows) + 1 == height:
                continue
            rows.append(row(*pieces))
            pieces, used = [(" ", text)], 1
        pieces += [(shown, key), (f" {action.hint}  ", text)]
        used += cells
    return [*rows, row(*pieces)]
