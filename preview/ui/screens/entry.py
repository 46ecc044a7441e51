"""Typing one value: what is understood is echoed while it is typed, what is wrong is said in place."""

from __future__ import annotations

from collections.abc import Callable, Iterable

from rich.text import Text
from textual.widget import Widget
from textual.widgets import Input, Static

from preview.errors import PreviewError, printable
from preview.ui.screens.dialog import Dialog

__all__ = ["EntryScreen"]


class EntryScreen(Dialog[str]):
    """Ask for one line of text.

    Parameters
    ----------
    title : str
        What is asked for.
    about : str
        A line that explains it.
    now : str
        The value in force, shown where nothing is typed yet.
    understand : callable
        Text -> what it was understood as; raises PreviewError on what cannot be taken.
    """

    def __init__(self, title: str, *, about: str, now: str, understand: Callable[[str], str]) -> None:
        super().__init__(printable(title), ("accept", "take it"), ("cancel", "leave it as it is"))
        self._about = printable(about)
        self._now = printable(now)
        self._understand = understand
        self.answer_line = ""

    def body(self) -> Iterable[Widget]:
        """See :class:`Dialog`."""
        if self._about:
            yield Static(Text(self._about), classes="about")
        yield Input(placeholder=f"now {self._now}", id="typed", max_length=200)
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
            line = self._understand(text) if text.strip() else ""
        except PreviewError as error:
            good = False
            line = f"not taken: {error}"
        self.answer_line = printable(line)
        answer = self.query_one("#answer", Static)
        answer.set_class(not good, "wrong")
        answer.update(Text(self.answer_line or " "))
        return good
