"""What playing needs around the signal: where it is read, its ramps, and the frame that is heard."""

from __future__ import annotations

from enum import Enum, auto
from typing import Protocol

import numpy as np

from preview.engine.loop import Samples

__all__ = ["Mode", "Playhead", "Ramp", "Reader", "gain_of", "heard_frame"]


class Reader(Protocol):
    """A recording read ahead by its own thread, so that nothing here waits."""

    @property
    def frames(self) -> int:
        """Length of the recording."""

    @property
    def region(self) -> tuple[int, int] | None:
        """First frame and frame after the last of the region; None for the whole recording."""

    @property
    def loop(self) -> bool:
        """Whether the end leads back to the start."""

    @property
    def ready(self) -> bool:
        """Whether the frames of the last seek are there."""

    @property
    def at_end(self) -> bool:
        """Whether all has been read and nothing follows."""

    @property
    def position(self) -> int:
        """Frame that the next ``read`` begins with."""

    @property
    def strays(self) -> bool:
        """Whether what is read lies outside the region, and only a seek leads into it."""

    def read(self, samples_out: Samples) -> int:
        """Fill from the next frames; the frames filled."""

    def seek(self, frame: int) -> None:
        """Ask for another frame."""

    def set_region(self, start: int | None, end: int | None, loop: bool) -> None:
        """Play a region (None: from the start, to the end), once or again and again."""


class Mode(Enum):
    """What the player is doing."""

    IDLE = auto()
    """Silent; nothing is read."""
    LOADING = auto()
    """Silent; waits for the reader."""
    WARMING = auto()
    """Silent; the circuit takes up the signal before the place to be heard first."""
    RUNNING = auto()
    """Heard."""
    FADING = auto()
    """On its way to silence."""


class Ramp:
    """A gain that moves between values along a raised cosine.

    Parameters
    ----------
    frames : int
        Length of a move.
    value : float
        Gain at the start.
    """

    def __init__(self, frames: int, value: float) -> None:
        self._shape = 0.5 - 0.5 * np.cos(np.pi * np.arange(1, frames + 1) / frames)
        self._scratch = np.zeros(frames)
        self._begin = value
        self._end = value
        self._at = frames
        self.value = value
        """The gain reached by the last frame."""

    @property
    def moving(self) -> bool:
        """Whether the gain is on its way."""
        return self._at < len(self._shape)

    @property
    def target(self) -> float:
        """The gain it rests at or is on its way to."""
        return self._end

    def to(self, value: float) -> None:
        """Move to another gain from where it is now."""
        if value != self._end:
            self._begin, self._end, self._at = self.value, value, 0

    def jump(self, value: float) -> None:
        """Be at that gain at once."""
        self._begin = self._end = self.value = value
        self._at = len(self._shape)

    def pass_over(self, frames: int) -> None:
        """Move on as ``apply`` would."""
        self._at = min(self._at + frames, len(self._shape))
        part = self._shape[self._at - 1] if self._at else 0.0
        self.value = float(self._begin + part * (self._end - self._begin)) if self.moving else self._end

    def apply(self, samples: Samples) -> None:
        """Multiply the next frames in place; at rest at 1 they are not touched."""
        frames = len(samples)
        moved = min(frames, len(self._shape) - self._at)
        if moved > 0:
            gains = self._scratch[:moved]
            np.multiply(self._shape[self._at : self._at + moved], self._end - self._begin, out=gains)
            gains += self._begin
            samples[:moved] *= gains[:, np.newaxis]
            self._at += moved
            self.value = float(gains[-1]) if self.moving else self._end
        if moved < frames and self._end != 1.0:
            samples[moved:] *= self._end


def gain_of(volume_db: float) -> float:
    """Volume [dB] as a gain; exactly 1 at 0 dB."""
    return 1.0 if volume_db >= 0.0 else 10.0 ** (volume_db / 20.0)


def heard_frame(next_frame: int, delay_frames: int, *, start: int, end: int, wrapped: bool) -> int:
    """Frame that is heard while ``next_frame`` is read, so many frames earlier.

    Parameters
    ----------
    next_frame : int
        Frame that is read next; silence after the end counts on.
    delay_frames : int
        Frames between reading and hearing.
    start, end : int
        First frame of what is played and the frame after its last.
    wrapped : bool
        Whether the end has led back to the start since playing began.
    """
    frame = next_frame - delay_frames
    if wrapped and frame < start < end:
        return start + (frame - start) % (end - start)
    return min(max(frame, 0), end)


class Playhead:
    """Reads the recording on, and knows which of its frames is heard.

    Parameters
    ----------
    reader : Reader
        The recording.
    """

    def __init__(self, reader: Reader) -> None:
        self.reader = reader
        self.first_frame = 0
        """Frame to be heard first at the next start."""
        self.tail_frames = 0
        """Frames of silence fed after the end."""
        self.late_reads = 0
        """Reads for which the disk was too late."""
        self._wrapped = False

    @property
    def bounds(self) -> tuple[int, int]:
        """First frame of what is played and the frame after its last."""
        return self.reader.region or (0, self.reader.frames)

    def rewind(self) -> None:
        """Start at the beginning of the region or the recording next time."""
        self.first_frame = self.bounds[0]

    def cue(self, lead_frames: int) -> int:
        """Ask for the recording from so many frames before the first to be heard; how many there are."""
        if self.first_frame >= self.bounds[1]:
            self.rewind()
        lead = min(lead_frames, self.first_frame)
        self.reader.seek(self.first_frame - lead)
        self.tail_frames = 0
        self._wrapped = False
        return lead

    def feed(self, samples: Samples) -> None:
        """Fill with the next frames; zeros after the end and where the disk was late."""
        before = self.reader.position
        got = self.reader.read(samples)
        if got:
            self._wrapped = self._wrapped or self.reader.position < before + got
        if got < len(samples):
            samples[got:] = 0.0
            if self.reader.at_end:
                self.tail_frames += len(samples) - got
            else:
                self.late_reads += 1

    def heard(self, delay_frames: int) -> int:
        """Frame that was read so many frames ago."""
        start, end = self.bounds
        ahead = self.reader.position + self.tail_frames
        return heard_frame(ahead, delay_frames, start=start, end=end, wrapped=self._wrapped)
