"""From one session to the next: the commands for the engine, and the command line that repeats it."""

from __future__ import annotations

import math
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
from preview.engine.messages import (
    Command,
    DropCandidate,
    KeepCandidate,
    Seek,
    SelectCandidate,
    SetAtEnd,
    SetCircuit,
    SetFullScale,
    SetMatch,
    SetPart,
    SetQuality,
    SetRegion,
    SetVolume,
)
from preview.engine.process import EngineConfig
from preview.errors import PartValueError
from preview.session import Session
from preview.values.eseries import step

__all__ = [
    "SERIES_OF_KIND",
    "catching_up",
    "commands_between",
    "common_changes",
    "render_command",
    "series_of",
    "stepped",
    "with_input_of",
    "with_setting",
]

SERIES_OF_KIND = {PartKind.RESISTOR: "E24", PartKind.CAPACITOR: "E12", PartKind.INDUCTOR: "E12"}
"""The series of a part whose stage file states none."""
_WRITTEN = SettablePart | FixedVoltage
"""The parts that ``--part`` can set."""
COARSE_SERIES = "E3"
"""Coarse steps go by this series."""


def series_of(part: TwoTerminal) -> str:
    """The E series in which the part's value steps."""
    return part.series or SERIES_OF_KIND[part.kind]


def stepped(part: SettablePart, count: int, *, coarse: bool = False) -> float:
    """The setting so many steps on: standard values; a hundredth or a tenth of a turn; closed or open.

    Raises
    ------
    PreviewError
        There is no such step: past the range of the series, or a shaft that stands at its end.
    """
    if isinstance(part, Potentiometer):
        turn = 0.1 if coarse else 0.01
        places = part.position / turn
        place = math.floor(places + 1e-6) if count > 0 else math.ceil(places - 1e-6)
        position = min(max((place + count) * turn, 0.0), 1.0)
        if position == part.position:
            raise PartValueError(f"{part.designator} stands at its {'end' if count > 0 else 'start'}")
        return round(position, 4)
    if isinstance(part, Switch):
        return 1.0 if count > 0 else 0.0
    return step(part.value, COARSE_SERIES if coarse else series_of(part), count)


def with_setting(session: Session, designator: str, setting: float) -> Session:
    """The session with one part set to another value, position, or closed (1) or open (0)."""
    part = session.stage.part(designator)
    assert isinstance(part, SettablePart)
    return replace(session, stage=session.stage.with_part(part.with_setting(setting)))


def _without_setting(part: Part) -> object:
    """Everything of a part that the engine cannot change by a setting."""
    if isinstance(part, TwoTerminal):
        return (part.designator, part.kind, part.nodes, part.half_v)
    return part.with_setting(0.0) if isinstance(part, SettablePart) else part


def _shape(session: Session) -> tuple[object, ...]:
    """Everything of the circuit but the settings of its parts."""
    parts = tuple(_without_setting(part) for part in session.stage.parts)
    place = (session.stage.name, session.stage.temperature_degc)
    return (
        place,
        parts,
        session.supply,
        session.output,
        session.source,
        session.load,
        session.without,
    )


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
    return [*commands, *common_changes(old, new)]


def common_changes(old: Session, new: Session) -> list[Command]:
    """What the engine must be told of full scale, quality and end, which are common to all candidates."""
    commands: list[Command] = []
    if old.full_scale.volts != new.full_scale.volts:
        commands.append(SetFullScale(new.full_scale.volts))
    if old.quality != new.quality:
        commands.append(SetQuality(new.quality))
    if old.at_end != new.at_end:
        commands.append(SetAtEnd(new.at_end))
    return commands


def with_input_of(session: Session, other: Session) -> Session:
    """The session with the recording, test signal or live input of another one."""
    return replace(
        session, audio=other.audio, stimulus=other.stimulus, live=other.live, live_device=other.live_device
    )


def catching_up(began: EngineConfig, now: EngineConfig) -> list[Command]:
    """What an engine must be told that began so while the desk went on; raises CircuitError."""
    had, has = ({**dict(one.candidates), one.letter: one.session.netlist()} for one in (began, now))
    commands: list[Command] = [
        KeepCandidate(letter, circuit) for letter, circuit in has.items() if had.get(letter) != circuit
    ]
    if now.letter != began.letter:
        commands.append(SelectCandidate(now.letter))
    commands += [DropCandidate(letter) for letter in had if letter not in has]
    commands += common_changes(began.session, now.session)
    if now.start_volume_db != began.start_volume_db:
        commands.append(SetVolume(now.start_volume_db))
    if now.match != began.match:
        commands.append(SetMatch(now.match))
    if now.region != began.region:
        commands.append(SetRegion(*(now.region or (None, None))))
    if now.start_frame != began.start_frame:
        commands.append(Seek(now.start_frame))
    return commands


def _exact(part: SettablePart | FixedVoltage) -> str:
    """A setting in text that reads back as the same number."""
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
    for limit in session.without:
        words += ["--without", limit]
    if session.noise is not None:
        words += ["--part-noise", f"{session.noise.gain_db!r} dB", "--noise-seed", str(session.noise.seed)]
    if session.power_on:
        words.append("--power-on")
    words += ["--full-scale", session.full_scale.text, "--quality", session.quality.value]
    return shlex.join(words)
