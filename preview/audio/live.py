"""Live input as a recording that is just being made: read in the callback that recorded it, so it waits for nothing."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.audio.signals import ENDLESS_FRAMES

__all__ = ["LiveReader"]

_ROOM_FRAMES = 1 << 14
_HISTORY_S = 10.0


class LiveReader:
    """What was recorded last. ``take`` and ``read`` are called by the audio thread, ``history`` by another.

    Where nothing was recorded (no device) it reads zeros, so that everything behind it runs on.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the device [Hz].
    channels : int
        Channels of the device.
    """

    frames = ENDLESS_FRAMES
    region: tuple[int, int] | None = None
    loop = False
    ready = True
    at_end = False
    strays = False

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self.position = 0
        """Frames read so far."""
        self._waiting = np.zeros((_ROOM_FRAMES, channels), np.float32)
        self._count = 0
        self._past = np.zeros((round(_HISTORY_S * sample_rate_hz), channels), np.float32)
        self._past_end = 0

    def take(self, recorded: NDArray[np.float32]) -> None:
        """Keep a recorded block; what nobody read in time is forgotten."""
        block = recorded[-_ROOM_FRAMES:]
        if self._count + len(block) > _ROOM_FRAMES:
            self._count = 0
        self._waiting[self._count : self._count + len(block)] = block
        self._count += len(block)
        size = len(self._past)
        at = self._past_end % size
        first = min(len(block), size - at)
        self._past[at : at + first] = block[:first]
        self._past[: len(block) - first] = block[first:]
        self._past_end += len(block)

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array, with zeros where nothing is waiting; a sample that is no number is 0."""
        wanted = len(samples_out)
        got = min(wanted, self._count)
        samples_out[:got] = self._waiting[:got]
        samples_out[got:] = 0.0
        left = self._count - got
        self._waiting[:left] = self._waiting[got : self._count].copy()
        self._count = left
        samples_out[~np.isfinite(samples_out)] = 0.0
        self.position += wanted
        return wanted

    def history(self) -> NDArray[np.float32]:
        """A copy of the last 10 s, or of what there is, shape (frames, channels)."""
        size, end = len(self._past), self._past_end
        count = min(size, end)
        return np.take(self._past, np.arange(end - count, end), axis=0, mode="wrap")

    def seek(self, frame: int) -> None:  # noqa: ARG002 - as every reader has it
        """Begin with what is recorded next."""
        self._count = 0

    def set_region(self, start: int | None, end: int | None, loop: bool) -> None:
        """Nothing: what is live has no region."""

    def close(self) -> None:
        """Nothing to let go of; the stream belongs to its output."""
