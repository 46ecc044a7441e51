"""What a person wants of every recording: ``headroom 3 dB``, ``no clips``, ``U2 slew 80 %`` ..."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Protocol

from preview.engine.check.results import FileCheck, OpAmpCheck
from preview.errors import NotationError, UsageError
from preview.values.levels import format_db, format_volts, parse_level, ratio_db
from preview.values.notation import format_value, parse_value, quoted

__all__ = ["Bound", "Miss", "Want", "margin_of_any_db", "misses", "parse_want"]


class Bound(Protocol):
    """The worst that any signal can do to one op-amp."""

    @property
    def designator(self) -> str:
        """U1, U2 ..."""

    @property
    def clean_input_v(self) -> float:
        """Peak of the input up to which no signal brings the output to a rail [V]."""


@dataclass(frozen=True, slots=True)
class Want:
    """One wanted figure."""

    text: str
    """As it was written."""
    kind: str
    """Key of ``_KINDS``."""
    limit: float
    """In dB, V, A, s, a share or a count."""
    opamp: str = ""
    """The op-amp that it is about; empty for all."""


@dataclass(frozen=True, slots=True)
class Miss:
    """A want that a recording does not meet."""

    want: str
    """The want as it was written."""
    path: str
    """The recording."""
    opamp: str
    """The op-amp; empty where it is about the whole stage."""
    found: str
    """What was found, in words."""


@dataclass(frozen=True, slots=True)
class _Kind:
    """How one kind of want is written and judged."""

    example: str
    of_opamps: bool
    read: Callable[[str], float]
    judge: Callable[[Want, FileCheck, OpAmpCheck | None, Sequence[Bound]], str]
    """What was found where it is missed; empty where it is met."""


def parse_want(text: str) -> Want:
    """A want from its text.

    Raises
    ------
    UsageError
        It is none.
    """
    words = " ".join(text.split())
    opamp = ""
    named = re.match(r"((?:\d+\.)?U\w*)\s+(?=\S)", words, re.IGNORECASE)
    body = words
    if named is not None:
        opamp, body = named[1], words[named.end() :]
    for name, kind in _KINDS.items():
        if body.lower().startswith(name) and (len(body) == len(name) or not body[len(name)].isalnum()):
            if opamp and not kind.of_opamps:
                raise UsageError(
                    f"--limit {quoted(text)}: {name} is not of one op-amp", f"write {kind.example}"
                )
            try:
                limit = kind.read(body[len(name) :].strip())
            except (NotationError, ValueError) as error:
                raise UsageError(
                    f"--limit {quoted(text)}: not understood", f"write {kind.example}"
                ) from error
            return Want(words, name, limit, opamp)
    raise UsageError(
        f"--limit {quoted(text)}: no such want",
        "such as " + ", ".join(f'"{k.example}"' for k in _KINDS.values()),
    )


def misses(wants: Sequence[Want], found: FileCheck, bounds: Sequence[Bound]) -> Iterator[Miss]:
    """Every want that a recording does not meet.

    Raises
    ------
    UsageError
        A want of an op-amp that is not there.
    """
    for want in wants:
        kind = _KINDS[want.kind]
        if not kind.of_opamps:
            said = kind.judge(want, found, None, bounds)
            if said:
                yield Miss(want.text, found.path, "", said)
            continue
        meant = [o for o in found.opamps if not want.opamp or o.name.lower() == want.opamp.lower()]
        if not meant:
            there = ", ".join(o.name for o in found.opamps) or "none"
            raise UsageError(f'--limit "{want.text}": no op-amp {want.opamp}', f"there is {there}")
        for opamp in meant:
            said = kind.judge(want, found, opamp, bounds)
            if said:
                yield Miss(want.text, found.path, opamp.name, said)


def margin_of_any_db(found: FileCheck, bounds: Sequence[Bound]) -> float:
    """How much more (below 0: less) of any signal with this one's true peak is sure to stay off the rails [dB].

    nan where there is no bound, inf where there is no rail or no signal.
    """
    if not bounds:
        return math.nan
    clean_v = min(b.clean_input_v for b in bounds)
    return ratio_db(clean_v / found.input.true_peak_v) if found.input.true_peak_v > 0.0 else math.inf


def _decibels(text: str) -> float:
    number = re.fullmatch(r"([+-]?\d+(?:\.\d+)?)\s*dB", text, re.IGNORECASE)
    if number is None:
        raise ValueError(text)
    return float(number[1])


def _count(text: str) -> float:
    number = re.fullmatch(r"\d+", text or "0")
    if number is None:
        raise ValueError(text)
    return float(number[0])


def _share(text: str) -> float:
    number = re.fullmatch(r"(\d+(?:\.\d+)?)\s*%", text)
    if number is None:
        raise ValueError(text)
    return float(number[1]) / 100.0


def _seconds(text: str) -> float:
    return parse_value(text, "time", allow_zero=True)


def _lufs(text: str) -> float:
    number = re.fullmatch(r"([+-]?\d+(?:\.\d+)?)\s*LUFS", text, re.IGNORECASE)
    if number is None:
        raise ValueError(text)
    return float(number[1])


def _opamp(judge: Callable[[float, OpAmpCheck], str]) -> Callable[..., str]:
    def judged(want: Want, _found: FileCheck, opamp: OpAmpCheck | None, _bounds: Sequence[Bound]) -> str:
        assert opamp is not None
        return judge(want.limit, opamp)

    return judged


def _headroom(limit: float, opamp: OpAmpCheck) -> str:
    return "" if opamp.headroom_db >= limit else f"headroom {format_db(opamp.headroom_db)}"


def _clips(limit: float, opamp: OpAmpCheck) -> str:
    return "" if opamp.clip_events <= limit else f"{opamp.clip_events} clip events"


def _clipped(limit: float, opamp: OpAmpCheck) -> str:
    return "" if opamp.clipped_s <= limit else f"clipped for {format_value(opamp.clipped_s, 'time')}"


def _used(used: float, most: float, limit: float, what: str) -> str:
    share = used / most
    return "" if share <= limit else f"{what} at {100.0 * share:.3g} % of its limit"


def _slew(limit: float, opamp: OpAmpCheck) -> str:
    return _used(opamp.slew_peak_v_per_s, opamp.slew_limit_v_per_s, limit, "slew rate")


def _current(limit: float, opamp: OpAmpCheck) -> str:
    return _used(opamp.current_peak_a, opamp.current_limit_a, limit, "output current")


def _range(limit: float, opamp: OpAmpCheck) -> str:
    return (
        ""
        if opamp.input_range_events <= limit
        else f"outside its input range {opamp.input_range_events} times"
    )


def _margin(want: Want, found: FileCheck, _opamp: OpAmpCheck | None, _bounds: Sequence[Bound]) -> str:
    if found.margin is None or found.margin.gain_db >= want.limit:
        return ""
    return f"clean margin {format_db(found.margin.gain_db)}"


def _any(want: Want, found: FileCheck, _opamp: OpAmpCheck | None, bounds: Sequence[Bound]) -> str:
    margin_db = margin_of_any_db(found, bounds)
    if math.isnan(margin_db):
        return "no bound: the circuit is not linear"
    return (
        ""
        if margin_db >= want.limit
        else f"clean for any signal of this peak only with {format_db(margin_db)}"
    )


def _output(want: Want, found: FileCheck, _opamp: OpAmpCheck | None, _bounds: Sequence[Bound]) -> str:
    peak_v = max(found.output.true_peak_v, found.output.peak_v)
    return "" if peak_v <= want.limit else f"output peak {format_volts(peak_v)}"


def _dc(want: Want, found: FileCheck, _opamp: OpAmpCheck | None, _bounds: Sequence[Bound]) -> str:
    return "" if abs(found.output.dc_v) <= want.limit else f"output DC {format_volts(found.output.dc_v)}"


def _loudness(want: Want, found: FileCheck, _opamp: OpAmpCheck | None, _bounds: Sequence[Bound]) -> str:
    if not found.output.loudness_lufs > want.limit:
        return ""
    return f"output loudness {found.output.loudness_lufs:.1f} LUFS"


_KINDS: dict[str, _Kind] = {
    "headroom": _Kind("headroom 3 dB", True, _decibels, _opamp(_headroom)),
    "no clips": _Kind("no clips", True, _count, _opamp(_clips)),
    "clips": _Kind("clips 5", True, _count, _opamp(_clips)),
    "clipped": _Kind("clipped 10 ms", True, _seconds, _opamp(_clipped)),
    "slew": _Kind("slew 80 %", True, _share, _opamp(_slew)),
    "current": _Kind("current 50 %", True, _share, _opamp(_current)),
    "input range": _Kind("input range 0", True, _count, _opamp(_range)),
    "margin": _Kind("margin 6 dB", False, _decibels, _margin),
    "any signal": _Kind("any signal 0 dB", False, _decibels, _any),
    "output": _Kind("output 10 V", False, parse_level, _output),
    "dc": _Kind("dc 10 mV", False, parse_level, _dc),
    "loudness": _Kind("loudness -16 LUFS", False, _lufs, _loudness),
}
