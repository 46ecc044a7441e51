"""Choosing one of several rows."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.text import Text
from textual.events import Click
from textual.message import Message
from textual.widget import Widget
from textual.widgets import Static

from preview.errors import printable
from preview.ui.screens.dialog import Dialog
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row

__all__ = ["Choice", "ChooserScreen"]

Choice = tuple[str, str, str]
"""Answer, label, explanation."""
_AROUND = 10
"""Rows that the box needs around the choices, and what is left of the desk [cells]."""


class _ChoiceBoard(Board):
    """The rows; a click takes one."""

    class Taken(Message):
        """A click on a row."""

        def __init__(self, index: int) -> None:
            super().__init__()
            self.index = index
            """Place of the row."""

    def __init__(self, look: Look, choices: Sequence[Choice], at: int) -> None:
        super().__init__(look, name="choices")
        self.choices = choices
        self.at = at
        self._first = 0

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        palette = self.look.palette
        self._first = min(self._first, self.at)
        self._first = max(self._first, self.at - height + 1)
        labels = max(len(label) for _, label, _ in self.choices) + 2
        result = []
        for index in range(self._first, min(len(self.choices), self._first + height)):
            _, label, about = self.choices[index]
            chosen = index == self.at
            text = f" {fit(printable(label), min(labels, width - 4))}"
            left = width - 2 - len(text)
            result.append(
                row(
                    (self._mark(index, chosen, height), palette.mark),
                    (text, palette.selected if chosen else palette.strong),
                    (f" {fit(printable(about), left)}" if left > 8 else "", palette.plain),
                )
            )
        return result

    def _mark(self, index: int, chosen: bool, height: int) -> str:
        """An arrow at the chosen row, and where rows go on above or below."""
        if chosen:
            return "▸"
        if index == self._first > 0:
            return "▴"
        last = self._first + height - 1
        return "▾" if index == last < len(self.choices) - 1 else " "

    def on_click(self, event: Click) -> None:
        """Take the row."""
        index = self._first + event.y
        if index < len(self.choices):
            self.post_message(self.Taken(index))


class ChooserScreen(Dialog[str]):
    """A list with one row marked; Enter answers with that row's word.

    Parameters
    ----------
    title : str
        What is chosen.
    choices : sequence of Choice
        The rows.
    now : str
        The answer in force; its row is marked first.
    look : Look
        Colours.
    heads : str
        A line above the explanations; empty for none.
    """

    def __init__(
        self, title: str, choices: Sequence[Choice], *, now: str, look: Look, heads: str = ""
    ) -> None:
        super().__init__(
            printable(title),
            ("row_up", "and"),
            ("row_down", "move"),
            ("accept", "choose"),
            ("cancel", "leave"),
        )
        self._choices = list(choices)
        self._look = look
        self._heads = heads
        self._start = next((i for i, choice in enumerate(choices) if choice[0] == now), 0)

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        board = _ChoiceBoard(self._look, self._choices, self._start)
        board.styles.height = min(len(self._choices), max(1, self.app.size.height - _AROUND))
        if self._heads:
            labels = max(len(label) for _, label, _ in self._choices) + 2
            yield Static(Text(" " * (labels + 3) + self._heads), classes="heads")
        yield board

    def _move(self, by: int) -> None:
        board = self.query_one(_ChoiceBoard)
        board.at = (board.at + by) % len(self._choices)
        board.rebuild()

    def do_row_down(self) -> None:
        """Next row."""
        self._move(1)

    def do_row_up(self) -> None:
        """Row before."""
        self._move(-1)

    def do_accept(self) -> None:
        """Answer with the marked row."""
        self.dismiss(self._choices[self.query_one(_ChoiceBoard).at][0])

    def on__choice_board_taken(self, event: _ChoiceBoard.Taken) -> None:
        """Answer with the clicked row."""
        self.dismiss(self._choices[event.index][0])
