"""The off-line render: a recording through the stage into a file, in constant memory."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np

from preview import __version__
from preview.audio.logs import LogFormat, LogSource, open_signal
from preview.audio.sink import Depth, FileSink, holds_volts
from preview.audio.source import FileSource, StdinSource
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpReading
from preview.dsp.chain import Chain
from preview.dsp.settle import settle
from preview.dsp.stage import StageProcessor
from preview.engine.loop import Samples, SignalPath, peak
from preview.errors import CircuitError
from preview.session import Session
from preview.values.levels import FullScale, full_scale_comment
from preview.values.quality import Quality

__all__ = [
    "CHUNK_FRAMES",
    "RenderResult",
    "open_source",
    "output_comment",
    "output_scale_v",
    "render",
    "stream",
]

CHUNK_FRAMES = 8192


class Source(Protocol):
    """A recording that is read from its start."""

    @property
    def channels(self) -> int:
        """Channels."""

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""

    def read(self, samples_out: Samples) -> int:
        """Fill from the next frames; the frames filled, 0 at the end."""


class Sink(Protocol):
    """A file that is written from its start."""

    def write(self, samples: Samples) -> None:
        """Append frames."""


@dataclass(frozen=True, slots=True)
class RenderResult:
    """What a render did."""

    sample_rate_hz: float
    """Sample rate [Hz]."""
    frames: int
    """Frames read and written."""
    channels: int
    """Channels."""
    full_scale_v: float
    """Peak volts of an input sample of 1.0."""
    out_full_scale_v: float
    """Peak volts of an output sample of 1.0."""
    quality: Quality
    """Quality of computation."""
    elapsed_s: float
    """Processing time [s]."""
    input_peak_v: float
    """Largest magnitude at the stage's input [V]."""
    output_peak_v: float
    """Largest magnitude at the stage's output [V]."""
    opamps: tuple[OpAmpReading, ...]
    """One reading an op-amp."""
    over_count: int
    """Samples written at full scale because they were above it."""
    non_finite_count: int
    """Input samples that were not numbers, taken as 0."""

    @property
    def realtime_ratio(self) -> float:
        """Signal time per processing time."""
        return self.frames / self.sample_rate_hz / max(self.elapsed_s, 1e-9)


def output_scale_v(circuit: Netlist, session: Session, depth: Depth) -> float:
    """The volts of a sample of 1.0 in the output file.

    The input's for float; for integer depths the larger rail, which the output of an op-amp cannot pass.
    Where the output is not an op-amp's own, or that has no rails, the input's full scale counts too.
    """
    full_scale_v = session.full_scale.volts
    if depth == "float":
        return full_scale_v
    rail_v = max(abs(session.supply.positive_v), abs(session.supply.negative_v))
    for opamp in circuit.opamps:
        limit_v = max(abs(opamp.high_v), abs(opamp.low_v))
        if opamp.out == circuit.output_node and math.isfinite(limit_v):
            return max(rail_v, limit_v)
    return max(rail_v, full_scale_v)


def output_comment(session: Session, out_full_scale_v: float) -> str:
    """What is written into an output file's comment: its scale, and what made it."""
    scale = full_scale_comment(FullScale(out_full_scale_v, f"{out_full_scale_v:.9g} V"))
    return f"{scale}; preview {__version__}; stage {session.stage.name}"


def open_source(audio: Path, form: LogFormat | None = None) -> FileSource | StdinSource | LogSource:
    """The recording or log, from a file or, for ``-``, from stdin."""
    return StdinSource() if str(audio) == "-" else open_signal(audio, form)


def render(
    session: Session,
    source: Source,
    out: Path,
    *,
    depth: Depth = "float",
    progress: Callable[[int], None] | None = None,
    chunk_frames: int = CHUNK_FRAMES,
) -> RenderResult:
    """Render a recording to a file; nothing is left behind if it does not come to its end.

    Parameters
    ----------
    session : Session
        Stage, levels and quality.
    source : Source
        The recording, at its start.
    out : Path
        The file to write; ``-`` for stdout.
    depth : {"float", "16", "24"}
        Sample format of the output; ``float`` is 32-bit floating point.
    progress : callable, optional
        Told the frames done so far.
    chunk_frames : int
        Frames computed at a time; the samples do not depend on it.

    Raises
    ------
    AudioFileError
        The recording cannot be read or the output not written.
    CircuitError
        The circuit's computation ran away.
    """
    rate, channels = source.sample_rate_hz, source.channels
    circuit = session.netlist()
    scale_v = 1.0 if holds_volts(out) else output_scale_v(circuit, session, depth)
    stage = StageProcessor(
        circuit, sample_rate_hz=rate, channels=channels, quality=session.quality, noise=session.noise
    )
    if isinstance(source, LogSource):  # its first value was there long before
        first = np.zeros((1, channels))
        source.read(first)
        source.seek(0)
        settle(stage, first[0] * session.full_scale.volts)
    if session.power_on:
        stage.power_on()
    chain = Chain(stage)
    path = SignalPath(
        chain,
        channels=channels,
        full_scale_v=session.full_scale.volts,
        out_full_scale_v=scale_v,
        max_frames=chunk_frames,
    )
    comment = output_comment(session, scale_v)
    with FileSink(out, sample_rate_hz=rate, channels=channels, depth=depth, comment=comment) as sink:
        started_s = time.perf_counter()
        frames, input_peak_v, output_peak_v = stream(
            path, source, sink, progress=progress, hold=isinstance(source, LogSource)
        )
        elapsed_s = time.perf_counter() - started_s
        sink.commit()
        over_count = sink.over_count
    return RenderResult(
        sample_rate_hz=rate,
        frames=frames,
        channels=channels,
        full_scale_v=session.full_scale.volts,
        out_full_scale_v=scale_v,
        quality=session.quality,
        elapsed_s=elapsed_s,
        input_peak_v=input_peak_v,
        output_peak_v=output_peak_v,
        opamps=tuple(chain.readings()),
        over_count=over_count,
        non_finite_count=int(getattr(source, "non_finite_count", 0)),
    )


def stream(
    path: SignalPath,
    source: Source,
    sink: Sink,
    *,
    progress: Callable[[int], None] | None = None,
    hold: bool = False,
) -> tuple[int, float, float]:
    """Carry the whole source to the sink, the delay taken out; frames, input peak [V], output peak [V].

    After its end comes silence, or with ``hold`` the last value: a log that ends did not fall to 0 V.
    """
    samples = np.zeros((path.max_frames, source.channels))
    processed = np.zeros_like(samples)
    latency_frames = path.circuit.latency_frames
    read = 0
    written = 0
    run = 0
    input_peak_v = 0.0
    output_peak_v = 0.0
    ended = False
    after = np.zeros(source.channels)
    while not (ended and written == read):
        frames = 0 if ended else source.read(samples)
        read += frames
        if frames == 0:
            ended = True
            frames = min(path.max_frames, read - written)
            samples[:frames] = after
        elif hold:
            after = samples[frames - 1].copy()
        volts_in, volts_out = path.run(samples[:frames], processed[:frames])
        skip = min(max(latency_frames - run, 0), frames)
        run += frames
        input_peak_v = max(input_peak_v, peak(volts_in))
        block_peak_v = peak(volts_out)
        fault = path.circuit.fault
        if fault is not None:
            raise CircuitError(
                f"the circuit was stopped at {fault.time_s:.3f} s, at {fault.node}: {fault.reason}; "
                "nothing was written",
                "another value there, less drive, or a finer quality",
            )
        if not math.isfinite(block_peak_v):
            raise CircuitError(
                f"the computation ran away near {written / source.sample_rate_hz:.3f} s; nothing was written",
                "the circuit may be unstable: check its feedback",
            )
        if skip < frames:
            output_peak_v = max(output_peak_v, peak(volts_out[skip:]))
            sink.write(processed[skip:frames])
            written += frames - skip
        if progress is not None:
            progress(read)
    return read, input_peak_v, output_peak_v
