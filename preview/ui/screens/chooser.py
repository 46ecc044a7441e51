"""Choosing one of several rows."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.text import Text
from textual.events import Click
from textual.message import Message
from textual.widget import Widget
from textual.widgets import Static

from preview.errors import printable
from preview.ui.asking import Choice, Menu
from preview.ui.keymap import KeyMap
from preview.ui.screens.dialog import Dialog
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row

__all__ = ["ChoiceBoard", "ChooserScreen"]

_AROUND = 10
"""Rows that the box needs around the choices, and what is left of the desk [cells]."""


class ChoiceBoard(Board):
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
        labels = max((len(choice.label) for choice in self.choices), default=0) + 2
        result = []
        for index in range(self._first, min(len(self.choices), self._first + height)):
            choice = self.choices[index]
            chosen = index == self.at
            text = f" {fit(printable(choice.label), min(labels, width - 4))}"
            left = width - 2 - len(text)
            result.append(
                row(
                    (self._mark(index, chosen, height), palette.mark),
                    (text, palette.selected if chosen else palette.strong),
                    (f" {fit(printable(choice.about), left)}" if left > 8 else "", palette.plain),
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
    keys : KeyMap
        The keys in force.
    menu : Menu
        What is chosen, and from what.
    look : Look
        Colours.
    """

    def __init__(self, keys: KeyMap, menu: Menu, look: Look) -> None:
        super().__init__(
            keys,
            printable(menu.title),
            ("row_up", "and"),
            ("row_down", "move"),
            ("accept", "choose"),
            ("cancel", "leave"),
        )
        self.menu = menu
        self._look = look
        answers = [choice.answer for choice in menu.choices]
        self._start = answers.index(menu.now) if menu.now in answers else 0

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        board = ChoiceBoard(self._look, self.menu.choices, self._start)
        board.styles.height = min(len(self.menu.choices), max(1, self.app.size.height - _AROUND))
        if self.menu.heads:
            labels = max(len(choice.label) for choice in self.menu.choices) + 2
            yield Static(Text(" " * (labels + 3) + self.menu.heads), classes="heads")
        yield board

    def _move(self, by: int) -> None:
        board = self.query_one(ChoiceBoard)
        board.at = (board.at + by) % len(self.menu.choices)
        board.rebuild()

    def do_row_down(self) -> None:
        """Next row."""
        self._move(1)

    def do_row_up(self) -> None:
        """Row before."""
        self._move(-1)

    def do_accept(self) -> None:
        """Answer with the marked row."""
        self.dismiss(self.menu.choices[self.query_one(ChoiceBoard).at].answer)

    def on_choice_board_taken(self, event: ChoiceBoard.Taken) -> None:
        """Answer with the clicked row."""
        self.dismiss(self.menu.choices[event.index].answer)
