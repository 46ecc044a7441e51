"""Finding op-amp types by name.

A name is one of the built-in types, a bundled file, or a file in the person's own folder ``opamps`` in the
user's config folder for ``preview``, in this order; case does not matter. What has a path separator in it or
ends in ``.toml`` is a file.
"""

from __future__ import annotations

import os
from difflib import get_close_matches
from functools import cache
from importlib.resources import files
from pathlib import Path

import platformdirs

from preview.circuit.opamp import BUILT_IN_TYPES, IDEAL, PERFECT, OpAmpModel
from preview.circuit.opamp_reader import parse_opamp, read_sheet
from preview.circuit.opamp_sheet import OpAmpSheet
from preview.errors import UnknownNameError
from preview.values.notation import quoted

__all__ = ["find_opamp", "find_sheet", "is_path", "known_type", "opamp_names", "user_opamp_folder"]

_ENDING = ".toml"
_BUILT_IN = {"perfect": PERFECT, "ideal": IDEAL}


def user_opamp_folder() -> Path:
    """The folder in which a person's own op-amps are found by name; it need not exist."""
    return Path(platformdirs.user_config_dir("preview", appauthor=False)) / "opamps"


def opamp_names() -> tuple[str, ...]:
    """Every name that ``find_opamp`` knows: built in, bundled, then the person's own, each in order."""
    own = sorted(name for key, (name, _) in _own().items() if key not in _BUILT_IN and key not in _bundled())
    return (*BUILT_IN_TYPES, *(name for name, _ in _bundled().values()), *own)


def find_opamp(name_or_path: str) -> OpAmpModel:
    """The op-amp of that name, or in that file.

    Raises
    ------
    UnknownNameError
        No such name; the hint names the nearest and those there are.
    OpAmpFileError
        The file cannot be read or is not an op-amp.
    """
    built_in = _BUILT_IN.get(name_or_path.strip().lower())
    if built_in is not None:
        return built_in
    sheet = find_sheet(name_or_path)
    assert sheet is not None  # only built-in types have none
    return sheet.model


def find_sheet(name_or_path: str) -> OpAmpSheet | None:
    """The op-amp file of that name or path; None for a built-in type; raises as ``find_opamp`` does."""
    if is_path(name_or_path):
        return read_sheet(Path(name_or_path).expanduser())
    key = name_or_path.strip().lower()
    if key in _BUILT_IN:
        return None
    if key in _bundled():
        return _bundled_sheet(key)
    own = _own()
    if key in own:
        return read_sheet(own[key][1])
    names = opamp_names()
    spelled = {name.lower(): name for name in names}
    nearest = get_close_matches(key[:60], spelled, n=1, cutoff=0.5)
    start = f"did you mean {spelled[nearest[0]]}? " if nearest else ""
    raise UnknownNameError(
        f"no op-amp type named {quoted(name_or_path)[1:-1]}",
        f"{start}types are {', '.join(names)}; a file ends in {_ENDING}",
    )


def known_type(name_or_path: str) -> str:
    """The name as the library spells it, or the path; raises as ``find_opamp`` does."""
    model = find_opamp(name_or_path)
    return name_or_path.strip() if is_path(name_or_path) else model.type


def is_path(name_or_path: str) -> bool:
    """Whether the text means a file and not a name."""
    separators = {"/", os.sep, os.altsep or os.sep}
    return name_or_path.strip().endswith(_ENDING) or not separators.isdisjoint(name_or_path)


@cache
def _bundled() -> dict[str, tuple[str, str]]:
    """Name and text of each bundled type by its name in lower case."""
    entries = files("preview").joinpath("opamps").iterdir()
    named = sorted((e.name.removesuffix(_ENDING), e) for e in entries if e.name.endswith(_ENDING))
    return {name.lower(): (name, entry.read_text("utf-8")) for name, entry in named}


@cache
def _bundled_sheet(key: str) -> OpAmpSheet:
    """The bundled type of that name in lower case; its text cannot change while the program runs."""
    name, text = _bundled()[key]
    return parse_opamp(text, name=name, file=f"opamps/{name}{_ENDING}")


def _own() -> dict[str, tuple[str, Path]]:
    """Name and path of the person's own types by name in lower case; empty where the folder is missing."""
    try:
        entries = sorted(user_opamp_folder().iterdir())
    except OSError:
        return {}
    return {entry.stem.lower(): (entry.stem, entry) for entry in entries if entry.suffix == _ENDING}
