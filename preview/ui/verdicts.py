"""What this signal asks of each op-amp: a line for each limit, with the reason and, where it is needed, the cure."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import IntEnum
from typing import TYPE_CHECKING

from preview.circuit.netlist import OpAmpSite
from preview.circuit.opamp import OpAmpReading
from preview.circuit.opamp_units import format_figure
from preview.engine.messages import OpAmpMarks
from preview.ui.signalpath import AT_THE_LIMIT
from preview.ui.words import db, duration, milliamperes, percent, slew_of, volts
from preview.values.levels import ratio_db

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Grade", "Verdict", "verdicts"]

TIGHT_DB = 3.0
"""With less room than this a limit is tight [dB]."""
_SPEED_FINE_DB, _SPEED_TIGHT_DB = 0.1, 0.5
_OFFSET_FINE_RATIO, _OFFSET_TIGHT_RATIO = 0.01, 0.1
"""Shares of the room between the limits that an offset may take."""
_NOISE_FINE_DB, _NOISE_TIGHT_DB = 80.0, 60.0
"""Distance of the noise below the highest peak [dB]."""


class Grade(IntEnum):
    """How good it is, the larger the worse."""

    OPEN = 0
    """Nothing to judge yet."""
    FINE = 1
    """Room enough."""
    TIGHT = 2
    """Hardly room."""
    LIMITS = 3
    """The signal is changed by it."""

    @property
    def glyph(self) -> str:
        """A mark that does not need colour."""
        return " ·!‼"[self]


@dataclass(frozen=True, slots=True)
class Verdict:
    """One line."""

    designator: str
    """U1, U2 ..."""
    aspect: str
    """``swing``, ``slew`` ..."""
    grade: Grade
    """How good it is."""
    text: str
    """What is the case, in figures."""
    cure: str = ""
    """What to do about it; empty where nothing is needed."""

    @property
    def line(self) -> str:
        """The whole of it: ``slew 1.9 of 13 V/µs: fine``."""
        return f"{self.aspect} {self.text}" + (f": {self.cure}" if self.cure else "")


def verdicts(desk: Desk, designator: str | None = None) -> list[Verdict]:
    """The verdicts on every op-amp, or on one: the worst first within each."""
    snapshot = desk.snapshot
    readings = {reading.designator: reading for reading in snapshot.opamps} if snapshot else {}
    found: list[Verdict] = []
    for site in desk.sites():
        if designator not in (None, site.designator):
            continue
        reading = readings.get(site.designator)
        lines = [_swing(desk, site, reading)]
        if reading is not None:
            lines += _slew(desk, site, reading) + _current(site, reading) + _input_range(site, reading)
        lines += _offset(desk, site) + _speed(desk, site) + _noise(desk, site)
        found += sorted(lines, key=lambda verdict: -verdict.grade)
    return found


def _marks(desk: Desk, designator: str) -> OpAmpMarks | None:
    """What was found out about an op-amp by looking through the recording."""
    marks = None if desk.marks_old else desk.marks
    return next((m for m in marks.opamps if m.designator == designator), None) if marks else None


def _graded(room_db: float) -> Grade:
    return Grade.TIGHT if room_db < TIGHT_DB else Grade.FINE


def _swing(desk: Desk, site: OpAmpSite, reading: OpAmpReading | None) -> Verdict:
    name, wall_v = site.designator, desk.wall_of(site)
    if wall_v is None:
        return Verdict(name, "swing", Grade.FINE, "has no limit", "fine")
    if reading is None or reading.peak_v <= 0.0:
        return Verdict(name, "swing", Grade.OPEN, f"no signal yet, limit {volts(wall_v)}")
    if reading.clipped_s == 0.0 and not reading.clip_events:
        text = f"{volts(reading.peak_v)} of {volts(wall_v)}, {db(reading.headroom_db)} dB left"
        if _graded(reading.headroom_db) is Grade.FINE:
            return Verdict(name, "swing", Grade.FINE, text, "fine")
        more_v = reading.peak_v * 10.0 ** (TIGHT_DB / 20.0) - wall_v
        less_db = TIGHT_DB - reading.headroom_db
        cure = f"for {TIGHT_DB:.0f} dB of room {volts(more_v)} more supply or {less_db:.1f} dB less gain"
        return Verdict(name, "swing", Grade.TIGHT, text, cure)
    events = max(reading.clip_events, 1)
    times = "once" if events == 1 else f"{events} times"
    text = f"clips {times}, {duration(reading.clipped_s)} in all, at {_limit_words(site)}"
    return Verdict(name, "swing", Grade.LIMITS, text, _swing_cure(desk, site))


def _limit_words(site: OpAmpSite) -> str:
    if site.high_v == -site.low_v:
        return f"±{volts(site.high_v)}"
    return f"{volts(site.high_v)} and {volts(site.low_v)}"


def _swing_cure(desk: Desk, site: OpAmpSite) -> str:
    """How much more supply or less gain the recording needs; the figure comes from running it without limits."""
    marks, own = None if desk.marks_old else desk.marks, _marks(desk, site.designator)
    if own is None or own.asked_high_v is None or own.asked_low_v is None:
        if marks is not None and marks.done_frames < marks.frames:
            done = percent(marks.done_frames / marks.frames)
            return (
                f"more supply or less gain; how much is known when the recording is looked through ({done})"
            )
        return "more supply or less gain"
    rest_v = desk.figures.now.rest_v.get(site.out, 0.0) if desk.figures.now else 0.0
    over_v = max(own.asked_high_v - site.high_v, site.low_v - own.asked_low_v)
    if over_v <= 0.0:
        return "not in this recording as it is set now; clear the counts"
    ratios = [1.0]
    for asked_v, limit_v in ((own.asked_high_v, site.high_v), (own.asked_low_v, site.low_v)):
        if (limit_v - rest_v) * (asked_v - rest_v) > 0.0 and math.isfinite(limit_v):
            ratios.append((asked_v - rest_v) / (limit_v - rest_v))
    less = f" or {ratio_db(max(ratios)):.1f} dB less gain" if max(ratios) > 1.0 else ""
    if less == "" or min(abs(site.high_v - rest_v), abs(rest_v - site.low_v)) < 0.1 * (
        site.high_v - site.low_v
    ):
        return f"needs {volts(over_v)} more supply, or a bias between the rails: it rests near one of them"
    return f"needs {volts(over_v)} more supply{less}"


def _slew(desk: Desk, site: OpAmpSite, reading: OpAmpReading) -> list[Verdict]:
    limit = reading.slew_limit_v_per_s
    if not math.isfinite(limit):
        return []
    name, used = site.designator, reading.slew_peak_v_per_s / limit
    text = slew_of(reading.slew_peak_v_per_s, limit)
    if used < AT_THE_LIMIT:
        grade = _graded(-ratio_db(used)) if used > 0.0 else Grade.FINE
        return [
            Verdict(
                name, "slew", grade, text, "fine" if grade is Grade.FINE else "a faster type for more room"
            )
        ]
    own = _marks(desk, name)
    cure = "a faster type, or less level at high frequencies"
    if own is not None and own.asked_slew_v_per_s is not None and own.asked_slew_v_per_s > limit:
        asked = format_figure(own.asked_slew_v_per_s, "slew", digits=3)
        cure = f"a type with {asked} or more, or {ratio_db(own.asked_slew_v_per_s / limit):.1f} dB less level"
    return [Verdict(name, "slew", Grade.LIMITS, f"{text}, at its limit", cure)]


def _current(site: OpAmpSite, reading: OpAmpReading) -> list[Verdict]:
    limit_a = reading.current_limit_a
    if not math.isfinite(limit_a):
        return []
    used = reading.current_peak_a / limit_a
    text = f"{milliamperes(reading.current_peak_a)} of {milliamperes(limit_a)}"
    if reading.current_limited_s > 0.0:
        text += f", at its limit for {duration(reading.current_limited_s)}"
        cure = "larger resistors around it, a lighter load, or a buffer"
        return [Verdict(site.designator, "current", Grade.LIMITS, text, cure)]
    grade = _graded(-ratio_db(used)) if used > 0.0 else Grade.FINE
    cure = "fine" if grade is Grade.FINE else "a lighter load for more room"
    return [Verdict(site.designator, "current", grade, text, cure)]


def _input_range(site: OpAmpSite, reading: OpAmpReading) -> list[Verdict]:
    if not (math.isfinite(site.input_high_v) or math.isfinite(site.input_low_v)):
        return []
    limits_v = f"{volts(site.input_low_v)} to {volts(site.input_high_v)}"
    if not reading.input_range_events and reading.input_range_s == 0.0:
        return [Verdict(site.designator, "input range", Grade.FINE, f"{limits_v}, never left", "fine")]
    events = max(reading.input_range_events, 1)
    times = "once" if events == 1 else f"{events} times"
    text = f"{limits_v}, left {times} for {duration(reading.input_range_s)}"
    cure = (
        "more supply, less signal at its inputs, an inverting stage, or a type whose inputs reach the rails"
    )
    return [Verdict(site.designator, "input range", Grade.LIMITS, text, cure)]


def _offset(desk: Desk, site: OpAmpSite) -> list[Verdict]:
    now = desk.figures.now
    if now is None or not now.offset_v or not site.model.real or not math.isfinite(site.high_v - site.low_v):
        return []
    offset_v = abs(now.offset_v.get(site.out, 0.0))
    ratio = offset_v / (site.high_v - site.low_v)
    text = f"{volts(offset_v)} of direct voltage at its output"
    if ratio < _OFFSET_FINE_RATIO:
        return [Verdict(site.designator, "offset", Grade.FINE, text, "fine")]
    grade = Grade.TIGHT if ratio < _OFFSET_TIGHT_RATIO else Grade.LIMITS
    cure = (
        "a capacitor where the signal comes in, equal resistances at both inputs, or a type with less offset"
    )
    return [Verdict(site.designator, "offset", grade, text, cure)]


def _speed(desk: Desk, site: OpAmpSite) -> list[Verdict]:
    now = desk.figures.now
    if now is None or now.problem or not site.model.real or not math.isfinite(site.model.gain_bandwidth_hz):
        return []
    text = f"{format_figure(site.model.gain_bandwidth_hz, 'frequency', digits=3)} of gain-bandwidth"
    others = " with the others" if len(desk.sites()) > 1 else ""
    text += f"{others} moves the response by {now.speed_db:.2f} dB up to 20 kHz"
    if now.speed_db < _SPEED_FINE_DB:
        return [Verdict(site.designator, "speed", Grade.FINE, text, "fine")]
    grade = Grade.TIGHT if now.speed_db < _SPEED_TIGHT_DB else Grade.LIMITS
    return [
        Verdict(
            site.designator, "speed", grade, text, "a type with more gain-bandwidth, or less gain a stage"
        )
    ]


def _noise(desk: Desk, site: OpAmpSite) -> list[Verdict]:
    """Noise of the whole circuit, told with the op-amp that drives the output."""
    now, (_, drives_out) = desk.figures.now, desk.output_wall()
    if now is None or not math.isfinite(now.noise_vrms) or site.designator != drives_out:
        return []
    text = f"{volts(now.noise_vrms)} rms at the output, 20 Hz to 20 kHz"
    snapshot = desk.snapshot
    hold_v = max(snapshot.output.hold_v, default=0.0) if snapshot else 0.0
    if hold_v <= 0.0:
        return [Verdict(site.designator, "noise", Grade.OPEN, text)]
    below_db = ratio_db(hold_v / math.sqrt(2.0) / now.noise_vrms) if now.noise_vrms > 0.0 else math.inf
    text += f", {below_db:.0f} dB below the loudest"
    if below_db >= _NOISE_FINE_DB:
        return [Verdict(site.designator, "noise", Grade.FINE, text, "fine")]
    grade = Grade.TIGHT if below_db >= _NOISE_TIGHT_DB else Grade.LIMITS
    return [Verdict(site.designator, "noise", grade, text, "smaller resistors, or a quieter type")]
