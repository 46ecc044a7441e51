"""The keys in force: those of the table, or those that a person has put in their place.

A person's own keys stand in ``keys.toml`` in their config folder, a table of action names::

    [keys]
    play_pause = "f5"
    value_up = ["right", "n"]
    bypass = []            # no key; the command palette still has it
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterable
from dataclasses import replace
from difflib import get_close_matches
from pathlib import Path

from preview.errors import UsageError, printable
from preview.ui.actions import ACTIONS, Action, Group
from preview.ui.keynames import key_shown, key_understood
from preview.values.notation import quoted

__all__ = ["KEYS_FILE", "KeyMap", "read_keys"]

KEYS_FILE = "keys.toml"
_LARGEST_BYTES = 1 << 18


class KeyMap:
    """The actions with the keys that are in force.

    Parameters
    ----------
    actions : iterable of Action
        The table, or the table with other keys in it.
    """

    def __init__(self, actions: Iterable[Action] = ACTIONS) -> None:
        self.actions = tuple(actions)
        self._named = {action.name: action for action in self.actions}

    def __getitem__(self, name: str) -> Action:
        """The action of that name; KeyError if there is none."""
        return self._named[name]

    def get(self, name: str) -> Action | None:
        """The action of that name; None if there is none."""
        return self._named.get(name)

    @property
    def desk(self) -> tuple[Action, ...]:
        """The actions of the desk itself, without those of its dialogs."""
        return tuple(action for action in self.actions if action.group is not Group.DIALOG)

    @property
    def footer(self) -> tuple[Action, ...]:
        """The actions with a footer hint and a key, in the order in which they matter."""
        return tuple(action for action in self.actions if action.hint and action.keys)

    def shown(self, name: str) -> str:
        """The first key of an action as a message names it; its words where it has none."""
        action = self._named[name]
        return key_shown(action.keys[0]) if action.keys else action.words

    def for_key(self, key: str) -> Action | None:
        """The action of the desk that a key calls; None if it calls none."""
        return next((action for action in self.desk if key in action.keys), None)


def read_keys(folder: Path) -> KeyMap:
    """The table with a person's own keys from that folder in it; the table itself where there is no such file.

    Raises
    ------
    UsageError
        The file cannot be read, names an action that does not exist or a key twice.
    """
    path = folder / KEYS_FILE
    try:
        with open(path, "rb") as file:
            text = file.read(_LARGEST_BYTES).decode("utf-8")
        table = tomllib.loads(text)
    except FileNotFoundError:
        return KeyMap()
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise UsageError(f"{path}: {printable(str(error))}", "the keys of the table are in force") from error
    wanted = table.pop("keys", {})
    if table or not isinstance(wanted, dict):
        found = f"[{next(iter(table))}]" if table else "keys"
        raise UsageError(f"{path}: {found} is not a table of keys", "the file holds one table, [keys]")
    return KeyMap(_changed(wanted, path))


def _changed(wanted: dict[str, object], path: Path) -> list[Action]:
    known = {action.name: action for action in ACTIONS}
    for name, value in wanted.items():
        if name not in known:
            near = get_close_matches(name, known, n=1)
            hint = f"did you mean {near[0]}?" if near else "the help page lists the actions"
            raise UsageError(f"{path} [keys] {quoted(name)[1:-1]}: no such action", hint)
        texts = [value] if isinstance(value, str) else value
        if not isinstance(texts, list) or not all(isinstance(text, str) for text in texts):
            raise UsageError(f"{path} [keys] {name}: not a key", 'write "x" or ["x", "f5"]')
        try:
            keys = tuple(dict.fromkeys(key_understood(text) for text in texts))
        except UsageError as error:
            raise UsageError(f"{path} [keys] {name} = {error.message}", error.hint) from error
        known[name] = replace(known[name], keys=keys)
    taken = {
        key: name for name in wanted for key in known[name].keys if known[name].group is not Group.DIALOG
    }
    for name, action in known.items():
        if action.group is Group.DIALOG:
            continue
        for key in action.keys:
            if name in wanted and taken[key] != name:
                raise UsageError(f"{path} [keys] {name}: {key} is the key of {taken[key]} too", "give it one")
        if name not in wanted:  # a key that the person has given to another action is no longer this one's
            known[name] = replace(action, keys=tuple(key for key in action.keys if key not in taken))
    if not (known["quit"].keys and known["cancel"].keys and known["accept"].keys):
        raise UsageError(f"{path} [keys]: quit, cancel and accept need a key each", "give them one")
    return list(known.values())
