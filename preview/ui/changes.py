"""From one session to the next: the commands for the engine, and the command line that repeats it."""

from __future__ import annotations

import shlex
from dataclasses import replace

from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD, exact_load, exact_source
from preview.circuit.limits import exact_value
from preview.circuit.nodes import OUT
from preview.circuit.parts import (
    FixedVoltage,
    Part,
    PartKind,
    Potentiometer,
    SettablePart,
    Stage,
    Switch,
    TwoTerminal,
)
from preview.circuit.settings import setting_text
from preview.engine.messages import Command, SetAtEnd, SetCircuit, SetFullScale, SetPart, SetQuality
from preview.session import Session

__all__ = ["SERIES_OF_KIND", "commands_between", "render_command", "series_of", "whole_state", "with_value"]

SERIES_OF_KIND = {PartKind.RESISTOR: "E24", PartKind.CAPACITOR: "E12", PartKind.INDUCTOR: "E12"}
"""The series of a part whose stage file states none."""
_WRITTEN = SettablePart | FixedVoltage
"""The parts that ``--part`` can set."""


def series_of(part: TwoTerminal) -> str:
    """The E series in which the part's value steps."""
    return part.series or SERIES_OF_KIND[part.kind]


def with_value(session: Session, designator: str, value: float) -> Session:
    """The session with one part's value changed."""
    part = session.stage.part(designator)
    assert isinstance(part, TwoTerminal)
    return replace(session, stage=session.stage.with_part(replace(part, value=value)))


def _shape(session: Session) -> tuple[object, ...]:
    """Everything of the circuit but the settings of its parts."""
    stage: Stage = session.stage
    parts = tuple(_wired(part) for part in stage.parts)
    return (stage.name, parts, session.supply, session.output, session.source, session.load)


def _wired(part: Part) -> object:
    """What of a part cannot change while it plays."""
    if isinstance(part, TwoTerminal):
        return part.designator, part.kind, part.nodes, part.half_v
    return part.with_setting(0.0) if isinstance(part, SettablePart) else part


def commands_between(old: Session, new: Session) -> list[Command]:
    """What the engine must be told so that it computes ``new`` instead of ``old``; raises CircuitError."""
    commands: list[Command] = []
    if _shape(old) != _shape(new):
        commands.append(SetCircuit(new.netlist()))
    else:
        before = {part.designator: part.setting for part in old.stage.settable}
        moved = [part for part in new.stage.settable if part.setting != before[part.designator]]
        if moved:
            new.netlist()
        commands += [SetPart(part.designator, part.setting) for part in moved]
    if old.full_scale.volts != new.full_scale.volts:
        commands.append(SetFullScale(new.full_scale.volts))
    if old.quality != new.quality:
        commands.append(SetQuality(new.quality))
    if old.at_end != new.at_end:
        commands.append(SetAtEnd(new.at_end))
    return commands


def whole_state(session: Session) -> list[Command]:
    """What a new engine must be told; it has the recording already."""
    return [
        SetCircuit(session.netlist()),
        SetFullScale(session.full_scale.volts),
        SetQuality(session.quality),
        SetAtEnd(session.at_end),
    ]


def _exact(part: SettablePart | FixedVoltage) -> str:
    """The setting in full."""
    if isinstance(part, Switch):
        return setting_text(part)
    if isinstance(part, Potentiometer | FixedVoltage):
        return repr(part.position if isinstance(part, Potentiometer) else part.value)
    return exact_value(part.kind, part.value)


def render_command(session: Session, opened: Stage) -> str:
    """The ``preview render`` command that repeats the session.

    Parameters
    ----------
    opened : Stage
        The stage as its file has it; only parts that differ from it are written.
    """
    words = ["preview", "render", str(session.audio or "AUDIO"), "OUT.wav"]
    for name in session.stage.opened_as:
        words += ["--stage", name]
    was = {part.designator: _exact(part) for part in opened.parts if isinstance(part, _WRITTEN)}
    for part in session.stage.parts:
        if isinstance(part, _WRITTEN) and _exact(part) != was.get(part.designator):
            words += ["--part", f"{part.designator}={_exact(part)}"]
    types = {opamp.designator: opamp.type for opamp in opened.opamps}
    for opamp in session.stage.opamps:
        if opamp.type != types.get(opamp.designator):
            words += ["--opamp", f"{opamp.designator}={opamp.type}"]
    if session.supply != opened.supply:
        words += ["--supply", f"{session.supply.positive_v!r} {session.supply.negative_v!r}"]
    if session.output != OUT:
        words += ["--output", session.output]
    if session.source != IDEAL_SOURCE:
        words += ["--source", exact_source(session.source)]
    if session.load != NO_LOAD:
        words += ["--load", exact_load(session.load)]
    words += ["--full-scale", session.full_scale.text, "--quality", session.quality.value]
    return shlex.join(words)
