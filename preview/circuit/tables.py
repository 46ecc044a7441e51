"""Reading a TOML file into tables whose errors name the file, the table and the key."""

from __future__ import annotations

import math
import re
import stat
import tomllib
from collections.abc import Callable
from difflib import get_close_matches
from pathlib import Path

from preview.errors import NotationError, StageFileError, printable
from preview.values.notation import quoted

__all__ = ["LARGEST_FILE_BYTES", "Table", "decode", "parse_toml", "read_bytes"]

LARGEST_FILE_BYTES = 1_000_000
"""A longer stage file is refused unread."""

_WORDS: dict[type, str] = {
    str: "a string",
    bool: "true or false",
    int: "a whole number",
    float: "a number",
    dict: "a table",
    list: "an array",
}
_POSITION = re.compile(
    r"(?P<reason>.*) \(at (?:line (?P<line>\d+), column (?P<column>\d+)|end of document)\)"
)


def read_bytes(path: Path) -> bytes:
    """The whole file; StageFileError says why it cannot be had."""
    file = str(path)
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise StageFileError(f"{file}: is a folder", "name a stage file in it")
        if not stat.S_ISREG(mode):
            raise StageFileError(f"{file}: not a regular file", "save the stage to a file first")
        with path.open("rb") as stream:
            data = stream.read(LARGEST_FILE_BYTES + 1)
    except FileNotFoundError as error:
        raise StageFileError(
            f"{file}: no such file", "`preview stages` lists the stages there are"
        ) from error
    except StageFileError:
        raise
    except (OSError, ValueError) as error:
        why = (error.strerror if isinstance(error, OSError) else None) or str(error)
        raise StageFileError(f"{file}: cannot be read: {why}") from error
    if len(data) > LARGEST_FILE_BYTES:
        raise StageFileError(f"{file}: longer than 1 MB", "a stage file is a page of text; is this one?")
    return data


def decode(data: bytes, file: str) -> str:
    """The text of the file; StageFileError names the line that is not UTF-8."""
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        found = f"byte 0x{data[error.start]:02x}"
        raise StageFileError(f"{file} line {line}: {found} is not UTF-8 text", "save it as UTF-8") from error


def parse_toml(text: str, file: str) -> Table:
    """The file's top table; StageFileError names the line that is not TOML."""
    try:
        return Table(file, "", tomllib.loads(text))
    except tomllib.TOMLDecodeError as error:
        match = _POSITION.fullmatch(str(error))
        reason = match["reason"] if match else str(error)
        place = f" line {match['line']}, column {match['column']}" if match and match["line"] else ""
        ending = "" if place else " at the end of the file"
        if reason == "Cannot overwrite a value":
            reason = "a key is written twice"
        raise StageFileError(
            f"{file}{place}: not valid TOML{ending}: {reason[:1].lower()}{reason[1:]}",
            "each line is key = value; text stands in quotation marks",
        ) from error
    except (ValueError, RecursionError) as error:
        raise StageFileError(f"{file}: not valid TOML: a number too long or tables too deep") from error


class Table:
    """One table of the file, and where it stands.

    Parameters
    ----------
    file : str
        The file's name for messages.
    label : str
        The table's name for messages, such as ``[parts.R3]``; empty for the top table.
    data : dict
        What tomllib made of it.
    """

    def __init__(self, file: str, label: str, data: dict[str, object]) -> None:
        self.file = file
        self.place = f"{file} {label}".rstrip()
        self.data = data

    def error(self, key: str, reason: str, hint: str = "") -> StageFileError:
        """The error for the value of that key."""
        return StageFileError(f"{self.place} {key} = {shown(self.data[key])}: {reason}", hint)

    def missing(self, keys: list[str], example: str) -> StageFileError:
        """The error for keys that are not there."""
        word = "keys" if len(keys) > 1 else "key"
        return StageFileError(f"{self.place}: missing {word} {', '.join(keys)}", example)

    def expect_keys(self, required: tuple[str, ...], optional: tuple[str, ...], example: str) -> None:
        """Raise StageFileError for a key that is not known or one that is missing."""
        known = (*required, *optional)
        for key in self.data:
            if key not in known:
                nearest = get_close_matches(key[:40], known, n=1)
                start = f"did you mean {nearest[0]}? " if nearest else ""
                raise StageFileError(
                    f"{self.place} {quoted(key)}: no such key", f"{start}keys are {', '.join(known)}"
                )
        missing = [key for key in required if key not in self.data]
        if missing:
            raise self.missing(missing, example)

    def text(self, key: str, default: str | None = None) -> str:
        """The string under that key."""
        if key not in self.data and default is not None:
            return default
        value = self.data[key]
        if not isinstance(value, str):
            raise self.error(key, f"{word_for(value)} where text in quotation marks is wanted")
        return value

    def line(self, key: str, *, required: bool = False) -> str:
        """Words on one line, cleaned; empty where they may be and are missing."""
        words = printable(" ".join(self.text(key, None if required else "").split()))
        if required and not words:
            raise self.error(key, "empty", "say it in a few words")
        return words

    def read(self, key: str, parse: Callable[[str], float]) -> float:
        """A value from its text; the complaint of ``parse`` is put behind file, table and key."""
        try:
            return parse(self.text(key))
        except NotationError as error:
            raise StageFileError(f"{self.place} {key} = {error.message}", error.hint) from error

    def flag(self, key: str, *, default: bool = False) -> bool:
        """The true or false under that key."""
        value = self.data.get(key, default)
        if not isinstance(value, bool):
            raise self.error(key, f"{word_for(value)} where true or false is wanted")
        return value

    def number(self, key: str) -> float:
        """The finite number under that key."""
        value = self.data[key]
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.error(key, f"{word_for(value)} where a plain number is wanted")
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            raise self.error(key, "not a finite number")
        return number

    def table(self, key: str, label: str) -> Table:
        """The table under that key; ``label`` is its name in messages."""
        value = self.data[key]
        if not isinstance(value, dict):
            raise self.error(key, f"{word_for(value)} where a table {{ ... }} is wanted")
        return Table(self.file, label, value)


def word_for(value: object) -> str:
    """What kind of thing stands there, in words."""
    return _WORDS.get(type(value), "a date or time")


def shown(value: object) -> str:
    """The value for a message, on one line, shortened where it is long."""
    if isinstance(value, str):
        return quoted(value)
    if isinstance(value, dict):
        return "{ ... }"
    if isinstance(value, list):
        short = all(isinstance(item, str | int | float) for item in value) and len(value) <= 4
        return f"[{', '.join(shown(item) for item in value)}]" if short else "[ ... ]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and abs(value) >= 10**20:
        return "a number of more than 20 digits"
    return str(value)
