"""What a typed line means: an action by its words or its key, a choice by its number or its name."""

from __future__ import annotations

from preview.errors import UsageError
from preview.ui.actions import Action
from preview.ui.asking import Menu
from preview.ui.keymap import KeyMap
from preview.values.notation import quoted

__all__ = ["answer_of", "understood"]


def understood(keys: KeyMap, line: str) -> tuple[Action, str]:
    """The action that a line begins with, and the rest of the line.

    A key, the words of its name, as many of them as make it clear, or one word that no other name has.

    Raises
    ------
    UsageError
        No action is meant, or more than one could be.
    """
    if (action := keys.for_key(line)) is not None:
        return action, ""
    words = line.lower().split() or [line]
    named = {action.words: action for action in keys.desk}
    for count in range(len(words), 0, -1):
        typed = line.split(maxsplit=count)
        for head in (" ".join(words[:count]).replace("-", hyphen) for hyphen in (" ", "")):
            begun = [action for name, action in named.items() if name.startswith(head)]
            found = named.get(head) or (begun[0] if len(begun) == 1 else None)
            if found is not None:
                return found, typed[count] if len(typed) > count else ""
    inside = [action for name, action in named.items() if words[0] in name.split()]
    if len(inside) == 1:
        return inside[0], " ".join(line.split()[1:])
    begun = [action for name, action in named.items() if name.startswith(words[0])] or inside
    if begun:
        raise UsageError(
            f"{quoted(line)} could be {', '.join(action.words for action in begun)}", "type more of it"
        )
    raise UsageError(f"{quoted(line)}: no such action", "'help' lists what can be typed")


def answer_of(menu: Menu, text: str) -> str:
    """The choice that a number or a name stands for; UsageError if there is none."""
    if text.isdigit() and 1 <= int(text) <= len(menu.choices):
        return menu.choices[int(text) - 1].answer
    for choice in menu.choices:
        if text.lower() in (choice.answer.lower(), choice.label.lower()):
            return choice.answer
    raise UsageError(f"{quoted(text)} is not one of them", f"1 to {len(menu.choices)}, or a name")
