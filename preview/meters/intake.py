"""What every meter does first: the signal in rows of its own, cleaned, weighted, and behind its past."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import ArrayLike, NDArray

from preview.meters import kernels

__all__ = ["CHUNK_FRAMES", "Intake", "interpolator"]

Real = NDArray[np.float64]

CHUNK_FRAMES = 512
"""Frames taken at a time: what the loops work on stays in the processor's first cache."""

TAPS = 40
"""Taps a phase of the interpolator."""

ATTENUATION_DB = 60.0
"""Attenuation that the interpolator's window is made for [dB]."""


class Intake:
    """The next frames of a signal, one channel a row.

    Parameters
    ----------
    channels : int
        Number of channels.
    past : int
        Frames that stay in front of the new ones.
    sections : array (k, 5), optional
        Weighting filter; see ``weighting.sections``.
    chunk_frames : int
        Most new frames at a time.
    """

    def __init__(
        self,
        channels: int,
        *,
        past: int = 0,
        sections: Real | None = None,
        chunk_frames: int = CHUNK_FRAMES,
    ) -> None:
        self.rows = np.zeros((channels, past + chunk_frames))
        self.first = past
        self._chunk_frames = chunk_frames
        self._sections = sections
        self._state = np.zeros((channels, 0 if sections is None else len(sections), 2))

    def chunks(self, volts: ArrayLike) -> Iterator[int]:
        """Put the frames of ``volts`` (frames, channels) into ``rows``, from column ``first`` on; yields how many."""
        signal = np.asarray(volts)
        for start in range(0, len(signal), self._chunk_frames):
            part = signal[start : start + self._chunk_frames]
            count = len(part)
            self.rows[:, self.first : self.first + count] = part.T
            kernels.clean_rows(self.rows, self.first, count)
            if self._sections is not None:
                kernels.weight_rows(self.rows, self.first, count, self._sections, self._state)
            yield count
            if self.first:
                kernels.shift_rows(self.rows, self.first, count)

    def reset(self) -> None:
        """Back to silence."""
        self.rows.fill(0.0)
        self._state.fill(0.0)


def interpolator(sample_rate_hz: float) -> Real:
    """Taps by phase (p, TAPS) that give the signal between its samples; phase 0 is a sample itself.

    Ideal responses under a Kaiser window [Kaiser1974], each phase of unit gain at 0 Hz: within 0.02 dB to 20 kHz at
    44.1 kHz. 8 phases, half as many from 88.2 kHz on: a sine of 20 kHz is met within 0.14 dB of its peak
    [ITU 1770], annex 2.
    """
    phases = 4 if sample_rate_hz >= 88_200.0 - 1e-6 else 8
    at = np.arange(TAPS) - TAPS // 2 + np.arange(phases)[:, np.newaxis] / phases
    beta = 0.1102 * (ATTENUATION_DB - 8.7)
    window = np.i0(beta * np.sqrt(np.maximum(0.0, 1.0 - (2.0 * at / TAPS) ** 2)))
    taps = np.sinc(at) * window
    return np.asarray(taps / taps.sum(axis=1, keepdims=True), dtype=np.float64)
