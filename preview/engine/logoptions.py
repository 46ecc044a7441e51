"""Options of the commands that read logs of numbers: which columns, how many rows a second, volts per unit."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from preview.engine.options import DEFAULT_FULL_SCALE, for_option, frequency_of
from preview.errors import UsageError
from preview.values.levels import FullScale, parse_full_scale

if TYPE_CHECKING:
    from preview.audio.logs import LogFormat

__all__ = [
    "LOG_FULL_SCALE",
    "add_log_options",
    "assumed_full_scale",
    "log_format",
    "per_unit",
    "state_per_unit",
]

LOG_FULL_SCALE = "1 V"
"""Volts of one unit of a log where nothing says so: its numbers are volts."""


def add_log_options(parser: argparse.ArgumentParser) -> None:
    """Add the options for logs (.csv, .tsv)."""
    group = parser.add_argument_group("logs of numbers (.csv, .tsv)")
    group.add_argument(
        "--column", action="append", default=[], metavar="NAME|N", help="signal column; repeat for channels"
    )
    group.add_argument("--time", metavar="NAME|N", default="", help="time column (default: by its name)")
    group.add_argument("--rate", metavar="HZ", help="rows a second, in place of a time column")
    group.add_argument("--per-unit", metavar="VOLTS", help="volts of one unit of the column (default 1 V)")


def log_format(options: argparse.Namespace) -> LogFormat:
    """What the options say of logs."""
    from preview.audio.logs import LOG_RATE_MIN_HZ, LogFormat

    rate_hz = None
    if options.rate is not None:
        rate_hz = frequency_of(options.rate, "--rate", LOG_RATE_MIN_HZ, 192_000.0)
    return LogFormat(rate_hz=rate_hz, time=options.time.strip(), columns=tuple(options.column))


def per_unit(options: argparse.Namespace) -> FullScale | None:
    """Volts of one unit of a log, where the options say so."""
    text: str | None = options.per_unit
    return None if text is None else for_option("--per-unit", lambda: parse_full_scale(text))


def state_per_unit(options: argparse.Namespace, audio: Path) -> None:
    """Let the volts per unit be the full scale of a log; refuse options for logs beside anything else.

    Raises
    ------
    UsageError
        An option for logs with a recording, or two options for one scale.
    """
    from preview.audio.logs import is_log

    if not is_log(audio):
        refuse_log_options(options)
        return
    if options.per_unit is not None:
        if options.full_scale is not None:
            raise UsageError(
                "--per-unit and --full-scale both say what one unit of a log is", "give one of the two"
            )
        per_unit(options)
        options.full_scale = options.per_unit


def refuse_log_options(options: argparse.Namespace) -> None:
    """Raise UsageError for options that are for logs: there is none."""
    for name in ("column", "time", "rate", "per_unit"):
        if getattr(options, name):
            raise UsageError(f"--{name.replace('_', '-')} is for logs, .csv and .tsv", "leave it out")


def assumed_full_scale(audio: Path) -> str:
    """Full scale where nothing states one."""
    from preview.audio.logs import is_log

    return LOG_FULL_SCALE if is_log(audio) else DEFAULT_FULL_SCALE
