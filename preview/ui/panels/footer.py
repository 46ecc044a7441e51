"""The foot of the desk: the latest message, and the keys that matter most."""

from __future__ import annotations

import textwrap
import time
from collections.abc import Callable, Sequence

from rich.cells import cell_len
from rich.style import Style
from textual.events import Click
from textual.message import Message

from preview.errors import printable
from preview.ui.keymap import KeyMap
from preview.ui.keynames import key_shown
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row

__all__ = ["FooterPanel"]

_SHOWN_S = 6.0
_ERROR_SHOWN_S = 20.0
_MOST_ROWS = 4


class FooterPanel(Board):
    """Hints from the table of actions, as many as fit; a message takes the first row while it is new."""

    class Pressed(Message):
        """A click on a hint."""

        def __init__(self, name: str) -> None:
            super().__init__()
            self.name = name
            """The action's name."""

    def __init__(self, look: Look, keys: KeyMap, *, now_s: Callable[[], float] = time.monotonic) -> None:
        super().__init__(look, name="foot")
        self._keys = keys
        self._places: list[tuple[int, int, int, str]] = []
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
        lines = self._message_lines(width)
        style = palette.strong if self._severity == "information" else palette.alarm
        shown = [row((fit(f" {line}", width), style)) for line in lines]
        return [*shown, *self._hint_rows(width, height - len(lines), len(lines))]

    def _hint_rows(self, width: int, height: int, first: int) -> list[Row]:
        """The hints in so many rows; where each stands is kept for the mouse."""
        palette = self.look.palette
        self._places = []
        rows: list[Row] = []
        pieces: list[tuple[str, Style]] = [(" ", palette.faint)]
        used = 1
        for action in self._keys.footer:
            shown = key_shown(action.keys[0])
            cells = cell_len(shown) + 1 + cell_len(action.hint) + 2
            if used + cells > width + 2:
                if len(rows) + 1 >= height:
                    continue
                rows.append(row(*pieces))
                pieces, used = [(" ", palette.faint)], 1
            pieces += [(shown, palette.mark), (f" {action.hint}  ", palette.faint)]
            self._places.append((first + len(rows), used, used + cells - 2, action.name))
            used += cells
        return [*rows, row(*pieces)][: max(0, height)]

    def on_click(self, event: Click) -> None:
        """Do what the clicked hint says."""
        for line, left, right, name in self._places:
            if event.y == line and left <= event.x < right:
                self.post_message(self.Pressed(name))
