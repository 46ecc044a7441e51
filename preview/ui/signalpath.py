"""The signal path in rows: source, each op-amp, output; how near each is to its limits, and which is worst."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from enum import IntEnum
from typing import TYPE_CHECKING

from preview.circuit.netlist import OpAmpSite
from preview.circuit.opamp import OpAmpReading
from preview.meters.reading import LevelReading
from preview.ui.words import type_name
from preview.values.levels import ratio_db

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["NEAR_DB", "PathRow", "State", "path_rows", "worst_of"]

NEAR_DB = 3.0
"""With less headroom than this a row says ``near`` [dB]."""
AT_THE_LIMIT = 0.999
"""From this share of a limit on the limit counts as reached."""


class State(IntEnum):
    """What limits a row, the larger the worse."""

    FINE = 0
    """Room to every limit."""
    NEAR = 1
    """Less than 3 dB to a limit."""
    FULL = 2
    """The recording reaches full scale: it may have been clipped before it came here."""
    SLEWS = 3
    """At the slew limit."""
    CURRENT = 4
    """At the limit of its output current."""
    RANGE = 5
    """An input outside of the range that it follows."""
    CLIPS = 6
    """At a rail."""
    UNSOLVED = 7
    """Its limits could not be solved to tolerance."""

    @property
    def word(self) -> str:
        """As the screen says it."""
        return ["fine", "near", "FULL", "SLEWS", "CURRENT", "RANGE", "CLIPS", "UNSOLVED"][self]


@dataclass(frozen=True, slots=True)
class PathRow:
    """One line of the signal path."""

    label: str
    """``in``, ``U1``, ``out L`` ..."""
    kind: str
    """``in``, ``opamp``, ``out`` or ``byp``."""
    hold_v: float
    """Highest peak since the holds were cleared [V]."""
    peak_v: float | None
    """Highest peak since the last reading [V]; None where only the hold is known."""
    rms_v: float | None
    """RMS [V]; None for an op-amp."""
    wall_v: float | None
    """The limit [V]; None for none."""
    headroom_db: float
    """From the hold to the wall [dB]; NaN where there is no wall or no signal."""
    state: State
    """What limits it."""
    slew_ratio: float | None = None
    """Share of the slew limit in use; None where there is none."""
    current_ratio: float | None = None
    """Share of the current limit in use; None where there is none."""
    events: int | None = None
    """Clip events; None where they are not counted."""
    clipped_s: float = 0.0
    """Time at the rails [s]."""
    type: str = ""
    """Op-amp type, short."""

    @property
    def room_db(self) -> float:
        """Distance to the nearest limit of any kind [dB], by which rows of one state are compared."""
        rooms = [self.headroom_db] if math.isfinite(self.headroom_db) else []
        ratios = (self.slew_ratio, self.current_ratio)
        rooms += [-ratio_db(ratio) for ratio in ratios if ratio is not None and ratio > 0.0]
        return min(rooms, default=math.inf)


def worst_of(rows: Sequence[PathRow]) -> PathRow | None:
    """The row that limits first: among the op-amps, or the source where they all have more room; None in silence."""
    candidates = [row for row in rows if row.kind in ("in", "opamp") and row.room_db < math.inf]
    return min(candidates, key=lambda row: (-row.state, row.room_db), default=None)


def path_rows(desk: Desk, *, channel_rows: int = 1) -> list[PathRow]:
    """The rows from source to output.

    Parameters
    ----------
    channel_rows : int
        Most rows for the channels of the source, and of the output; what has no row of its own is in the loudest.
    """
    snapshot = desk.snapshot
    full_scale_v = desk.session.full_scale.volts
    silent = LevelReading((0.0,), (0.0,), (0.0,))
    rows = []
    for label, hold_v, peak_v, rms_v in _channels("in", snapshot.input if snapshot else silent, channel_rows):
        room_db = ratio_db(full_scale_v / hold_v) if hold_v > 0.0 else math.nan
        # A source may be as loud as full scale and be fine; only a recording at its last step is suspect.
        state = State.FULL if hold_v >= AT_THE_LIMIT * full_scale_v else State.FINE
        rows.append(PathRow(label, "in", hold_v, peak_v, rms_v, full_scale_v, room_db, state))
    readings = snapshot.opamps if snapshot else ()
    live_v = dict(
        zip((r.designator for r in readings), snapshot.opamp_peaks_v if snapshot else (), strict=False)
    )
    for site in desk.sites():
        reading = next((r for r in readings if r.designator == site.designator), None)
        rows.append(_opamp_row(desk, site, reading, live_v.get(site.designator)))
    wall_v, drives_out = desk.output_wall()
    bypass = snapshot is not None and snapshot.bypass
    word = "byp" if bypass else "out"
    for label, hold_v, peak_v, rms_v in _channels(
        word, snapshot.output if snapshot else silent, channel_rows
    ):
        # In bypass the lower bars are the input again: they say so, and no rail is theirs.
        limit_v = None if bypass else wall_v
        room_db = math.nan
        if limit_v is not None and hold_v > 0.0:
            driver = next((row for row in rows if row.label == drives_out), None)
            single = 0.0 in (desk.session.supply.positive_v, desk.session.supply.negative_v)
            # On a single supply only the op-amp knows which rail is nearer.
            room_db = driver.headroom_db if driver and single else max(0.0, ratio_db(limit_v / hold_v))
        rows.append(PathRow(label, word, hold_v, peak_v, rms_v, limit_v, room_db, State.FINE))
    return rows


def _opamp_row(desk: Desk, site: OpAmpSite, reading: OpAmpReading | None, live_v: float | None) -> PathRow:
    wall_v, kind = desk.wall_of(site), type_name(site.type)
    if reading is None:
        return PathRow(site.designator, "opamp", 0.0, live_v, None, wall_v, math.nan, State.FINE, type=kind)
    slew_ratio = None
    if math.isfinite(reading.slew_limit_v_per_s):
        slew_ratio = reading.slew_peak_v_per_s / reading.slew_limit_v_per_s
    limit_a = reading.current_limit_a
    current_ratio = reading.current_peak_a / limit_a if math.isfinite(limit_a) else None
    room_db = reading.headroom_db if math.isfinite(reading.headroom_db) else math.nan
    # A visit to the rail that was under way when the counts were cleared is one visit since then.
    events = max(reading.clip_events, 1) if reading.clipped_s > 0.0 else reading.clip_events
    state = State.FINE
    if reading.unsolved_steps:
        state = State.UNSOLVED
    elif events:
        state = State.CLIPS
    elif reading.input_range_events:
        state = State.RANGE
    elif reading.current_limited_s > 0.0:
        state = State.CURRENT
    elif slew_ratio is not None and slew_ratio >= AT_THE_LIMIT:
        state = State.SLEWS
    row = PathRow(
        label=site.designator,
        kind="opamp",
        hold_v=reading.peak_v,
        peak_v=live_v,
        rms_v=None,
        wall_v=wall_v,
        headroom_db=room_db,
        state=state,
        slew_ratio=slew_ratio,
        current_ratio=current_ratio,
        events=events,
        clipped_s=reading.clipped_s,
        type=kind,
    )
    return replace(row, state=State.NEAR) if state is State.FINE and row.room_db < NEAR_DB else row


def _channels(word: str, reading: LevelReading, most: int) -> list[tuple[str, float, float, float]]:
    """Label, hold, peak and rms of every channel, or of the first ones and the loudest of the rest."""
    count = len(reading.peak_v)
    if count == 0:
        return [(word, 0.0, 0.0, 0.0)]
    names = {1: [word], 2: [f"{word} L", f"{word} R"]}.get(count, [f"{word} {n + 1}" for n in range(count)])
    shown = count if count <= most else most - 1
    rows = [(names[n], reading.hold_v[n], reading.peak_v[n], reading.rms_v[n]) for n in range(shown)]
    if shown < count:
        rest = slice(shown, count)
        label = f"{word} {shown + 1}+" if shown else word
        rows.append((label, max(reading.hold_v[rest]), max(reading.peak_v[rest]), max(reading.rms_v[rest])))
    return rows
