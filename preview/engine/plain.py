"""Frozen dataclasses as nested tables and back, by their field types; each table names the class it stands for."""

from __future__ import annotations

import dataclasses
import types
from collections.abc import Mapping
from enum import Enum
from pathlib import Path
from typing import Any, Literal, Union, get_args, get_origin, get_type_hints

from preview.errors import PreviewError, printable

__all__ = ["from_plain", "to_plain"]

_CLASS = "is"


def to_plain(value: Any, leave_out: frozenset[str] = frozenset()) -> Any:
    """Tables, lists, strings, numbers and booleans; None and the fields named are left out."""
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        table: dict[str, Any] = {_CLASS: type(value).__name__}
        for field in dataclasses.fields(value):
            held = getattr(value, field.name)
            if held is not None and field.name not in leave_out:
                table[field.name] = to_plain(held, leave_out)
        return table
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, tuple | list):
        return [to_plain(one, leave_out) for one in value]
    return value


def from_plain(kind: Any, value: Any, where: str) -> Any:
    """A value of that type from what ``to_plain`` made of it.

    Raises
    ------
    PreviewError
        It is not of that type; the message begins with ``where``.
    """
    origin = get_origin(kind)
    if origin in (Union, types.UnionType):
        return _one_of(get_args(kind), value, where)
    if origin is Literal:
        if value in get_args(kind):
            return value
    elif origin is tuple:
        if isinstance(value, list):
            return _tuple(get_args(kind), value, where)
    elif isinstance(kind, type) and dataclasses.is_dataclass(kind):
        if isinstance(value, Mapping):
            return _dataclass(kind, value, where)
    elif isinstance(kind, type) and issubclass(kind, Enum):
        if value in [one.value for one in kind]:
            return kind(value)
    elif kind is Path:
        if isinstance(value, str):
            return Path(value)
    elif kind is float:
        if isinstance(value, int | float) and not isinstance(value, bool):
            return float(value)
    elif isinstance(value, kind) and (kind is bool or not isinstance(value, bool)):
        return value
    raise PreviewError(f"{where}: {printable(repr(value)[:60])} is not what belongs there")


def _one_of(kinds: tuple[Any, ...], value: Any, where: str) -> Any:
    """Of several types the one that the table names, or the first that fits."""
    if value is None and type(None) in kinds:
        return None
    classes = {k.__name__: k for k in kinds if isinstance(k, type) and dataclasses.is_dataclass(k)}
    if isinstance(value, Mapping) and classes:
        name = str(value.get(_CLASS, ""))
        if len(classes) == 1 or name in classes:
            return from_plain(classes.get(name, next(iter(classes.values()))), value, where)
        raise PreviewError(f"{where}: no such kind {printable(name)}", f"one of {', '.join(classes)}")
    trouble: PreviewError | None = None
    for kind in kinds:
        if kind is not type(None):
            try:
                return from_plain(kind, value, where)
            except PreviewError as error:
                trouble = error
    assert trouble is not None
    raise trouble


def _tuple(kinds: tuple[Any, ...], value: list[Any], where: str) -> tuple[Any, ...]:
    if len(kinds) == 2 and kinds[1] is Ellipsis:
        return tuple(from_plain(kinds[0], one, f"{where}[{at}]") for at, one in enumerate(value))
    if len(value) != len(kinds):
        raise PreviewError(f"{where}: {len(value)} values, not {len(kinds)}")
    return tuple(
        from_plain(kind, one, f"{where}[{at}]")
        for at, (kind, one) in enumerate(zip(kinds, value, strict=True))
    )


def _dataclass(kind: type, table: Mapping[str, Any], where: str) -> Any:
    hints = get_type_hints(kind)
    fields = {field.name: field for field in dataclasses.fields(kind)}
    unknown = [name for name in table if name not in fields and name != _CLASS]
    if unknown:
        raise PreviewError(
            f"{where}: unknown key {printable(unknown[0])}", "it may have been written by a newer version"
        )
    values: dict[str, Any] = {}
    for name, field in fields.items():
        if name in table:
            values[name] = from_plain(hints[name], table[name], f"{where}.{name}")
        elif type(None) in get_args(hints[name]):
            values[name] = None
        elif field.default is dataclasses.MISSING and field.default_factory is dataclasses.MISSING:
            raise PreviewError(f"{where}: the key {name} is missing")
    return kind(**values)
