"""What background work listens to: the same frames that the player plays, read from the start of a passage."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from preview.audio.signals import SignalSource, natural_frames
from preview.audio.source import FileSource
from preview.circuit.netlist import Netlist
from preview.dsp.stage import StageProcessor
from preview.engine.loop import Samples
from preview.values.quality import Quality
from preview.values.stimulus import Stimulus

__all__ = ["LEAD_S", "Material", "Source", "run_through"]

LEAD_S = 0.2
"""Signal before a passage that brings the circuit to the state it plays in [s]."""
CHUNK_FRAMES = 8192


class Source(Protocol):
    """Frames that can be read from anywhere."""

    @property
    def channels(self) -> int:
        """Channels."""

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""

    @property
    def frames(self) -> int:
        """Length [frames]."""

    def read(self, samples_out: Samples) -> int:
        """Fill from the next frames; the frames filled, 0 at the end."""

    def seek(self, frame: int) -> None:
        """Make that frame the next to be read."""

    def close(self) -> None:
        """Let go of it."""


@dataclass(frozen=True, slots=True, eq=False)
class Material:
    """What is heard, in a form that another process can open."""

    path: Path | None = None
    """A recording."""
    stimulus: Stimulus | None = None
    """A test signal."""
    recorded: NDArray[np.float32] | None = None
    """Live input of the last seconds, shape (frames, channels)."""
    recorded_rate_hz: float = 48_000.0
    """Its sample rate [Hz]."""
    full_scale_v: float = 1.0
    """Peak volts of a sample of 1.0; a test signal is in volts."""
    region: tuple[int, int] | None = None
    """First frame and frame after the last; None for all."""

    @property
    def scale_v(self) -> float:
        """Volts of a sample of 1.0 as it is read."""
        return 1.0 if self.stimulus is not None else self.full_scale_v

    def open(self) -> Source:
        """Open it; raises AudioFileError."""
        if self.path is not None:
            return FileSource(self.path)
        if self.stimulus is not None:
            return SignalSource(self.stimulus)
        assert self.recorded is not None
        return _Recorded(self.recorded, round(self.recorded_rate_hz))

    def bounds(self, source: Source) -> tuple[int, int]:
        """First frame and frame after the last."""
        whole = source.frames if self.stimulus is None else natural_frames(self.stimulus)
        first, last = self.region or (0, whole)
        return first, min(last, source.frames)


class _Recorded:
    """Samples in memory."""

    def __init__(self, samples: NDArray[np.float32], sample_rate_hz: int) -> None:
        self._samples = samples
        self._next = 0
        self.sample_rate_hz = sample_rate_hz
        self.frames, self.channels = samples.shape

    def read(self, samples_out: Samples) -> int:
        piece = self._samples[self._next : self._next + len(samples_out)]
        samples_out[: len(piece)] = piece
        self._next += len(piece)
        return len(piece)

    def seek(self, frame: int) -> None:
        self._next = max(frame, 0)

    def close(self) -> None:
        pass


def run_through(
    netlist: Netlist,
    source: Source,
    first: int,
    last: int,
    *,
    scale_v: float,
    quality: Quality,
    chunk_frames: int = CHUNK_FRAMES,
) -> Iterator[tuple[int, NDArray[np.float64], StageProcessor]]:
    """Volts that leave the circuit, chunk by chunk, each with its first frame and the stage that made it.

    The delay is taken out, and the circuit has heard ``LEAD_S`` of what comes before. The array is valid until the
    next. The stage's readings are of the chunk alone, or of as much later as its delay is.
    """
    stage = StageProcessor(
        netlist, sample_rate_hz=source.sample_rate_hz, channels=source.channels, quality=quality
    )
    lead = min(round(LEAD_S * source.sample_rate_hz), first)
    source.seek(first - lead)
    skip = lead + stage.latency_frames
    volts_in = np.zeros((chunk_frames, source.channels))
    volts_out = np.zeros_like(volts_in)
    frame = first
    while frame < last:
        got = source.read(volts_in)
        volts_in[got:] = 0.0
        volts_in *= scale_v
        stage.clear_readings()
        stage.process(volts_in, volts_out)
        dropped = min(skip, chunk_frames)
        skip -= dropped
        kept = volts_out[dropped : dropped + last - frame]
        if len(kept):
            yield frame, kept, stage
            frame += len(kept)
