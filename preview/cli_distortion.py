"""``response --distortion``: from its options to what it reports."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from functools import partial

from preview.engine.csvtext import csv_text
from preview.engine.jsontext import json_text
from preview.errors import UsageError, printable

__all__ = ["add_distortion_options", "run_distortion"]

DEFAULT_AT, DEFAULT_LEVEL, DEFAULT_RATE = "997", "0 dBu", "192k"

Say = Callable[[str], None]


def add_distortion_options(parser: argparse.ArgumentParser) -> None:
    """Add what measuring distortion takes."""
    parser.add_argument(
        "--distortion",
        action="store_true",
        help=f"measure it: THD, THD+N, harmonics, two tones, where clipping and slewing begin; --at (default "
        f"{DEFAULT_AT}), --rate (default {DEFAULT_RATE})",
    )
    parser.add_argument(
        "--level",
        action="append",
        default=[],
        metavar="LEVEL",
        help=f"level of the tones at the source, such as +4 dBu; may be repeated (default {DEFAULT_LEVEL})",
    )
    parser.add_argument(
        "--sweep", action="store_true", help="distortion over levels about where limits begin"
    )


def run_distortion(options: argparse.Namespace, say: Say, show: Say) -> int:
    """Measure the stage's distortion; the exit code."""
    from preview.analysis.distortion_table import measure
    from preview.dsp.oversample import PASSBAND_RATIO
    from preview.engine.options import for_option, frequency_of, session_from, understood_values
    from preview.network.stability import check_stable
    from preview.values.levels import parse_level

    _refuse(options)
    rate_hz = frequency_of(options.rate or DEFAULT_RATE, "--rate", 8_000.0, 192_000.0)
    highest_hz = min(20e3, PASSBAND_RATIO * rate_hz / 2.0)
    asked = (options.at or DEFAULT_AT).split(",")
    frequencies_hz = [frequency_of(text, "--at", 2.0, highest_hz) for text in asked]
    levels_v = [for_option("--level", partial(parse_level, text)) for text in options.level]
    session = session_from(options)
    circuit = session.netlist()
    check_stable(circuit)
    for note in session.notes:
        if not options.json:
            say(f"  {printable(note)}")
    found = measure(
        circuit,
        frequencies_hz,
        None if options.sweep else levels_v or [parse_level(DEFAULT_LEVEL)],
        sample_rate_hz=rate_hz,
        quality=session.quality,
    )
    body = {"command": "response", "understood": understood_values(session), **found.as_object()}
    if options.json:
        show(json_text(body))
    elif options.csv:
        show(csv_text(body, "distortion"))
    else:
        show("\n".join(found.as_lines()))
    return 0


def _refuse(options: argparse.Namespace) -> None:
    """Refuse options of the small-signal response beside measurements, and these without them."""
    others = ("as_heard", "analog", "sections", "noise", "draw", "plot", "prewarp")
    given = [name for name in others if getattr(options, name)]
    if given:
        raise UsageError(
            f"--{given[0].replace('_', '-')} does not go with --distortion", "give one of the two"
        )
    if options.sweep and options.level:
        raise UsageError("--level does not go with --sweep, which takes many", "give one of the two")
