"""Nested tables as TOML text; ``tomllib`` reads them back as they were."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterator, Mapping

__all__ = ["toml_text"]

_BARE = re.compile(r"[A-Za-z0-9_-]+")


def toml_text(table: Mapping[str, object]) -> str:
    """The text; values are strings, numbers, booleans, lists of these, tables, and lists of tables."""
    return "\n".join(_lines(table, ())).strip() + "\n"


def _lines(table: Mapping[str, object], path: tuple[str, ...]) -> Iterator[str]:
    inner = {key: tables for key, value in table.items() if (tables := _tables(value))}
    for key, value in table.items():
        if key not in inner:
            yield f"{_key(key)} = {_value(value)}"
    for key, value in inner.items():
        here = (*path, key)
        name = ".".join(_key(part) for part in here)
        for one in value:
            yield ""
            yield f"[[{name}]]" if isinstance(table[key], list) else f"[{name}]"
            yield from _lines(one, here)


def _tables(value: object) -> list[Mapping[str, object]]:
    """The tables that stand in a value: itself, or all of a list's; empty for anything else."""
    if isinstance(value, Mapping):
        return [value]
    if isinstance(value, list) and all(isinstance(one, Mapping) for one in value):
        return value
    return []


def _key(key: str) -> str:
    return key if _BARE.fullmatch(key) else _quoted(key)


def _value(value: object) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _string(value)
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return repr(value) if math.isfinite(value) else "nan" if math.isnan(value) else f"{value:+}"
    if isinstance(value, list):
        return "[" + ", ".join(_value(one) for one in value) + "]"
    raise TypeError(f"{type(value).__name__} is no TOML value")


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def _string(text: str) -> str:
    """One line, or a block where the text has several."""
    if "\n" not in text:
        return _quoted(text)
    lines = (_quoted(line)[1:-1] for line in text.split("\n"))
    return '"""\n' + "\n".join(lines) + '"""'
