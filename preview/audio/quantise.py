"""From samples to the integers or 32-bit floats of a file."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.audio.wavefile import Depth

__all__ = ["Quantiser"]


@dataclass(slots=True)
class Quantiser:
    """Samples to a file's depth, counting what did not fit. Rounds to nearest, without dither."""

    depth: Depth
    """The depth of the file."""
    over_count: int = 0
    """Samples beyond full scale that were clipped; only integer depths clip."""
    non_finite_count: int = 0
    """Samples that were not finite, or too large for a 32-bit float; each was replaced by 0."""

    def floats(self, samples: NDArray[np.float64]) -> NDArray[np.float32]:
        """As little-endian 32-bit floats, same shape."""
        with np.errstate(over="ignore", invalid="ignore"):
            narrow = samples.astype("<f4")
        finite = np.isfinite(narrow)
        if not finite.all():
            self.non_finite_count += int(finite.size - np.count_nonzero(finite))
            narrow[~finite] = 0.0
        return narrow

    def integers(self, samples: NDArray[np.float64]) -> NDArray[np.int32]:
        """As integers of the file's depth; +1.0 becomes the largest, without being counted as beyond."""
        steps = 2.0 ** (int(self.depth) - 1)
        finite = np.isfinite(samples)
        if not finite.all():
            self.non_finite_count += int(finite.size - np.count_nonzero(finite))
            samples = np.where(finite, samples, 0.0)
        self.over_count += int(np.count_nonzero(np.abs(samples) > 1.0))
        return np.clip(np.rint(samples * steps), -steps, steps - 1).astype(np.int32)

    def packed(self, samples: NDArray[np.float64]) -> bytes:
        """As the little-endian bytes of a WAV file."""
        if self.depth == "float":
            return self.floats(samples).tobytes()
        whole = self.integers(samples)
        if self.depth == "16":
            return whole.astype("<i2").tobytes()
        octets = np.ascontiguousarray(whole, "<i4").view(np.uint8).reshape(-1, 4)
        return octets[:, :3].tobytes()
