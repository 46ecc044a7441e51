"""The role that every block of signal computation plays."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = ["Block", "Volts"]

Volts = NDArray[np.float64]
"""Signal in volts, shape (frames, channels), float64, C-contiguous."""


class Block(Protocol):
    """A streaming computation from volts to volts. ``process`` neither allocates, locks, logs nor raises."""

    @property
    def latency_frames(self) -> int:
        """Delay from input to output [frames]."""

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` (same shape, owned by the caller) from the next ``volts_in``."""

    def reset(self) -> None:
        """Back to the state before the first frame."""
