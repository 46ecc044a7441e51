"""How far a render has come: one line on a terminal that is written over."""

from __future__ import annotations

import contextlib
import time
from typing import TextIO

__all__ = ["Progress"]


class Progress:
    """Share done, a bar, time left; nothing where there is no terminal or no known length.

    Parameters
    ----------
    frames : int
        Length of the whole; 0 or less where it is not known.
    stream : TextIO, optional
        Where the line goes; a terminal that goes away is no error.
    """

    def __init__(self, frames: int, stream: TextIO | None) -> None:
        self._frames = frames
        self._stream = stream if stream is not None and frames > 0 and stream.isatty() else None
        self._began_s = time.monotonic()
        self._shown_s = -1.0

    def __call__(self, done: int, what: str = "") -> None:
        now_s = time.monotonic() - self._began_s
        if self._stream is None or now_s - self._shown_s < 0.1:
            return
        self._shown_s = now_s
        share = min(done / self._frames, 1.0)
        left_s = now_s * (1.0 - share) / share if share > 0 else 0.0
        bar = ("#" * round(30 * share)).ljust(30, ".")
        self._write(f"\r{what}{100 * share:4.0f} %  {bar}  {left_s:4.0f} s left ")

    def clear(self) -> None:
        """Take the line away."""
        if self._shown_s >= 0.0:
            self._write("\r" + " " * 79 + "\r")

    def _write(self, text: str) -> None:
        if self._stream is not None:
            with contextlib.suppress(OSError):
                self._stream.write(text)
                self._stream.flush()
