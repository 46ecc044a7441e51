"""What every dialog shares: a box on the desk, keys from the table of actions."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Generic, TypeVar

from rich.text import Text
from textual.app import ComposeResult
from textual.containers import Vertical
from textual.screen import ModalScreen
from textual.widget import Widget
from textual.widgets import Static

from preview.ui.bindings import bindings
from preview.ui.keymap import KeyMap

__all__ = ["Dialog", "key_line"]

Answer = TypeVar("Answer")


def key_line(keys: KeyMap, *pairs: tuple[str, str]) -> Text:
    """A dialog's last line: the keys of these actions and what they do here."""
    text = Text()
    for name, words in pairs:
        text.append(keys[name].shown, "bold")
        text.append(f" {words}" + (" " if words == "and" else "   "))
    return text


class Dialog(ModalScreen[Answer], Generic[Answer]):
    """A box with a title, the dialog's own rows, and its keys.

    Parameters
    ----------
    keys_in_force : KeyMap
        The keys in force.
    title : str
        First line; already cleaned.
    keys : tuple of (str, str)
        The actions that work here and what they do in this dialog.
    """

    def __init__(self, keys_in_force: KeyMap, title: str, *keys: tuple[str, str]) -> None:
        super().__init__()
        self.keys = keys_in_force
        self._title = title
        self._key_pairs = keys
        for binding in bindings(keys_in_force[name] for name, _ in keys):
            self._bindings.bind(binding.key, binding.action, binding.description, show=False)

    def body(self) -> Iterable[Widget]:
        """The dialog's own widgets."""
        return ()

    def compose(self) -> ComposeResult:
        """The box."""
        with Vertical(id="box"):
            yield Static(Text(self._title, "bold"), classes="title")
            yield from self.body()
            yield Static(key_line(self.keys, *self._key_pairs), classes="keys")

    def action_do(self, name: str) -> None:
        """One of the dialog's keys."""
        getattr(self, f"do_{name}")()

    def do_cancel(self) -> None:
        """Leave without a change."""
        self.dismiss(None)
