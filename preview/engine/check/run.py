"""A recording through the stage: the whole of it with everything noted, or a passage to see whether it stays clean."""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.dsp.events import EventFinder, LimitEvent
from preview.dsp.settle import settle
from preview.dsp.stage import Snapshot, StageProcessor
from preview.engine.check.levels import Levels
from preview.engine.check.results import Limit, OpAmpCheck
from preview.engine.check.trace import Trace
from preview.engine.loop import Samples, joined_readings
from preview.errors import CircuitError
from preview.session import Session

__all__ = [
    "EVENTS_KEPT",
    "Load",
    "Signal",
    "Stages",
    "WholeRun",
    "loads",
    "piece_frames",
    "pieces",
    "settle_at",
]

EVENTS_KEPT = 20_000
"""Visits of one recording that are kept with their times; beyond these they are only counted."""
BLOCK_FRAMES = 512
"""Frames that a stage computes at a time."""
WORST_PIECES = 3
"""Passages that are looked at again to find the largest clean input."""


class Signal(Protocol):
    """A recording that can be read from any frame."""

    @property
    def channels(self) -> int:
        """Channels."""

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""

    def read(self, samples_out: Samples) -> int:
        """Fill from the next frames; the frames filled, 0 at the end."""

    def seek(self, frame: int) -> None:
        """Make that frame the next to be read."""


class Stages:
    """Running stages of one circuit, kept from recording to recording; listened to at another node if one is named."""

    def __init__(self, session: Session, *, output_node: str = "") -> None:
        netlist = session.netlist()
        self.netlist: Netlist = replace(netlist, output_node=output_node) if output_node else netlist
        self._quality = session.quality
        self._made: dict[tuple[float, int], StageProcessor] = {}

    def at_rest(self, signal: Signal) -> StageProcessor:
        """The stage for this kind of signal, at rest."""
        return self.of(float(signal.sample_rate_hz), signal.channels)

    def of(self, sample_rate_hz: float, channels: int) -> StageProcessor:
        """The stage for signals of this rate and so many channels, at rest."""
        key = (sample_rate_hz, channels)
        if key not in self._made:
            if len(self._made) >= 4:
                self._made.clear()
            self._made[key] = StageProcessor(
                self.netlist,
                sample_rate_hz=sample_rate_hz,
                channels=channels,
                quality=self._quality,
                block_frames=BLOCK_FRAMES,
            )
        stage = self._made[key]
        stage.reset()
        return stage


@dataclass(frozen=True, slots=True)
class Load:
    """How much of one limit an op-amp used; 1 is the limit."""

    name: str
    """U1, U2 ..."""
    limit: Limit
    """Which."""
    share: float
    """From rest to the limit."""


def loads(netlist: Netlist, readings: tuple[OpAmpReading, ...]) -> list[Load]:
    """How much of its limits each op-amp used, as far as that can be told."""
    found = []
    for site, reading in zip(netlist.opamps, readings, strict=True):
        name, model = site.designator, site.model
        # one that is faster one way may pass its slower limit that way: the faster one is what it cannot pass
        fastest = max(model.slew_up_v_per_s, model.slew_down_v_per_s)
        found += [
            Load(name, "rail", 10.0 ** (-reading.headroom_db / 20.0)),
            Load(name, "slew rate", reading.slew_peak_v_per_s / fastest),
            Load(name, "output current", reading.current_peak_a / reading.current_limit_a),
        ]
    return found


def piece_frames(sample_rate_hz: float) -> int:
    """Frames that are run at a time: a tenth of a second, or a little longer at low rates."""
    return max(round(sample_rate_hz / 10.0), 64)


def settle_at(stage: StageProcessor, signal: Signal, scale_v: float, frame: int) -> None:
    """Let a stage come to rest with one frame of the signal."""
    first = np.zeros((1, signal.channels))
    signal.seek(frame)
    if signal.read(first):
        settle(stage, first[0] * scale_v)


def pieces(
    signal: Signal, scale_v: float, first: int = 0, frames: int | None = None, *, hold: int = 0
) -> Iterator[tuple[Volts, int]]:
    """The signal in volts, ``piece_frames`` at a time, and how many frames of each are the recording's own.

    If its end is reached its last value is held for a piece of ``hold`` frames: in it the last samples come through.
    """
    piece = piece_frames(signal.sample_rate_hz)
    samples = np.zeros((piece, signal.channels))
    volts = np.zeros((max(piece, hold), signal.channels))
    signal.seek(first)
    left = frames
    last = np.zeros(signal.channels)
    while left is None or left > 0:
        want = piece if left is None else min(left, piece)
        count = signal.read(samples[:want])
        if count == 0:
            if hold:
                volts[:hold] = last
                yield volts[:hold], 0
            return
        np.multiply(samples[:count], scale_v, out=volts[:count])
        last = volts[count - 1].copy()
        if left is not None:
            left -= count
        yield volts[:count], count


@dataclass(slots=True)
class _Farthest:
    """The piece in which one op-amp went farthest, to be looked at again."""

    far_v: float = 0.0
    frame: int = 0
    volts: Volts | None = None
    before: Snapshot = ()


class WholeRun:
    """A whole recording run once, everything noted.

    Parameters
    ----------
    signal : Signal
        The recording.
    full_scale_v : float
        Volts of a sample of 1.0 [V].
    stages : Stages
        Running stages.
    progress : callable
        Told the frames done since the last call.
    settled : bool
        Whether the first value was there long before, and not the circuit at rest.

    Raises
    ------
    AudioFileError
        The recording cannot be read.
    CircuitError
        The computation was stopped by a fault.
    """

    def __init__(
        self,
        signal: Signal,
        full_scale_v: float,
        stages: Stages,
        progress: Callable[[int], None],
        *,
        settled: bool = False,
    ) -> None:
        self._netlist = stages.netlist
        self._rate_hz = float(signal.sample_rate_hz)
        self.settled = settled
        stage = stages.at_rest(signal)
        if settled:
            settle_at(stage, signal, full_scale_v, 0)
        self._finder = EventFinder(stage)
        self.frames = 0
        """Frames read."""
        self.events: list[LimitEvent] = []
        """Visits to limits, as far as they are kept."""
        self.input = Levels(self._rate_hz, signal.channels, full_scale_v)
        self.output = Levels(self._rate_hz, signal.channels, full_scale_v)
        piece = piece_frames(self._rate_hz)
        self._near_frames = 16 * piece
        self.trace = Trace(piece / self._rate_hz, len(self._netlist.opamps))
        self.loads: list[Load] = []
        """The most that was used of each limit."""
        self.readings: tuple[OpAmpReading, ...] = ()
        self._counts: dict[tuple[str, str], tuple[int, float]] = {}
        self._longest: dict[str, LimitEvent] = {}
        self._peaks = [_Farthest() for _ in self._netlist.opamps]
        self._worst: list[tuple[float, int]] = []
        self._skip = stage.latency_frames
        # the circuit comes to the end of the recording earlier than its output comes out
        lag = math.ceil(stage.filters.circuit_delay_frames)
        self._out = np.zeros((max(piece, stage.latency_frames), signal.channels))
        volts = np.zeros((0, signal.channels))
        for volts, own in pieces(signal, full_scale_v, hold=lag):
            self._piece(volts, own)
            progress(own)
        self._finder.finish()
        self._take_events()
        if len(volts):
            rest = np.repeat(volts[-1:], stage.latency_frames - lag, axis=0)
            stage.process(rest, self._out[: len(rest)])
            self._hear(len(rest))

    @property
    def clean(self) -> bool:
        """Whether nothing came to a limit."""
        return not self._counts and all(load.share < 1.0 for load in self.loads)

    @property
    def worst_frames(self) -> list[int]:
        """First frames of the pieces that use most of a limit, the worst first."""
        return [frame for _, frame in sorted(self._worst, reverse=True)]

    def opamps(self) -> tuple[OpAmpCheck, ...]:
        """What each op-amp did."""
        return tuple(self._opamp(j) for j in range(len(self.readings)))

    def _opamp(self, j: int) -> OpAmpCheck:
        site, reading = self._netlist.opamps[j], self.readings[j]
        name = site.designator
        clip_events, clipped_s = self._counts.get((name, "rail"), (0, 0.0))
        slew_events, slewed_s = self._counts.get((name, "slew"), (0, 0.0))
        current_events, current_s = self._counts.get((name, "current"), (0, 0.0))
        range_events, range_s = self._counts.get((name, "range"), (0, 0.0))
        longest, peak = self._longest.get(name), self._peaks[j]
        worst_s = math.nan
        if longest is not None:
            worst_s = longest.start_s
        elif peak.volts is not None:
            worst_s = self._finder.peak_s(peak.before, peak.frame, peak.volts, j, reading.rest_v)
        return OpAmpCheck(
            name=name,
            peak_v=reading.peak_v,
            high_v=reading.high_v,
            low_v=reading.low_v,
            high_limit_v=site.high_v,
            low_limit_v=site.low_v,
            rest_v=reading.rest_v,
            headroom_db=reading.headroom_db,
            clip_events=clip_events,
            clipped_s=clipped_s,
            worst_s=worst_s,
            slew_peak_v_per_s=reading.slew_peak_v_per_s,
            slew_limit_v_per_s=reading.slew_limit_v_per_s,
            slew_events=slew_events,
            slewed_s=slewed_s,
            current_peak_a=reading.current_peak_a,
            current_limit_a=reading.current_limit_a,
            current_events=current_events,
            current_limited_s=current_s,
            input_range_events=range_events,
            input_range_s=range_s,
            unsolved_steps=reading.unsolved_steps,
        )

    def _piece(self, volts: Volts, own: int) -> None:
        finder = self._finder
        frame = finder.frames
        readings = finder.process(volts, self._out[: len(volts)])
        fault = finder.stage.fault
        if fault is not None:
            raise CircuitError(
                f"stopped at {fault.time_s:.3f} s: {fault.node}, {fault.reason}",
                "the circuit may be unstable: check its feedback",
            )
        self.frames += own
        input_peak_v = self.input.add(volts[:own])
        output_peak_v = self._hear(len(volts))
        self.readings = joined_readings(self.readings, readings) if self.readings else readings
        found = loads(self._netlist, readings)
        clipped_frames = sum(r.clipped_s for r in readings) * self._rate_hz
        self._remember(max((load.share for load in found), default=0.0) + clipped_frames, frame)
        both = zip(self.loads or found, found, strict=True)
        self.loads = [max(one, other, key=lambda load: load.share) for one, other in both]
        for j, reading in enumerate(readings):
            far_v = max(reading.high_v - reading.rest_v, reading.rest_v - reading.low_v)
            if far_v > self._peaks[j].far_v:
                self._peaks[j] = _Farthest(far_v, frame, volts.copy(), finder.before)
        if own:
            headroom_db = [r.headroom_db for r in readings]
            self.trace.add(input_peak_v, output_peak_v, headroom_db, own / self._rate_hz)
        self._take_events()

    def _hear(self, frames: int) -> float:
        """Take so many frames of the output, those before its beginning and after its end left out; their peak [V]."""
        heard = self._out[min(self._skip, frames) : frames][: self.frames - self.output.frames]
        self._skip -= min(self._skip, frames)
        return self.output.add(heard)

    def _remember(self, load: float, frame: int) -> None:
        """Keep the worst pieces, one of each neighbourhood."""
        near = [w for w in self._worst if abs(w[1] - frame) < self._near_frames]
        if near and near[0][0] >= load:
            return
        for other in near:
            self._worst.remove(other)
        self._worst = heapq.nlargest(WORST_PIECES, [*self._worst, (load, frame)])

    def _take_events(self) -> None:
        end_s = self.frames / self._rate_hz
        for event in self._finder.events:
            if self.frames and event.start_s >= end_s:
                continue  # it belongs to what is held after the end
            if event.start_s < 0.0:
                event = replace(event, start_s=0.0, end_s=max(event.end_s, 0.0))
            key = (event.designator, event.kind)
            count, time_s = self._counts.get(key, (0, 0.0))
            self._counts[key] = (count + 1, time_s + event.length_s)
            if event.kind == "rail":
                longest = self._longest.get(event.designator)
                if longest is None or event.length_s > longest.length_s:
                    self._longest[event.designator] = event
            if len(self.events) < EVENTS_KEPT:
                self.events.append(event)
        self._finder.events.clear()
