"""The silent clock: asks for blocks at real-time pace where there is no device."""

from __future__ import annotations

import threading
from time import monotonic

import numpy as np

from preview.audio.output import Fill, Finished, Guard

__all__ = ["SilentClock"]

_LATE_BLOCKS = 4


class SilentClock:
    """An output that nobody hears; the schedule is counted from the start, so it does not drift.

    Parameters
    ----------
    sample_rate_hz : float
        Pace [Hz].
    channels, block_frames : int
        Shape of a block.
    fill : Fill
        Computes each block, in the clock's own thread.
    finished : Finished, optional
        Accepted as for a device; a clock never ends by itself.
    """

    def __init__(
        self,
        sample_rate_hz: float,
        channels: int,
        block_frames: int,
        fill: Fill,
        finished: Finished | None = None,
    ) -> None:
        self._block_s = block_frames / sample_rate_hz
        self._block = np.zeros((block_frames, channels), np.float32)
        self._finished = finished
        self._ended = threading.Event()
        self._thread: threading.Thread | None = None
        self.guard = Guard(fill, block_frames, channels)
        """Counts of what had to be held back."""
        self.name = "silent clock"
        """What a person calls it."""
        self.latency_s = self._block_s
        """One block [s]."""
        self.underflows = 0
        """Blocks that were left out because the clock came too late."""
        self.last_callback_s = monotonic()
        """Time of the last block [s]."""

    def start(self) -> None:
        """Begin to ask for blocks; a second call does nothing."""
        if self._thread is None and not self._ended.is_set():
            self._thread = threading.Thread(target=self._run, name="silent clock", daemon=True)
            self._thread.start()

    def close(self) -> None:
        """End it, after the present block."""
        self._ended.set()
        if self._thread is not None and self._thread is not threading.current_thread():
            self._thread.join(2.0)

    def _run(self) -> None:
        begin = monotonic()
        number = 0
        while not self._ended.is_set():
            self.last_callback_s = monotonic()
            self.guard(self._block)
            number += 1
            late_s = monotonic() - (begin + number * self._block_s)
            if late_s < 0:
                self._ended.wait(-late_s)
            elif late_s > _LATE_BLOCKS * self._block_s:
                missed = int(late_s / self._block_s)
                self.underflows += missed
                number += missed
