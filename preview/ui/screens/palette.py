"""Every action by its name: type a few letters, Enter does the marked one."""

from __future__ import annotations

from collections.abc import Iterable

from textual.widget import Widget
from textual.widgets import Input

from preview.ui.asking import Choice
from preview.ui.keymap import KeyMap
from preview.ui.screens.chooser import ChoiceBoard
from preview.ui.screens.dialog import Dialog
from preview.ui.theme import Look

__all__ = ["PaletteScreen", "matching"]

_AROUND = 11
"""Rows that the box needs around the actions, and what is left of the desk [cells]."""


def matching(keys: KeyMap, text: str) -> list[Choice]:
    """The actions that have every typed word in their name, help or group; those that begin with it first."""
    words = text.lower().split()
    found = []
    for place, action in enumerate(keys.desk):
        where = f"{action.words} {action.help} {action.group.value}".lower()
        if all(word in where for word in words):
            rank = (
                0
                if action.words.startswith(text.lower().strip())
                else 1
                if words and words[0] in action.words
                else 2
            )
            found.append(
                (rank, place, Choice(action.name, action.words, f"{action.shown:<12} {action.help}"))
            )
    return [choice for _, _, choice in sorted(found, key=lambda entry: entry[:2])]


class PaletteScreen(Dialog[str]):
    """A line to type in, and the actions that it fits.

    Parameters
    ----------
    keys : KeyMap
        The keys in force.
    look : Look
        Colours.
    """

    def __init__(self, keys: KeyMap, look: Look) -> None:
        super().__init__(
            keys,
            "Every action",
            ("row_up", "and"),
            ("row_down", "move"),
            ("accept", "do it"),
            ("cancel", "leave"),
        )
        self._board = ChoiceBoard(look, matching(keys, ""), 0)

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        yield Input(placeholder="part of its name, or of what it does", id="typed", max_length=60)
        self._board.styles.height = max(1, min(len(self._board.choices), self.app.size.height - _AROUND))
        yield self._board

    def on_mount(self) -> None:
        """The cursor into the line."""
        self.query_one("#typed", Input).focus()

    def on_input_changed(self, event: Input.Changed) -> None:
        """Show what fits."""
        self._board.choices = matching(self.keys, event.value)
        self._board.at = 0
        self._board.rebuild()

    def on_input_submitted(self, event: Input.Submitted) -> None:
        """Do the marked one."""
        event.stop()
        self.do_accept()

    def do_accept(self) -> None:
        """Answer with the marked action."""
        if self._board.choices:
            self.dismiss(self._board.choices[self._board.at].answer)

    def _move(self, by: int) -> None:
        self._board.at = (self._board.at + by) % max(1, len(self._board.choices))
        self._board.rebuild()

    def do_row_down(self) -> None:
        """Next action."""
        self._move(1)

    def do_row_up(self) -> None:
        """Action before."""
        self._move(-1)

    def on_choice_board_taken(self, event: ChoiceBoard.Taken) -> None:
        """Do the clicked one."""
        self.dismiss(self._board.choices[event.index].answer)
