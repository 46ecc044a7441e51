"""What a device and the silent clock have in common, and the guard that stands before both."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Fill", "Finished", "Guard", "Output"]

Fill = Callable[[NDArray[np.float32]], None]
"""Fills an array of shape (frames, channels), full scale 1.0, in real time: it does not wait."""

Finished = Callable[[], None]
"""Called once, from a thread of the output, when it ends by itself; it must not close the output."""


class Output(Protocol):
    """Something that asks for a block again and again, at real-time pace."""

    @property
    def name(self) -> str:
        """What a person calls it."""

    @property
    def latency_s(self) -> float:
        """From a block's computation to its sound [s]."""

    @property
    def underflows(self) -> int:
        """Blocks that came too late, as far as it can be known."""

    @property
    def last_callback_s(self) -> float:
        """``time.monotonic()`` of the last block asked for; of the start before the first [s]."""

    @property
    def guard(self) -> Guard:
        """Counts of what had to be held back."""

    def start(self) -> None:
        """Begin to ask for blocks."""

    def close(self) -> None:
        """End it; does not hang and may be called twice."""


class Guard:
    """Calls the fill function and lets nothing through that could hurt: errors, NaN, anything above 1.

    Parameters
    ----------
    fill : Fill
        The function that computes the block.
    block_frames, channels : int
        The usual block; others work, at the price of an allocation.
    """

    def __init__(self, fill: Fill, block_frames: int, channels: int) -> None:
        self._fill = fill
        self._scratch = np.zeros((block_frames, channels), np.float32)
        self.limited_blocks = 0
        """Blocks in which a sample was above full scale (clipped) or not finite (made 0)."""
        self.failed_blocks = 0
        """Blocks that the fill function failed to give; each was silence."""
        self.failure: BaseException | None = None
        """The first error of the fill function."""

    def __call__(self, out: NDArray[np.float32]) -> None:
        """Fill the block; never raises."""
        try:
            self._fill(out)
            scratch = self._scratch
            if scratch.shape != out.shape:
                scratch = np.empty_like(out)
            np.abs(out, out=scratch)
            if not scratch.max() <= 1.0:  # also where the maximum is NaN
                self.limited_blocks += 1
                out[~np.isfinite(out)] = 0.0
                np.clip(out, -1.0, 1.0, out=out)
        except BaseException as error:  # raising here would end the stream
            out.fill(0.0)
            self.failed_blocks += 1
            if self.failure is None:
                self.failure = error
