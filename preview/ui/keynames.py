"""Names of keys: as a person writes them, as the screen shows them, as Textual calls them."""

from __future__ import annotations

import re
import unicodedata

from preview.errors import UsageError
from preview.values.notation import quoted

__all__ = ["key_shown", "key_understood", "textual_key"]

_NAMED = {
    "space": "space",
    "left": "←",
    "right": "→",
    "up": "↑",
    "down": "↓",
    "enter": "Enter",
    "escape": "Esc",
    "tab": "Tab",
    "home": "Home",
    "end": "End",
    "pageup": "PgUp",
    "pagedown": "PgDn",
    "insert": "Ins",
    "delete": "Del",
    "backspace": "⌫",
}
"""Keys that have a name and not a character, and how the screen writes them."""
_OTHER_NAMES = {
    "solidus": "slash",
    "reverse_solidus": "backslash",
    "commercial_at": "at",
    "hyphen_minus": "minus",
    "plus_sign": "plus",
    "low_line": "underscore",
}
"""Characters that Textual calls other than Unicode does."""
_SPELLINGS = {
    "esc": "escape",
    "return": "enter",
    "pgup": "pageup",
    "pgdn": "pagedown",
    "del": "delete",
    "ins": "insert",
}
_MODIFIED = re.compile(r"(ctrl|shift)\+(.+)", re.IGNORECASE)
_WRITE = 'write a character such as "x" or "]", a name such as "left" or "f5", or "ctrl+x", "shift+left"'


def key_understood(text: str) -> str:
    """A key as the table of actions writes it, from a person's text; UsageError if there is no such key."""
    body = text.strip() or text
    if len(body) == 1 and body.isprintable():
        return "space" if body == " " else body
    modified = _MODIFIED.fullmatch(body)
    if modified is not None:
        modifier, rest = modified[1].lower(), key_understood(modified[2])
        if modifier == "shift" and len(rest) == 1:
            raise UsageError(
                f"{quoted(text)}: shift and a character is another character", 'write "X" or "?"'
            )
        if (
            modifier == "ctrl"
            and not (rest.isascii() and len(rest) == 1 and rest.isalpha())
            and rest not in _NAMED
        ):
            raise UsageError(f"{quoted(text)}: terminals do not send this", _WRITE)
        return f"{modifier}+{rest.lower()}"
    name = _SPELLINGS.get(body.lower(), body.lower())
    if name in _NAMED or re.fullmatch(r"f([1-9]|1[0-2])", name):
        return name
    raise UsageError(f"{quoted(text)}: no such key", _WRITE)


def textual_key(key: str) -> str:
    """The name by which Textual calls a key of the table."""
    if len(key) != 1 or key.isalnum():
        return key
    name = unicodedata.name(key).lower().replace("-", "_").replace(" ", "_")
    return _OTHER_NAMES.get(name, name)


def key_shown(key: str) -> str:
    """A key of the table as the screen writes it: ``←``, ``shift ←``, ``F1``, ``ctrl+q``."""
    modifier, plus, rest = key.rpartition("+")
    if plus and modifier == "shift":
        return f"shift {key_shown(rest)}"
    if re.fullmatch(r"f\d+", key):
        return key.upper()
    return _NAMED.get(key, key)
