"""Background work in pieces: a job is a generator that computes for a moment and yields what it knows so far."""

from __future__ import annotations

import contextlib
import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from preview.audio import devices
from preview.audio.sink import FileSink
from preview.audio.stream import open_output
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import PERFECT
from preview.engine.commands import Export
from preview.engine.passages import Material, Source, run_through
from preview.engine.readings import (
    ClipMarks,
    DeviceList,
    DeviceRow,
    ExportState,
    NodePeaks,
    OpAmpMarks,
    Overview,
    Report,
)
from preview.engine.render import output_comment, output_scale_v
from preview.errors import CircuitError, DeviceError, PreviewError
from preview.values.quality import Quality

__all__ = [
    "DeviceJob",
    "ExportJob",
    "Found",
    "Job",
    "Loudness",
    "LoudnessJob",
    "MarksJob",
    "OverviewJob",
    "ProbeJob",
    "Tried",
    "TryJob",
    "inner_nodes",
    "run",
]

COLUMNS = 2000
MARK_FRAMES = 256
MARK_GAP_S = 0.010
MARKS_MAX = 4000
SLEWING = 0.999
PIECE_S, PIECES = 10.0, 6
TRIED_FRAMES = 1024
_READ_FRAMES = 1 << 16


@dataclass(frozen=True, slots=True)
class OverviewJob:
    """Look at the waveform of a recording."""

    path: Path
    """The file."""
    columns: int = COLUMNS
    """Columns at most."""


@dataclass(frozen=True, slots=True, eq=False)
class MarksJob:
    """Find where a circuit clips."""

    letter: str
    """The candidate."""
    netlist: Netlist
    """Its circuit."""
    material: Material
    """What it hears, region ignored."""


@dataclass(frozen=True, slots=True, eq=False)
class LoudnessJob:
    """Measure the loudness of a candidate's output."""

    letter: str
    """The candidate."""
    netlist: Netlist
    """Its circuit."""
    material: Material
    """What it hears."""


@dataclass(frozen=True, slots=True, eq=False)
class ProbeJob:
    """Find the extremes at the inner nodes of a circuit."""

    letter: str
    """The candidate."""
    netlist: Netlist
    """Its circuit."""
    material: Material
    """What it hears."""


@dataclass(frozen=True, slots=True)
class ExportJob:
    """Write what is heard to a file."""

    order: Export
    """What to write and where."""
    material: Material
    """What is heard."""


@dataclass(frozen=True, slots=True)
class DeviceJob:
    """List the sound devices there are now."""


@dataclass(frozen=True, slots=True)
class TryJob:
    """Try whether an output device can be opened."""

    name: str
    """The device."""


Job = OverviewJob | MarksJob | LoudnessJob | ProbeJob | ExportJob | DeviceJob | TryJob


@dataclass(frozen=True, slots=True)
class Loudness:
    """What a ``LoudnessJob`` found."""

    letter: str
    """The candidate."""
    netlist: Netlist
    """The circuit that was measured."""
    lufs: float
    """Integrated loudness, full scale as 0 dBFS; -inf for silence."""


@dataclass(frozen=True, slots=True)
class Tried:
    """What a ``TryJob`` found."""

    name: str
    """The device."""
    there: bool
    """Whether it can be opened."""


Found = Report | Loudness | Tried
"""What a job tells."""


def run(job: Job) -> Iterator[Found | None]:
    """The pieces of a job; None where there is nothing new to tell. Ends by itself, raises PreviewError."""
    match job:
        case OverviewJob():
            return _overview(job)
        case MarksJob():
            return _marks(job)
        case LoudnessJob():
            return _loudness(job)
        case ProbeJob():
            return _probe(job)
        case ExportJob():
            return _export(job)
        case DeviceJob():
            return _devices()
        case TryJob():
            return _tried(job)


def _overview(job: OverviewJob) -> Iterator[Report | None]:
    material = Material(path=job.path)
    with contextlib.closing(material.open()) as source:
        frames = source.frames
        columns = min(job.columns, frames)
        edges = np.linspace(0, frames, columns + 1).round().astype(np.int64)
        low, high = np.full(columns, np.inf), np.full(columns, -np.inf)
        samples = np.zeros((_READ_FRAMES, source.channels))
        done = told = at = 0
        while got := source.read(samples):
            piece_low, piece_high = samples[:got].min(axis=1), samples[:got].max(axis=1)
            first = int(np.searchsorted(edges, at, side="right")) - 1
            inside = edges[(edges > at) & (edges < at + got)]
            cuts = np.concatenate([[at], inside]) - at
            touched = slice(first, first + len(cuts))
            np.minimum(low[touched], np.minimum.reduceat(piece_low, cuts), out=low[touched])
            np.maximum(high[touched], np.maximum.reduceat(piece_high, cuts), out=high[touched])
            at += got
            done = int(np.searchsorted(edges, at, side="right")) - 1
            if done - told >= columns // 20 and done < columns:
                told = done
                yield Overview(frames, columns, tuple(low[:done].tolist()), tuple(high[:done].tolist()))
            else:
                yield None
        yield Overview(at, max(done, 1), tuple(low[:done].tolist()), tuple(high[:done].tolist()))


def _marks(job: MarksJob) -> Iterator[Report | None]:
    with contextlib.closing(job.material.open()) as source:
        frames = job.material.bounds(source)[1]
        gap = round(MARK_GAP_S * source.sample_rate_hz)
        spans: dict[str, list[tuple[int, int]]] = {site.designator: [] for site in job.netlist.opamps}
        done = told = 0
        slews = False
        chunks = run_through(
            job.netlist,
            source,
            0,
            frames,
            scale_v=job.material.scale_v,
            quality=Quality.DRAFT,
            chunk_frames=MARK_FRAMES,
        )
        for frame, volts, stage in chunks:
            for reading in stage.readings():
                slews = slews or reading.slew_peak_v_per_s >= SLEWING * reading.slew_limit_v_per_s
                if reading.clipped_s:
                    mark = spans[reading.designator]
                    span = frame, min(frame + len(volts) + stage.latency_frames, frames)
                    if mark and (span[0] - mark[-1][1] <= gap or len(mark) >= MARKS_MAX):
                        mark[-1] = mark[-1][0], span[1]
                    else:
                        mark.append(span)
            done = frame + len(volts)
            if (done // MARK_FRAMES) % 64:
                continue
            if done - told >= frames // 20:
                told = done
                yield _clip_marks(job.letter, frames, done, spans)
            else:
                yield None
        marks = _clip_marks(job.letter, frames, frames, spans)
        yield marks
        if slews or any(spans.values()):
            yield from _asked(job, source, marks)


def _asked(job: MarksJob, source: Source, marks: ClipMarks) -> Iterator[Report | None]:
    """What the recording would ask of each op-amp, were there no limits."""
    sites = [
        replace(site, type=PERFECT.type, model=PERFECT, high_v=math.inf, low_v=-math.inf)
        for site in job.netlist.opamps
    ]
    high_v = np.full(len(sites), -math.inf)
    low_v, slew_v_per_s = -high_v, np.zeros(len(sites))
    chunks = run_through(
        replace(job.netlist, opamps=tuple(sites)),
        source,
        0,
        marks.frames,
        scale_v=job.material.scale_v,
        quality=Quality.DRAFT,
    )
    for _, _, stage in chunks:
        readings = stage.readings()
        np.maximum(high_v, [reading.high_v for reading in readings], out=high_v)
        np.minimum(low_v, [reading.low_v for reading in readings], out=low_v)
        np.maximum(slew_v_per_s, [reading.slew_peak_v_per_s for reading in readings], out=slew_v_per_s)
        yield None
    asked = zip(marks.opamps, high_v.tolist(), low_v.tolist(), slew_v_per_s.tolist(), strict=True)
    opamps = (replace(m, asked_high_v=h, asked_low_v=w, asked_slew_v_per_s=s) for m, h, w, s in asked)
    yield replace(marks, opamps=tuple(opamps))


def _clip_marks(letter: str, frames: int, done: int, spans: dict[str, list[tuple[int, int]]]) -> ClipMarks:
    return ClipMarks(
        letter, frames, done, tuple(OpAmpMarks(name, tuple(mark)) for name, mark in spans.items())
    )


def _loudness(job: LoudnessJob) -> Iterator[Loudness | None]:
    from preview.meters.loudness import LoudnessMeter

    with contextlib.closing(job.material.open()) as source:
        meter = LoudnessMeter(source.sample_rate_hz, source.channels, full_scale_v=job.material.full_scale_v)
        for first, last in _pieces(job.material, source):
            for _, volts, _ in run_through(
                job.netlist, source, first, last, scale_v=job.material.scale_v, quality=Quality.DRAFT
            ):
                meter.feed(np.nan_to_num(volts, nan=0.0, posinf=0.0, neginf=0.0))
                yield None
        yield Loudness(job.letter, job.netlist, meter.read().integrated_lufs)


def _pieces(material: Material, source: Source) -> list[tuple[int, int]]:
    """A short passage whole; of a long one six pieces of 10 s spread over it, so that a match never takes long."""
    first, last = material.bounds(source)
    piece = round(PIECE_S * source.sample_rate_hz)
    if last - first <= PIECES * piece:
        return [(first, last)]
    starts = np.linspace(first, last - piece, PIECES).round().astype(int)
    return [(int(start), int(start) + piece) for start in starts]


def inner_nodes(circuit: Netlist) -> tuple[str, ...]:
    """The nodes that no meter reads, and nothing holds at a constant voltage."""
    known = {circuit.input_node, circuit.output_node, *(site.out for site in circuit.opamps)}
    known |= {held.node for held in circuit.fixed}
    return tuple(node for node in circuit.nodes if node not in known)


def _probe(job: ProbeJob) -> Iterator[Report | None]:
    """Each node is the output of a copy of the circuit; the copies go through the passage side by side."""
    nodes = inner_nodes(job.netlist)
    high_v, low_v = np.full(len(nodes), -np.inf), np.full(len(nodes), np.inf)
    with contextlib.ExitStack() as open_ones:
        copies = []
        first = last = 0
        for node in nodes:
            source = open_ones.enter_context(contextlib.closing(job.material.open()))
            first, last = job.material.bounds(source)
            circuit = replace(job.netlist, output_node=node)
            copies.append(
                run_through(circuit, source, first, last, scale_v=job.material.scale_v, quality=Quality.DRAFT)
            )
        done = told = 0
        for chunks in zip(*copies, strict=True):
            high_v = np.maximum(high_v, [volts.max() for _, volts, _ in chunks])
            low_v = np.minimum(low_v, [volts.min() for _, volts, _ in chunks])
            done = chunks[0][0] + len(chunks[0][1]) - first
            if done - told >= (last - first) // 20:
                told = done
                yield _node_peaks(job.letter, nodes, high_v, low_v, done / (last - first))
            else:
                yield None
    yield _node_peaks(job.letter, nodes, high_v, low_v, 1.0)


def _node_peaks(
    letter: str, nodes: tuple[str, ...], high_v: NDArray[np.float64], low_v: NDArray[np.float64], done: float
) -> NodePeaks:
    return NodePeaks(letter, nodes, tuple(high_v.tolist()), tuple(low_v.tolist()), done)


def _export(job: ExportJob) -> Iterator[Report | None]:
    order, session = job.order, job.order.session
    circuit = session.netlist()
    with contextlib.closing(job.material.open()) as source:
        first, last = job.material.bounds(source)
        out_scale_v = output_scale_v(circuit, session, order.depth)
        out = str(order.out)
        with FileSink(
            order.out,
            sample_rate_hz=source.sample_rate_hz,
            channels=source.channels,
            depth=order.depth,
            comment=output_comment(session, out_scale_v),
        ) as sink:
            told = first
            for frame, volts, _ in run_through(
                circuit, source, first, last, scale_v=job.material.scale_v, quality=session.quality
            ):
                if not math.isfinite(float(volts.sum())):
                    raise CircuitError(f"the computation ran away at frame {frame}; nothing was written")
                sink.write(volts / out_scale_v)
                if frame - told >= (last - first) // 50:
                    told = frame
                    yield ExportState(out, frame - first, last - first, "running", hidden=sink.hidden)
                else:
                    yield None
            sink.commit()
            over = f", {sink.over_count} samples at full scale" if sink.over_count else ""
    seconds = (last - first) / source.sample_rate_hz
    yield ExportState(
        out, last - first, last - first, "done", f"{order.out.name}: {seconds:.2f} s written{over}"
    )


def _devices() -> Iterator[Report | None]:
    try:
        devices.refresh()
        rows = tuple(
            DeviceRow(
                name=one.name,
                host_api=one.host_api,
                input_channels=one.max_input_channels,
                output_channels=one.max_output_channels,
                sample_rate_hz=one.default_sample_rate_hz,
                default_input=one.is_default_input,
                default_output=one.is_default,
            )
            for one in devices.all_devices()
        )
    except DeviceError as error:
        yield DeviceList((), str(error))
    else:
        yield DeviceList(rows)


def _tried(job: TryJob) -> Iterator[Tried]:
    try:
        devices.refresh()
        own = devices.find_output(job.name)
        open_output(
            job.name,
            sample_rate_hz=own.default_sample_rate_hz,
            channels=min(own.max_output_channels, 2),
            block_frames=TRIED_FRAMES,
            fill=lambda out: out.fill(0.0),
        ).close()
    except DeviceError:
        yield Tried(job.name, False)
    else:
        yield Tried(job.name, True)


def failed(job: Job, error: PreviewError) -> Report | None:
    """What to tell of a job that could not be done; None where a notice is enough."""
    if isinstance(job, ExportJob):
        return ExportState(str(job.order.out), 0, 0, "failed", str(error))
    return None
