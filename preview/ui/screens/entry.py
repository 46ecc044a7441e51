"""Typing one value: what is understood is echoed while it is typed, what is wrong is said in place."""

from __future__ import annotations

from collections.abc import Iterable

from rich.text import Text
from textual.widget import Widget
from textual.widgets import Input, Static

from preview.errors import PreviewError, printable
from preview.ui.asking import Question
from preview.ui.keymap import KeyMap
from preview.ui.screens.dialog import Dialog

__all__ = ["EntryScreen"]


class EntryScreen(Dialog[str]):
    """Ask for one line of text.

    Parameters
    ----------
    keys : KeyMap
        The keys in force.
    question : Question
        What is asked.
    """

    def __init__(self, keys: KeyMap, question: Question) -> None:
        title = printable(question.title)
        super().__init__(keys, title, ("accept", "take it"), ("cancel", "leave it as it is"))
        self.question = question
        self.answer_line = ""

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        if self.question.about:
            yield Static(Text(printable(self.question.about)), classes="about")
        yield Input(placeholder=f"now {printable(self.question.now)}", id="typed", max_length=200)
        yield Static(Text(" "), id="answer")

    def on_mount(self) -> None:
        """The cursor into the line."""
        self.query_one("#typed", Input).focus()

    def on_input_changed(self, event: Input.Changed) -> None:
        """Echo what is understood so far."""
        self._check(event.value)

    def on_input_submitted(self, event: Input.Submitted) -> None:
        """Take what is typed, if it can be taken; nothing typed changes nothing."""
        event.stop()
        if not event.value.strip():
            self.dismiss(None)
        elif self._check(event.value):
            self.dismiss(event.value)

    def do_accept(self) -> None:
        """Enter outside of the line."""
        self.query_one("#typed", Input).focus()

    def _check(self, text: str) -> bool:
        good = True
        try:
            line = self.question.understand(text) if text.strip() else ""
        except PreviewError as error:
            good = False
            line = f"not taken: {error}"
        self.answer_line = printable(line)
        answer = self.query_one("#answer", Static)
        answer.set_class(not good, "wrong")
        answer.update(Text(self.answer_line or " "))
        return good
