"""Finding stages by name, and changing their parts from option texts.

A name is looked for among the bundled stages, then in the person's own folder ``stages`` in the user's config
folder for ``preview``. A bundled name always means the bundled stage, so that it means the same on every
machine. What has a path separator in it or ends in ``.toml`` is a file.
"""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import replace
from difflib import get_close_matches
from importlib.resources import files
from pathlib import Path

import platformdirs

from preview.circuit.cascade import cascade
from preview.circuit.limits import QUANTITY, read_value
from preview.circuit.part_reader import opamp_type
from preview.circuit.parts import Diode, FixedVoltage, OpAmp, Part, Stage
from preview.circuit.reader import parse_stage, read_stage
from preview.circuit.settings import read_setting, setting_note
from preview.circuit.tables import decode, read_bytes
from preview.errors import OutputFileError, UnknownNameError, UsageError
from preview.values.notation import quoted, understood

__all__ = [
    "find_stage",
    "new_stage_file",
    "open_stages",
    "stage_names",
    "stage_source",
    "user_stage_folder",
    "with_overrides",
]

_ENDING = ".toml"


def user_stage_folder() -> Path:
    """The folder in which a person's own stages are found by name; it need not exist."""
    return Path(platformdirs.user_config_dir("preview", appauthor=False)) / "stages"


def stage_names() -> tuple[str, ...]:
    """Every name that ``find_stage`` knows: the bundled stages, then the person's own, each in order."""
    bundled = _bundled()
    own = sorted(name for name in _own() if name not in bundled)
    return (*bundled, *own)


def find_stage(name_or_path: str) -> Stage:
    """The stage of that name, or in that file.

    Raises
    ------
    UnknownNameError
        No such name; the message lists the names there are.
    StageFileError, PartValueError
        The file cannot be read or is not a stage.
    """
    path = _path(name_or_path)
    if path is not None:
        return read_stage(path)
    text = _bundled()[name_or_path]
    return parse_stage(text, name=name_or_path, file=f"stages/{name_or_path}{_ENDING}")


def open_stages(names_or_paths: Sequence[str]) -> Stage:
    """The stage of that name or file, or the cascade of several; raises as ``find_stage`` does."""
    return cascade([find_stage(one) for one in names_or_paths])


def stage_source(name_or_path: str) -> str:
    """The TOML text of the stage of that name, or of that file; raises as ``find_stage`` does."""
    path = _path(name_or_path)
    return _bundled()[name_or_path] if path is None else decode(read_bytes(path), str(path))


def new_stage_file(path: Path) -> None:
    """Write a commented example that is a stage; a file that is there is left alone.

    Raises
    ------
    UsageError
        The name could not be found again as a stage's.
    OutputFileError
        There is a file of that name already, or no such folder.
    """
    if not path.parent.is_dir():
        raise OutputFileError(f"{path.parent}: no such folder", "make it first")
    if path.suffix != _ENDING:
        raise UsageError(f"{path}: a stage file's name ends in {_ENDING}", f"such as {path.stem}{_ENDING}")
    text = files("preview").joinpath("circuit", "example.toml").read_text("utf-8")
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(text)
    except FileExistsError as error:
        raise OutputFileError(f"{path}: there is something of that name", "choose another name") from error


def with_overrides(
    stage: Stage, parts: Mapping[str, str], opamps: Mapping[str | None, str]
) -> tuple[Stage, tuple[str, ...]]:
    """The stage with part values and op-amp types from option texts, and how each text was understood.

    Parameters
    ----------
    stage : Stage
        The stage as drawn.
    parts : Mapping
        Designator to its setting as text, such as ``{"R1": "4k7", "P1": "70 %", "S1": "open"}``; case does not
        matter in the designator.
    opamps : Mapping
        Designator, or None for every op-amp, to type name. A named op-amp goes before None.

    Raises
    ------
    NotationError
        A value's text cannot be read.
    PartValueError
        A value that no such part can have.
    UnknownNameError
        No such part or op-amp type, or a part of the wrong kind.
    """
    notes = []
    for name, text in parts.items():
        part, note = _changed(_part(stage, name), text, f"stage {stage.name}")
        stage = stage.with_part(part)
        notes.append(note)
    for target, text in sorted(opamps.items(), key=lambda item: item[0] is not None):
        type_name = opamp_type(text, "" if target is None else f"{target} = ")
        chosen = stage.opamps if target is None else (_opamp(stage, target),)
        if not chosen:
            raise UnknownNameError(f"stage {stage.name} has no op-amp to be of type {type_name}")
        for opamp in chosen:
            stage = stage.with_part(replace(opamp, type=type_name))
        notes.append(f"{', '.join(opamp.designator for opamp in chosen)}: op-amp type {type_name}")
    return stage, tuple(notes)


def _changed(part: Part, text: str, where: str) -> tuple[Part, str]:
    """The part as the text has it, and how the text was understood."""
    place = f"{part.designator} = "
    match part:
        case OpAmp():
            raise UnknownNameError(
                f"{part.designator} of {where} is an op-amp and has no value",
                f"give it a type: --opamp {part.designator}=ideal",
            )
        case Diode():
            raise UnknownNameError(
                f"{part.designator} of {where} is a diode and has no value",
                "its type stands in the stage file",
            )
        case FixedVoltage():
            fixed = replace(part, value=read_value(part.kind, text, place))
            return fixed, f"{part.designator}: {understood(text, QUANTITY[part.kind])}"
        case _:
            settable = part.with_setting(read_setting(part, text, place))
            return settable, setting_note(settable, text)


def _part(stage: Stage, name: str) -> Part:
    """The part of that designator in any case; UnknownNameError names those there are."""
    for part in stage.parts:
        if part.designator.lower() == name.strip().lower():
            return part
    names = [part.designator for part in stage.parts]
    meant = [one for one in names if one.lower().endswith(f".{name.strip().lower()}")]
    start = f"did you mean {' or '.join(meant)}? " if meant else ""
    raise UnknownNameError(
        f"stage {stage.name} has no part {quoted(name)[1:-1]}", f"{start}it has {', '.join(names)}"
    )


def _opamp(stage: Stage, name: str) -> OpAmp:
    part = _part(stage, name)
    if not isinstance(part, OpAmp):
        known = ", ".join(opamp.designator for opamp in stage.opamps) or "none"
        raise UnknownNameError(
            f"{part.designator} of stage {stage.name} is a {part.kind}, not an op-amp", f"op-amps are {known}"
        )
    return part


def _path(name_or_path: str) -> Path | None:
    """The file that is meant; None for a bundled stage; UnknownNameError for a name that nobody knows."""
    separators = {"/", os.sep, os.altsep or os.sep}
    if name_or_path.endswith(_ENDING) or not separators.isdisjoint(name_or_path):
        return Path(name_or_path)
    if name_or_path in _bundled():
        return None
    own = _own()
    if name_or_path in own:
        return own[name_or_path]
    listed = f"preview stages lists all {len(stage_names())}; a file ends in {_ENDING}"
    if not name_or_path.strip():
        raise UnknownNameError("the stage's name is empty", listed)
    nearest = get_close_matches(name_or_path.lower()[:60], stage_names(), n=3, cutoff=0.5)
    start = f"did you mean {' or '.join(nearest)}? " if nearest else ""
    raise UnknownNameError(f"no stage named {quoted(name_or_path)[1:-1]}", f"{start}{listed}")


def _bundled() -> dict[str, str]:
    """Text of each bundled stage by name."""
    entries = files("preview").joinpath("stages").iterdir()
    found = sorted((entry for entry in entries if entry.name.endswith(_ENDING)), key=lambda entry: entry.name)
    return {entry.name.removesuffix(_ENDING): entry.read_text("utf-8") for entry in found}


def _own() -> dict[str, Path]:
    """The person's own stage files by name; empty where the folder is missing or closed."""
    try:
        entries = list(user_stage_folder().iterdir())
    except OSError:
        return {}
    return {entry.stem: entry for entry in entries if entry.suffix == _ENDING}
