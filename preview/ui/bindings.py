"""The keys in force as Textual binds them."""

from __future__ import annotations

from collections.abc import Iterable

from textual.binding import Binding

from preview.ui.actions import Action
from preview.ui.keynames import textual_key

__all__ = ["bindings"]


def bindings(actions: Iterable[Action]) -> list[Binding]:
    """Textual's bindings of these actions; each calls ``action_do`` with the action's name."""
    return [
        Binding(textual_key(key), f"do('{action.name}')", action.help, show=False, priority=key == "ctrl+q")
        for action in actions
        for key in action.keys
    ]
