"""When each op-amp came to a limit and left it: the stage is run, and run again finely where it limited.

The running statistics say how often a limit was touched and for how long in all, not when. Where an op-amp comes to a
rail once and stays, or leaves it once, that gives the time; where more happens, the piece of signal is run again in
halves of halves, down to a frame, from a state kept at its start. Samples do not depend on how the signal is cut, so
the second run is the first one, seen from nearer.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from preview.circuit.opamp import OpAmpReading
from preview.dsp import kernels
from preview.dsp.block import Volts
from preview.dsp.stage import BLOCK_FRAMES, Snapshot, StageProcessor

__all__ = ["PIECE_FRAMES", "EventFinder", "LimitEvent", "LimitKind"]

LimitKind = Literal["rail", "slew", "current", "range"]
"""What an op-amp came to: a rail (or the end of its swing), its slew rate, its largest current, the end of its
common-mode range."""
Side = Literal["high", "low", ""]
Key = tuple[LimitKind, int, int]

PIECE_FRAMES = 16 * BLOCK_FRAMES
"""Most frames that are run at a time, between two kept states."""

_COLUMNS: tuple[tuple[LimitKind, int, int], ...] = (
    ("rail", kernels.EVENTS, kernels.CLIPPED),
    ("current", -1, kernels.STARVED),
    ("range", kernels.OUTSIDE_EVENTS, kernels.OUTSIDE),
)
"""Limits in the order of ``Core.limited``: columns of the count of visits, -1 where there is none, and of the time."""

AT_LIMIT = 1.0 - 1e-9
"""Share of the slew rate from which on an op-amp is taken to slew."""


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
class _Stay:
    """What the statistics of some frames show of one op-amp and one kind of limit."""

    kind: LimitKind
    """The limit."""
    was: bool
    """At it before these frames."""
    now: bool
    """At it after them."""
    begun: int
    """Visits begun in them."""
    steps: float
    """Time at it [steps]."""
    unsure: bool
    """Visits are not counted, and there may have been more than can be seen."""


@dataclass(slots=True)
class _Seen:
    """What the statistics of some frames show of one op-amp in one channel."""

    c: int
    """Channel, from 0."""
    j: int
    """Which op-amp."""
    slews: bool
    """It slewed."""
    stays: list[_Stay]
    """Limits that it was at."""
    stats: list[float]
    """All statistics."""

    @property
    def plain(self) -> bool:
        """Whether the times follow: it came to each limit or left it once at most, and did not slew."""
        return not self.slews and all(2 * s.begun + s.was - s.now <= 1 and not s.unsure for s in self.stays)


class EventFinder:
    """Runs a stage and notes each visit of an op-amp to a limit, with its times to within a frame.

    Parameters
    ----------
    stage : StageProcessor
        At rest, or where it shall begin.
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
        self._delay_frames = stage.filters.circuit_delay_frames
        models = [o.model for o in stage.netlist.opamps]
        ways = [(m.slew_up_v_per_s * stage.step_s, m.slew_down_v_per_s * stage.step_s) for m in models]
        self._slews = [(min(way), max(way)) for way in ways]

    def process(self, volts_in: Volts, volts_out: Volts | None) -> tuple[OpAmpReading, ...]:
        """Run the next ``volts_in``, at most ``PIECE_FRAMES``; the readings of these frames.

        ``volts_out`` is filled; with None the output is left out, from the first frames to the last.
        """
        stage, frames = self.stage, len(volts_in)
        self.before = stage.snapshot()
        was = stage.core.limited().tolist()
        stage.clear_readings()
        if volts_out is not None:
            stage.process(volts_in, volts_out)
        else:
            for first in range(0, frames, BLOCK_FRAMES):
                count = min(BLOCK_FRAMES, frames - first)
                stage.raise_rate(volts_in, first, count)
                stage.run_core(0, count)
                stage.keep_rate(count)
        seen = self._seen(was, frames)
        if all(one.plain for one in seen):
            self._note(self.frames, frames, seen)
        else:
            after = stage.snapshot()
            stage.restore(self.before)
            for first in range(0, frames, BLOCK_FRAMES):
                count = min(BLOCK_FRAMES, frames - first)
                stage.raise_rate(volts_in, first, count)
                self._look(self.frames + first, 0, count)
                stage.keep_rate(count)
            stage.restore(after)
        self.frames += frames
        return stage.readings()

    @property
    def limited(self) -> bool:
        """Whether there has been a visit, ended or not, since the events were last emptied."""
        return bool(self.events or self._open)

    def first(self) -> tuple[str, LimitKind]:
        """Which op-amp came to which limit first; call only where ``limited``."""
        names = [o.designator for o in self.stage.netlist.opamps]
        begun = [(e.start_s, e.designator, e.kind) for e in self.events]
        begun += [(visit.start_s, names[j], kind) for (kind, _, j), visit in self._open.items()]
        frame_s = 1.0 / self.stage.sample_rate_hz  # of the slew rate whole frames are counted
        return min(begun, key=lambda one: one[0] + (frame_s if one[2] == "slew" else 0.0))[1:]

    def finish(self) -> None:
        """End what is still at a limit where the signal now is."""
        for key in list(self._open):
            self._end(key, self._time_s(self.frames))

    def peak_s(self, before: Snapshot, frame: int, volts_in: Volts, opamp: int, rest_v: float) -> float:
        """When an op-amp's output was farthest from rest in some frames, to within a frame [s].

        Parameters
        ----------
        before, frame, volts_in
            The stage before these frames, the number of their first, and the frames, at most ``PIECE_FRAMES``.
        opamp : int
            Which op-amp, from 0.
        rest_v : float
            Its output at rest [V].
        """
        stage = self.stage
        after = stage.snapshot()
        stage.restore(before)
        farthest, best = -1.0, 0
        for first in range(0, len(volts_in), BLOCK_FRAMES):
            count = min(BLOCK_FRAMES, len(volts_in) - first)
            stage.raise_rate(volts_in, first, count)
            for i in range(count):
                stage.clear_readings()
                stage.run_core(i, 1)
                stats = stage.core.statistics()[:, opamp]
                far = max(stats[:, kernels.HIGH].max() - rest_v, rest_v - stats[:, kernels.LOW].min())
                if far > farthest:
                    farthest, best = far, first + i
            stage.keep_rate(count)
        stage.restore(after)
        return self._time_s(frame + best + 0.5)

    def _time_s(self, frames: float) -> float:
        """Time of the recording that the circuit has come to after so many frames [s]."""
        return (frames - self._delay_frames) / self.stage.sample_rate_hz

    def _look(self, base: int, first: int, count: int) -> None:
        """Run some frames of the block that begins at frame ``base``, and halves of them until all is plain."""
        core = self.stage.core
        kept = [a.copy() for a in core.moving()]
        was = core.limited().tolist()
        self.stage.clear_readings()
        self.stage.run_core(first, count)
        seen = self._seen(was, count)
        if count == 1 or all(one.plain for one in seen):
            self._note(base + first, count, seen)
            return
        for now, then in zip(core.moving(), kept, strict=True):
            now[...] = then
        half = count // 2
        self._look(base, first, half)
        self._look(base, first + half, count - half)

    def _seen(self, was: list[list[list[bool]]], frames: int) -> list[_Seen]:
        """What the statistics show of every op-amp that was, is, or comes to a limit in these frames."""
        seen = []
        core = self.stage.core
        now = core.limited().tolist()
        for c, of_channel in enumerate(core.statistics().tolist()):
            for j, before in enumerate(was[c]):
                stats, after = of_channel[j], now[c][j]
                # one that is faster one way may pass its slower limit that way; slewing, it moves at just its limit
                fastest, (slow, fast) = stats[kernels.SLEW], self._slews[j]
                slews = slow * AT_LIMIT <= fastest <= slow / AT_LIMIT or fastest >= AT_LIMIT * fast
                stays = []
                for i, (kind, counted, timed) in enumerate(_COLUMNS):
                    steps, begins = stats[timed], after[i] and not before[i]
                    begun = int(stats[counted]) if counted >= 0 else int(steps > 0.0 and not before[i])
                    begun = max(begun, begins)
                    if begun or before[i] or after[i]:
                        unsure = counted < 0 and 0.0 < steps < frames * self.stage.filters.factor - 0.5
                        stays.append(_Stay(kind, before[i], after[i], begun, steps, unsure))
                if slews or stays:
                    seen.append(_Seen(c, j, slews, stays, stats))
        return seen

    def _note(self, frame: int, count: int, seen: list[_Seen]) -> None:
        """Take what was seen in some frames into account."""
        start_s, end_s = self._time_s(frame), self._time_s(frame + count)
        for kind, c, j in [key for key in self._open if key[0] == "slew"]:
            if not any(one.slews for one in seen if (one.c, one.j) == (c, j)):
                self._end((kind, c, j), start_s)
        for one in seen:
            if one.slews:
                self._open.setdefault(("slew", one.c, one.j), _Visit(start_s))
            for stay in one.stays:
                self._lay(one, stay, start_s, end_s)

    def _lay(self, one: _Seen, stay: _Stay, start_s: float, end_s: float) -> None:
        """Lay the visits of some frames in order; several within one frame share its time evenly."""
        at_limit_s = min(stay.steps * self.stage.step_s, end_s - start_s)
        pieces = stay.begun + stay.was
        gaps = stay.begun + (not stay.now)
        key: Key = (stay.kind, one.c, one.j)
        side: Side = ""
        if stay.kind == "rail":
            site = self.stage.netlist.opamps[one.j]
            to_high_v, to_low_v = site.high_v - one.stats[kernels.HIGH], one.stats[kernels.LOW] - site.low_v
            side = "high" if to_high_v <= to_low_v else "low"
        if stay.was and key not in self._open:  # it was at the limit before the first frame
            self._open[key] = _Visit(start_s, side)
        gap_s = (end_s - start_s - at_limit_s) / gaps if gaps else 0.0
        piece_s = at_limit_s / pieces if pieces else 0.0
        at_s = start_s
        for i in range(pieces):
            if i > 0 or not stay.was:
                at_s += gap_s
                self._open[key] = _Visit(at_s, side)
            at_s += piece_s
            if i < pieces - 1 or not stay.now:
                self._end(key, at_s)

    def _end(self, key: Key, end_s: float) -> None:
        kind, c, j = key
        visit = self._open.pop(key)
        name = self.stage.netlist.opamps[j].designator
        self.events.append(
            LimitEvent(name, kind, c + 1, visit.start_s, max(end_s, visit.start_s), visit.side)
        )
