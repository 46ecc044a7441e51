"""A device that refuses the recording's rate: blocks are computed at the one, converted to the other."""

from __future__ import annotations

import numpy as np
import soxr
from numpy.typing import NDArray

from preview.audio.output import Fill

__all__ = ["ResampledFill"]

_PIECE_S = 0.005


class ResampledFill:
    """Fills blocks at the device's rate from a fill function at the recording's rate.

    Parameters
    ----------
    fill : Fill
        Computes blocks at the recording's rate.
    from_rate_hz, to_rate_hz : float
        The recording's and the device's rate [Hz].
    channels : int
        Channels of the device.
    """

    def __init__(self, fill: Fill, from_rate_hz: float, to_rate_hz: float, channels: int) -> None:
        self._fill = fill
        self._converter = soxr.ResampleStream(
            from_rate_hz, to_rate_hz, channels, dtype="float32", quality="VHQ"
        )
        self._piece = np.zeros((max(round(_PIECE_S * from_rate_hz), 1), channels), np.float32)
        self._waiting = np.zeros((0, channels), np.float32)

    def __call__(self, out: NDArray[np.float32]) -> None:
        """Fill the next block; the converter gives its frames in bursts, the rest waits."""
        filled = 0
        while filled < len(out):
            if len(self._waiting) == 0:
                self._fill(self._piece)
                self._waiting = self._converter.resample_chunk(self._piece)
                continue
            count = min(len(self._waiting), len(out) - filled)
            out[filled : filled + count] = self._waiting[:count]
            self._waiting = self._waiting[count:]
            filled += count
