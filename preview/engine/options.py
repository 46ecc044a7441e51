"""The stage options of the command line, read into a session; each says how it was understood."""

from __future__ import annotations

import argparse
import re
from collections.abc import Callable, Iterable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, Literal, TypeVar

from preview.circuit.cascade import supplies_differ
from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD, parse_load, parse_source, said
from preview.circuit.library import open_stages, with_overrides
from preview.circuit.nodes import OUT
from preview.circuit.opamp import LIMITS, Limit
from preview.circuit.parts import Stage, Supply
from preview.errors import NotationError, UsageError, printable
from preview.session import AtEnd, Session
from preview.values.levels import (
    FullScale,
    format_volts,
    full_scale_in_comment,
    parse_full_scale,
    parse_supply,
)
from preview.values.noise import NoiseSetting
from preview.values.notation import format_value, parse_value, quoted
from preview.values.quality import Quality
from preview.values.stimulus import parse_stimulus

__all__ = [
    "DEFAULT_FULL_SCALE",
    "DEFAULT_STAGE",
    "add_running_options",
    "add_stage_options",
    "check_together",
    "for_option",
    "frequency_of",
    "intake_from",
    "join_signed_values",
    "picture_kind",
    "session_from",
    "understood_values",
    "with_running",
]

MOST_NOISE_GAIN_DB = 120.0
"""Most that the noise of the parts can be brought up [dB]."""

T = TypeVar("T")

DEFAULT_STAGE = "inverting-low-pass"
DEFAULT_FULL_SCALE = "+18 dBu"

VALUE_OPTIONS = (
    "--stage",
    "--part",
    "--opamp",
    "--supply",
    "--output",
    "--source",
    "--load",
    "--full-scale",
    "--quality",
    "--at",
    "--rate",
    "--prewarp",
    "--depth",
    "--device",
    "--end",
    "--part-noise",
    "--signal",
    "--input",
    "--limit",
    "--level",
)
"""Options that take a text; one that begins with a minus sign belongs to them all the same."""


def join_signed_values(arguments: Sequence[str]) -> list[str]:
    """The arguments with ``--supply "-15 15"`` as ``--supply=-15 15``: its minus sign begins no option."""
    joined: list[str] = []
    waiting = list(arguments)
    while waiting:
        word = waiting.pop(0)
        if word == "--":
            return [*joined, word, *waiting]
        if word in VALUE_OPTIONS and waiting and re.match(r"-\s*[\d.∞i]", waiting[0]):
            word = f"{word}={waiting.pop(0)}"
        joined.append(word)
    return joined


def add_stage_options(parser: argparse.ArgumentParser) -> None:
    """Add the options that every command with a stage takes."""
    group = parser.add_argument_group("stage options")
    group.add_argument(
        "--stage",
        action="append",
        metavar="NAME|FILE",
        help=f"the stage (default {DEFAULT_STAGE}); more than one are a cascade",
    )
    group.add_argument(
        "--part",
        action="append",
        default=[],
        metavar="R1=4k7",
        help="a part value, 2.R1=4k7 in the second stage of a cascade; also P1=70%%, S1=open; may be repeated",
    )
    group.add_argument(
        "--opamp",
        action="append",
        default=[],
        metavar="TYPE|U1=TYPE",
        help="op-amp type, of all or of one; may be repeated",
    )
    group.add_argument("--supply", metavar="VOLTS", help='rails: "+15 -15", or "9" for a single supply')
    group.add_argument(
        "--output",
        metavar="NODE",
        default=OUT,
        help="the output that is taken (default out), where there are more",
    )
    group.add_argument(
        "--source",
        metavar="SOURCE",
        help='what drives it: 600, "7k5 + 2.5 H, cable 500p", "piezo disc" ... (default ideal)',
    )
    group.add_argument(
        "--load",
        metavar="LOAD",
        help='what follows it: 10k, "10k || 220p", "headphones 32 ohm" ... (default none)',
    )
    group.add_argument(
        "--full-scale",
        metavar="LEVEL",
        help=f'volts of sample 1.0: "+18 dBu", "2 Vrms", "5 V" peak (default {DEFAULT_FULL_SCALE})',
    )
    group.add_argument(
        "--quality",
        metavar="QUALITY",
        default=Quality.STANDARD.value,
        help="draft, standard (default) or fine",
    )
    group.add_argument(
        "--without",
        action="append",
        default=[],
        metavar="LIMIT",
        help=f"take a limit away from every op-amp: {', '.join(LIMITS)}; may be repeated",
    )


def add_running_options(parser: argparse.ArgumentParser) -> None:
    """Add the options of commands that run the circuit for the ear."""
    group = parser.add_argument_group("running options")
    group.add_argument(
        "--part-noise",
        nargs="?",
        const="0 dB",
        metavar="GAIN",
        help='the noise of resistors and op-amps is there too; "40 dB" brings it up for study',
    )
    group.add_argument("--noise-seed", type=int, default=1, metavar="N", help="which noise (default 1)")
    group.add_argument(
        "--power-on", action="store_true", help="begin by being switched on, and not settled at rest"
    )


def with_running(session: Session, options: argparse.Namespace) -> Session:
    """The session with what ``add_running_options`` collected; raises UsageError."""
    session = replace(session, power_on=options.power_on)
    if options.part_noise is None:
        return session
    gain_db = for_option("--part-noise", lambda: parse_value(options.part_noise, "gain_db", allow_zero=True))
    if not abs(gain_db) <= MOST_NOISE_GAIN_DB:
        raise UsageError(f"--part-noise {gain_db:g} dB", f"at most {MOST_NOISE_GAIN_DB:g} dB up or down")
    if not 0 <= options.noise_seed < 2**31:
        raise UsageError(f"--noise-seed {options.noise_seed}", "a whole number from 0 to 2147483647")
    return replace(session, noise=NoiseSetting(gain_db, options.noise_seed))


def _without(texts: Sequence[str]) -> tuple[Limit, ...]:
    """The limits of those names, in the order of the model."""
    named = [" ".join(text.lower().split()) for text in texts]
    unknown = next((text for text, name in zip(texts, named, strict=True) if name not in LIMITS), None)
    if unknown is not None:
        raise UsageError(f"--without {quoted(unknown)}: no such limit", f"one of {', '.join(LIMITS)}")
    return tuple(limit for limit in LIMITS if limit in named)


def session_from(
    options: argparse.Namespace,
    *,
    audio: Path | None = None,
    comment: str = "",
    at_end: AtEnd = AtEnd.LOOP,
    stage: str = DEFAULT_STAGE,
    assumed_full_scale: str = DEFAULT_FULL_SCALE,
) -> Session:
    """The session that the options describe.

    Parameters
    ----------
    options : argparse.Namespace
        What ``add_stage_options`` collected.
    audio : Path, optional
        The recording.
    comment : str
        The recording's comment; a full scale stated there holds unless the options give one.
    at_end : AtEnd
        What happens at the end of the file.
    stage : str
        Stage to take where the options name none.
    assumed_full_scale : str
        Full scale where neither the options nor the comment state one.

    Raises
    ------
    UsageError
        A text is not understood, or two texts contradict each other.
    CircuitError
        The stage, a part or an op-amp is unknown, or the circuit cannot be computed.
    """
    drawn = open_stages(options.stage or [stage])
    if drawn.joined:
        notes = [f"stage {k}, {one.name}: {one.title}" for k, one in enumerate(drawn.joined, 1)]
    else:
        notes = [f"stage {drawn.name}: {drawn.title}"]
    parts = _assignments(options.part)
    changed, part_notes = with_overrides(drawn, parts, _opamp_types(options.opamp))
    notes.extend(part_notes)
    supply = changed.supply
    if options.supply is not None:
        supply = Supply(*for_option("--supply", lambda: parse_supply(options.supply)))
    notes.append(f"supply {format_volts(supply.positive_v)} and {format_volts(supply.negative_v)}")
    output: str = options.output.strip()
    if output != OUT:
        notes.append(f"output {output}")
    source = IDEAL_SOURCE
    if options.source is not None:
        source = for_option("--source", lambda: parse_source(options.source))
        notes.append(f"source {options.source.strip()} = {said(source)}")
    load = NO_LOAD
    if options.load is not None:
        load = for_option("--load", lambda: parse_load(options.load))
        notes.append(f"load {options.load.strip()} = {said(load)}")
    without = _without(options.without)
    if without:
        notes.append(f"without {', '.join(without)}: taken away from every op-amp")
    full_scale, full_scale_note = _full_scale(options.full_scale, comment, assumed_full_scale)
    notes.append(full_scale_note)
    session = Session(
        audio=audio,
        stage=changed,
        supply=supply,
        source=source,
        load=load,
        full_scale=full_scale,
        quality=_quality(options.quality),
        at_end=at_end,
        output=output,
        without=without,
        notes=tuple(printable(note) for note in notes),
        warnings=tuple(one for one in (supplies_differ(drawn),) if one and options.supply is None),
    )
    session.netlist()
    return session


def intake_from(options: argparse.Namespace) -> dict[str, Any]:
    """Fields of a session that take a test signal or live input in place of a recording; empty for a recording.

    Raises
    ------
    UsageError
        More than one thing to hear, or an input device for none.
    """
    given = [
        name
        for name, there in (
            ("a recording", options.audio is not None),
            ("--signal", options.signal is not None),
            ("--live", options.live),
        )
        if there
    ]
    if len(given) > 1:
        raise UsageError(f"{given[0]} and {given[1]} at once", "one thing is heard at a time")
    if options.input is not None and not options.live:
        raise UsageError("--input is for --live", "add --live or leave it out")
    if options.live:
        return {
            "live": True,
            "live_device": options.input,
            "notes": ("live input begins muted: keep the volume low and microphones away from loudspeakers",),
        }
    if options.signal is None:
        return {}
    stimulus = for_option("--signal", lambda: parse_stimulus(options.signal))
    return {"stimulus": stimulus, "notes": (f"test signal {stimulus.text}",)}


def for_option(option: str, read: Callable[[], T]) -> T:
    """What ``read`` gives; the option's name is put before a text that it does not understand."""
    try:
        return read()
    except NotationError as error:
        raise NotationError(f"{option} {error.message}", error.hint) from error


def _assignments(texts: Sequence[str]) -> dict[str, str]:
    """``["R1=4k7"]`` as ``{"R1": "4k7"}``."""
    found: dict[str, str] = {}
    for text in texts:
        designator, equals, value = (piece.strip() for piece in text.partition("="))
        if not (designator and equals and value):
            raise UsageError(
                f"--part {quoted(text)}: no part and value in it", "write --part R1=4k7, P1=70%, S1=open"
            )
        designator = _as_before(designator, found)
        if found.get(designator, value) != value:
            raise UsageError(
                f"--part gives {designator} two values, {found[designator]} and {value}",
                "give each part once",
            )
        found[designator] = value
    return found


def _as_before(designator: str, found: Iterable[str | None]) -> str:
    """The designator as it was written earlier; case does not matter in it."""
    return next((one for one in found if one and one.lower() == designator.lower()), designator)


def _opamp_types(texts: Sequence[str]) -> dict[str | None, str]:
    """``["U1=ideal"]`` as ``{"U1": "ideal"}``; a type alone stands under None."""
    found: dict[str | None, str] = {}
    for text in texts:
        head, equals, tail = (piece.strip() for piece in text.partition("="))
        designator, type_name = (head, tail) if equals else (None, head)
        if not type_name or designator == "":
            raise UsageError(
                f"--opamp {quoted(text)}: no op-amp type in it", "write --opamp ideal or --opamp U1=ideal"
            )
        designator = designator and _as_before(designator, found)
        if found.get(designator, type_name) != type_name:
            raise UsageError(
                f"--opamp gives {designator or 'all op-amps'} two types, {found[designator]} and {type_name}",
                "give each op-amp once",
            )
        found[designator] = type_name
    return found


def _full_scale(text: str | None, comment: str, assumed: str) -> tuple[FullScale, str]:
    """The full scale in force and a line that says where it is from."""
    if text is not None:
        level, origin = for_option("--full-scale", lambda: parse_full_scale(text)), "as given"
    elif (stated := full_scale_in_comment(comment)) is not None:
        level, origin = stated, "from the file's comment"
    else:
        level, origin = parse_full_scale(assumed), "assumed; --full-scale sets it"
    return level, f"full scale {level.text} = {format_volts(level.volts)} peak ({origin})"


def _quality(text: str) -> Quality:
    """The quality of that name."""
    try:
        return Quality(text.strip().lower())
    except ValueError:
        known = ", ".join(q.value for q in Quality)
        raise UsageError(f"--quality {quoted(text)}: no such quality", f"one of {known}") from None


def check_together(options: argparse.Namespace) -> None:
    """Refuse options of ``response`` that do nothing beside the others."""
    if options.level or options.sweep:
        alone = "--sweep" if options.sweep else "--level"
        raise UsageError(f"{alone} is for --distortion", "add it or leave it out")
    if options.plot is not None:
        picture_kind(options.plot)
    if options.draw and (options.json or options.csv):
        raise UsageError("--draw does not go with --json and --csv", "give one of them, or --plot FILE")
    if options.sections:
        others = {
            "--at": options.at,
            "--as-heard": options.as_heard,
            "--noise": options.noise,
            "--draw": options.draw,
            "--plot": options.plot,
        }
        needless = [name for name, given in others.items() if given]
        if needless:
            raise UsageError(f"{needless[0]} does not go with --sections", "give one of the two")
    elif options.prewarp is not None:
        raise UsageError("--prewarp is for --sections", "add --sections or leave it out")
    elif options.rate is not None and not options.as_heard:
        raise UsageError(
            "--rate is for --as-heard and --sections; the exact circuit has no sample rate",
            "add one of them or leave it out",
        )


def picture_kind(name: str) -> Literal["png", "svg"]:
    """The kind of picture that a file's name asks for; UsageError for one that is not made."""
    ending = Path(name).suffix.lower()
    if ending == ".png":
        return "png"
    if ending == ".svg":
        return "svg"
    raise UsageError(f"--plot {quoted(name)}: no such kind of picture", "a name that ends in .png or .svg")


def frequency_of(text: str, option: str, low_hz: float, high_hz: float) -> float:
    """A frequency [Hz] within bounds."""
    value = for_option(option, lambda: parse_value(text.strip(), "frequency"))
    if not low_hz <= value <= high_hz or value <= 0.0:
        high = format_value(high_hz, "frequency", digits=6)
        allowed = (
            f"{format_value(low_hz, 'frequency')} to {high}" if low_hz else f"above 0 Hz, at most {high}"
        )
        raise UsageError(f"{option} {printable(text)}: out of range", allowed)
    return value


def understood_values(session: Session) -> dict[str, object]:
    """What was understood, in SI base units, for a report."""
    stage: Stage = session.stage
    return {
        "stage": stage.name,
        "stages": [one.name for one in stage.joined or (stage,)],
        "output": session.output,
        "parts": {part.designator: part.setting for part in stage.settable},
        "opamps": {opamp.designator: opamp.type for opamp in stage.opamps},
        "supply_positive_v": session.supply.positive_v,
        "supply_negative_v": session.supply.negative_v,
        "source": session.source.name or None,
        "source_ohm": session.source.resistance_ohm,
        "source_henry": session.source.inductance_henry,
        "source_farad": session.source.capacitance_farad or None,
        "source_winding_farad": session.source.winding_farad,
        "source_cable_farad": session.source.cable_farad,
        "load": session.load.name or None,
        "load_ohm": session.load.resistance_ohm,
        "load_farad": session.load.capacitance_farad + session.load.cable_farad,
        "full_scale_v": session.full_scale.volts,
        "quality": session.quality.value,
        "without": list(session.without),
        "notes": list(session.notes),
        "warnings": list(session.warnings),
    }
