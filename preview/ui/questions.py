"""What the desk asks for in its dialogs: how an answer is understood, and what it makes of the session.

Each question reads the text, tries the result on the whole circuit, and says what was understood, so that an
answer that cannot work is refused in the dialog and not afterwards.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from preview.circuit.drive import NO_LOAD, exact_load, exact_source, parse_load, parse_source, said
from preview.circuit.library import find_stage, stage_names
from preview.circuit.limits import QUANTITY, check_value
from preview.circuit.parts import Supply, TwoTerminal
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.changes import with_value
from preview.ui.words import full_scale, rails
from preview.ui.words import value as value_text
from preview.values.levels import FULL_SCALE_PRESETS, parse_full_scale, parse_supply
from preview.values.notation import parse_value, understood

__all__ = [
    "FILE_ANSWER",
    "Question",
    "ask_full_scale",
    "ask_load",
    "ask_part",
    "ask_source",
    "ask_stage_file",
    "ask_supply",
    "stage_choices",
]

FILE_ANSWER = "\0file"
"""Answer of the stage chooser's last row; no name can be this."""


@dataclass(frozen=True, slots=True)
class Question:
    """A value to be typed."""

    title: str
    """What is asked for."""
    about: str
    """A line that explains it."""
    now: str
    """The value in force."""
    read: Callable[[str], tuple[Session, str]]
    """Text -> the session with the answer in it and what was understood; raises PreviewError."""

    def understand(self, text: str) -> str:
        """What was understood, for the echo; raises PreviewError."""
        return self.read(text)[1]

    def answer(self, text: str) -> Session:
        """The session with the answer in it; raises PreviewError."""
        return self.read(text)[0]


def _tried(session: Session) -> Session:
    """The session, once its circuit is known to be one that can be computed."""
    session.netlist()
    return session


def ask_part(session: Session, part: TwoTerminal) -> Question:
    """The value of a part."""
    quantity = QUANTITY[part.kind]

    def read(text: str) -> tuple[Session, str]:
        value = parse_value(text, quantity)
        check_value(part.kind, value, part.designator)
        return _tried(with_value(session, part.designator, value)), understood(text, quantity)

    return Question(f"Value of {part.designator}", part.role, value_text(part), read)


def ask_full_scale(session: Session) -> Question:
    """The volts of full scale."""

    def read(text: str) -> tuple[Session, str]:
        scale = parse_full_scale(text)
        return replace(session, full_scale=scale), full_scale(scale)

    presets = ", ".join(preset.text for preset in FULL_SCALE_PRESETS[:6])
    return Question(
        "Full scale",
        f"The level of a sine at the file's full scale, such as {presets}; a plain voltage is its peak.",
        session.full_scale.text,
        read,
    )


def ask_supply(session: Session) -> Question:
    """The rails."""

    def read(text: str) -> tuple[Session, str]:
        supply = Supply(*parse_supply(text))
        return _tried(replace(session, supply=supply)), f"supply {rails(supply)}"

    return Question("Supply", "±15, +12 -5, or 9 for a single supply", rails(session.supply), read)


def ask_source(session: Session) -> Question:
    """What drives the stage."""

    def read(text: str) -> tuple[Session, str]:
        source = parse_source(text)
        return _tried(replace(session, source=source)), said(source)

    return Question(
        "Source",
        "What drives the input: 0 for ideal, 600, 7k5 + 2.5 H, 20 nF; piezo disc, cable 500p ...",
        exact_source(session.source),
        read,
    )


def ask_load(session: Session) -> Question:
    """What follows the stage."""

    def read(text: str) -> tuple[Session, str]:
        load = parse_load(text)
        return _tried(replace(session, load=load)), "no load" if load == NO_LOAD else said(load)

    return Question(
        "Load",
        "From out to gnd: none, 600, 10k || 220p; headphones 32 ohm, line input, cable 1n ...",
        exact_load(session.load),
        read,
    )


def ask_stage_file(session: Session) -> Question:
    """A stage file by its path, or a stage by its name."""

    def read(text: str) -> tuple[Session, str]:
        stage = find_stage(text.strip())
        tried = _tried(session.with_stage(stage))
        return tried, f"{stage.title}: {len(stage.parts)} parts, supply {rails(stage.supply)}"

    return Question("Stage file", "The path of a .toml file, or a name", session.stage.name, read)


def stage_choices() -> list[tuple[str, str, str]]:
    """The rows of the stage chooser: every stage by name, and a file of one's own."""
    rows = []
    for name in stage_names():
        try:
            about = find_stage(name).title
        except PreviewError as error:
            about = f"cannot be used: {error}"
        rows.append((name, name, about))
    return [*rows, (FILE_ANSWER, "a file ...", "type the path of a stage file")]
