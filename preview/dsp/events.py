"""When each op-amp came to a limit and left it, from the log that the running kernels keep.

A row of the log is a step of the computation, a sixteenth of a frame or so, in which an op-amp came to a limit or left
it, with the time that it was there. Where it came to a limit once and stays, or leaves it once, that gives the time
exactly; several visits within one step share its time evenly.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np

from preview.circuit.opamp import OpAmpReading
from preview.dsp import visit_kernels
from preview.dsp.block import Volts
from preview.dsp.stage import Snapshot, StageProcessor
from preview.dsp.visit_kernels import (
    AT_CURRENT,
    AT_RAIL,
    AWAY,
    CHANNEL,
    CURRENT_LIMIT,
    EXITS,
    NOW,
    OPAMP,
    OUT_OF_RANGE,
    RAIL,
    SLEWED,
    SLEWS,
    STEP,
    VISITS,
    VOLTAGE,
    WAS,
)

__all__ = ["LOG_FRAMES", "EventFinder", "LimitEvent", "LimitKind"]

LimitKind = Literal["rail", "slew", "current", "range"]
"""What an op-amp came to: a rail (or the end of its swing), its slew rate, its largest current, the end of its
common-mode range."""
Side = Literal["high", "low", ""]
Key = tuple[LimitKind, int, int]

LOG_FRAMES = 2048
"""Most frames that are run before the log is read: as long as it must be."""

_KINDS: tuple[tuple[LimitKind, int, int, int], ...] = (
    ("rail", RAIL, VISITS, AT_RAIL),
    ("current", CURRENT_LIMIT, -1, AT_CURRENT),
    ("range", OUT_OF_RANGE, EXITS, AWAY),
)
"""Limits in the order of ``Core.limited``: bit, column of visits (-1 where there is none), column of time."""


@dataclass(frozen=True, slots=True)
class LimitEvent:
    """One visit to a limit. Times are of the recording, the delay of the computation taken out."""

    designator: str
    """U1, U2 ..."""
    kind: LimitKind
    """Which limit."""
    channel: int
    """Channel, counted from 1."""
    start_s: float
    """When it came to the limit [s]."""
    end_s: float
    """When it left it [s]."""
    side: Side = ""
    """Which rail; empty for others. The slew rate's frames are counted whole."""

    @property
    def length_s(self) -> float:
        """How long it lasted [s]."""
        return self.end_s - self.start_s


@dataclass(slots=True)
class _Visit:
    """A visit that has not ended."""

    start_s: float
    side: Side = ""


@dataclass(slots=True)
class _Slewing:
    """Frames in which an op-amp slewed, one after the other."""

    first: int
    end: int | None
    """The frame after the last; None while it slews."""


class EventFinder:
    """Runs a stage and notes each visit of an op-amp to a limit, with its times.

    Parameters
    ----------
    stage : StageProcessor
        At rest, or where it shall begin; no part may glide.
    """

    def __init__(self, stage: StageProcessor) -> None:
        self.stage = stage
        self.events: list[LimitEvent] = []
        """Visits that have ended, in order of their ends; the caller may empty it."""
        self.frames = 0
        """Frames run so far."""
        self.before: Snapshot = ()
        """The stage as it was before the frames last run."""
        self._open: dict[Key, _Visit] = {}
        self._slewing: dict[tuple[int, int], _Slewing] = {}
        self._delay_frames = stage.filters.circuit_delay_frames
        self._middle_v = [0.5 * (o.high_v + o.low_v) for o in stage.netlist.opamps]
        opamps, core = len(stage.netlist.opamps), stage.core
        core.log.begin(stage.channels * opamps * LOG_FRAMES * stage.filters.factor)
        at_limits = core.limited().tolist()
        voltages_v = core.statistics()[:, :, visit_kernels.HIGH].tolist()
        for c in range(stage.channels):
            for j in range(opamps):
                for (kind, *_), there in zip(_KINDS, at_limits[c][j], strict=True):
                    if there:
                        side = self._side(j, voltages_v[c][j]) if kind == "rail" else ""
                        self._open[kind, c, j] = _Visit(self._time_s(0), side)

    def process(self, volts_in: Volts, volts_out: Volts | None) -> tuple[OpAmpReading, ...]:
        """Run the next ``volts_in``; the readings of these frames.

        ``volts_out`` is filled; with None the output is left out, from the first frames to the last.
        """
        stage, log = self.stage, self.stage.core.log
        self.before = stage.snapshot()
        stage.clear_readings()
        log.take()
        for begin in range(0, len(volts_in), LOG_FRAMES):
            part = volts_in[begin : begin + LOG_FRAMES]
            if volts_out is not None:
                stage.process(part, volts_out[begin : begin + len(part)])
            else:
                for first, count in self._blocks(len(part)):
                    stage.raise_rate(part, first, count)
                    stage.run_core(0, count)
                    stage.keep_rate(count)
            for row in log.take():
                self._note(row)
            self.frames += len(part)
        if self._slewing:
            self._end_slewing()
        return stage.readings()

    @property
    def limited(self) -> bool:
        """Whether there has been a visit, ended or not, since the events were last emptied."""
        return bool(self.events or self._open or self._slewing)

    def first(self) -> tuple[str, LimitKind]:
        """Which op-amp came to which limit first; call only where ``limited``."""
        names = [o.designator for o in self.stage.netlist.opamps]
        begun: list[tuple[float, str, LimitKind]] = [(e.start_s, e.designator, e.kind) for e in self.events]
        begun += [(visit.start_s, names[j], kind) for (kind, _, j), visit in self._open.items()]
        begun += [(self._time_s(one.first), names[j], "slew") for (_, j), one in self._slewing.items()]
        frame_s = 1.0 / self.stage.sample_rate_hz  # of the slew rate whole frames are counted
        return min(begun, key=lambda one: one[0] + (frame_s if one[2] == "slew" else 0.0))[1:]

    def finish(self) -> None:
        """End what is still at a limit where the signal now is."""
        for key in list(self._open):
            self._end(key, self._time_s(self.frames))
        for (c, j), one in self._slewing.items():
            self._slewed(c, j, one.first, self.frames if one.end is None else one.end)
        self._slewing.clear()

    def peak_s(self, before: Snapshot, frame: int, volts_in: Volts, opamp: int, rest_v: float) -> float:
        """When an op-amp's output was farthest from rest in some frames, to within a frame [s].

        Parameters
        ----------
        before, frame, volts_in
            The stage before these frames, the number of their first, and the frames.
        opamp : int
            Which op-amp, from 0.
        rest_v : float
            Its output at rest [V].
        """
        stage = self.stage
        after = stage.snapshot()
        stage.restore(before)

        def far_v(first: int, count: int) -> float:
            """How far it comes from rest in some frames of a block."""
            stage.clear_readings()
            stage.run_core(first, count)
            stats = stage.core.statistics()[:, opamp]
            high, low = stats[:, visit_kernels.HIGH].max(), stats[:, visit_kernels.LOW].min()
            return float(max(high - rest_v, rest_v - low))

        farthest_v, block, begin = -1.0, (0, 0), before
        for first, count in self._blocks(len(volts_in)):
            now = stage.snapshot()
            stage.raise_rate(volts_in, first, count)
            there_v = far_v(0, count)
            stage.keep_rate(count)
            if there_v > farthest_v:
                farthest_v, block, begin = there_v, (first, count), now
        first, count = block
        stage.restore(begin)
        stage.raise_rate(volts_in, first, count)
        best = int(np.argmax([far_v(i, 1) for i in range(count)]))
        stage.restore(after)
        return self._time_s(frame + first + best + 0.5)

    def _time_s(self, frames: float) -> float:
        """Time of the recording that the circuit has come to after so many frames [s]."""
        return (frames - self._delay_frames) / self.stage.sample_rate_hz

    def _blocks(self, frames: int) -> Iterator[tuple[int, int]]:
        """First frame and count of each block."""
        most = self.stage.block_frames
        return ((first, min(most, frames - first)) for first in range(0, frames, most))

    def _side(self, opamp: int, voltage_v: float) -> Side:
        return "high" if voltage_v >= self._middle_v[opamp] else "low"

    def _note(self, row: list[float]) -> None:
        """Take a row of the log of the frames from ``frames`` on into account."""
        c, j, was, now = int(row[CHANNEL]), int(row[OPAMP]), int(row[WAS]), int(row[NOW])
        factor = self.stage.filters.factor
        if row[SLEWED]:
            frame = self.frames + int(row[STEP]) // factor
            end = None if now & SLEWS else frame + 1
            one = self._slewing.get((c, j))
            if one is not None and (one.end is None or one.end >= frame):
                one.end = end
            else:
                if one is not None and one.end is not None:
                    self._slewed(c, j, one.first, one.end)
                self._slewing[c, j] = _Slewing(frame, end)
        for kind, bit, counted, timed in _KINDS:
            before, after, time = bool(was & bit), bool(now & bit), row[timed]
            begun = int(row[counted]) if counted >= 0 else int(time > 0.0 and not before)
            if kind == "current" and before and after and time < visit_kernels.ALMOST:
                begun = 1  # it left it and came back
            begun = max(begun, after and not before)
            if begun or before != after:
                self._lay(row, (kind, c, j), before, after, begun, min(time, 1.0))

    def _lay(self, row: list[float], key: Key, before: bool, after: bool, begun: int, share: float) -> None:
        """Lay the visits of a step in order; ``share`` of it was spent at the limit."""
        side = self._side(key[2], row[VOLTAGE]) if key[0] == "rail" else ""
        step_s, factor = self.stage.step_s, self.stage.filters.factor
        at_s = self._time_s(self.frames + row[STEP] / factor)
        pieces, gaps = begun + before, begun + (not after)
        gap_s, piece_s = (1.0 - share) * step_s / gaps if gaps else 0.0, share * step_s / max(pieces, 1)
        for i in range(pieces):
            if i > 0 or not before:
                at_s += gap_s
                self._open[key] = _Visit(at_s, side)
            at_s += piece_s
            if i < pieces - 1 or not after:
                self._end(key, at_s)

    def _end_slewing(self) -> None:
        """End what cannot go on in the next frame."""
        for (c, j), one in list(self._slewing.items()):
            if one.end is not None and one.end < self.frames:
                self._slewed(c, j, one.first, one.end)
                del self._slewing[c, j]

    def _slewed(self, c: int, j: int, first: int, end: int) -> None:
        name = self.stage.netlist.opamps[j].designator
        self.events.append(LimitEvent(name, "slew", c + 1, self._time_s(first), self._time_s(end)))

    def _end(self, key: Key, end_s: float) -> None:
        kind, c, j = key
        visit = self._open.pop(key)
        name = self.stage.netlist.opamps[j].designator
        self.events.append(
            LimitEvent(name, kind, c + 1, visit.start_s, max(end_s, visit.start_s), visit.side)
        )
