"""The loudness meter: momentary, short-term, integrated and range [ITU 1770] [EBU 3341] [EBU 3342].

Windows move on by 10 ms, the gate by 100 ms. What the gate needs of the past is kept as histograms over loudness with
0.01 LU a bin and the power in each, so that a day takes no more room than a second: the powers are exact, and only
blocks within 0.01 LU of the relative gate can fall on the other side of it.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.errors import UsageError
from preview.meters import kernels
from preview.meters.intake import CHUNK_FRAMES, Intake
from preview.meters.reading import LoudnessReading
from preview.meters.weighting import Weighting, sections

__all__ = ["LoudnessMeter", "channel_weights"]

Real = NDArray[np.float64]

HIGHEST_LUFS = 50.0
"""Upper end of the histograms; louder counts as this loud for the gate, not for the level."""

GATE_LU, RANGE_GATE_LU = -10.0, -20.0
RANGE_LOW, RANGE_HIGH = 0.10, 0.95
SURROUND = 1.41


def channel_weights(channels: int) -> tuple[float, ...]:
    """Weights by number of channels: 5 are L R C Ls Rs, 6 the same with the low-frequency channel fourth."""
    if channels == 5:
        return (1.0, 1.0, 1.0, SURROUND, SURROUND)
    if channels == 6:
        return (1.0, 1.0, 1.0, 0.0, SURROUND, SURROUND)
    return (1.0,) * channels


class LoudnessMeter:
    """Loudness of a signal in volts, all channels together.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz], from 8 kHz on.
    channels : int
        Number of channels.
    full_scale_v : float
        Peak volts of full scale.
    weights : tuple of float, optional
        Weight of each channel; ``channel_weights`` where not given.
    chunk_frames : int
        Most frames taken at a time; the reading does not depend on it.
    """

    def __init__(
        self,
        sample_rate_hz: float,
        channels: int,
        *,
        full_scale_v: float,
        weights: tuple[float, ...] | None = None,
        chunk_frames: int = CHUNK_FRAMES,
    ) -> None:
        if weights is not None and len(weights) != channels:
            raise UsageError(f"loudness: {len(weights)} weights for {channels} channels")
        self._full_scale_v = full_scale_v
        self._gains = np.array(channel_weights(channels) if weights is None else weights) / full_scale_v**2
        self._block_frames = sample_rate_hz / kernels.BLOCKS_PER_S
        self._intake = Intake(
            channels, sections=sections(Weighting.K, sample_rate_hz), chunk_frames=chunk_frames
        )
        bins = round((HIGHEST_LUFS - kernels.GATE_LUFS) / kernels.BIN_LU)
        self._place = np.zeros(2, dtype=np.int64)
        self._sums = np.zeros(kernels.SHORT_TERM_BLOCKS + 1)
        self._power, self._highest = np.zeros(2), np.zeros(2)
        self._counts, self._powers = np.zeros((2, bins), dtype=np.int64), np.zeros((2, bins))
        self.feed(np.zeros((1, channels)))  # compiles
        self.reset()

    def feed(self, volts: Real) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_loudness(
                take.rows,
                0,
                count,
                self._gains,
                self._block_frames,
                self._place,
                self._sums,
                self._power,
                self._highest,
                self._counts,
                self._powers,
            )

    def read(self) -> LoudnessReading:
        """The present reading."""
        return LoudnessReading(
            momentary_lufs=_lufs(self._power[0]),
            short_term_lufs=_lufs(self._power[1]),
            integrated_lufs=_gated(self._counts[0].copy(), self._powers[0].copy()),
            range_lu=_range(self._counts[1].copy(), self._powers[1].copy()),
            max_momentary_lufs=_lufs(self._highest[0]),
            max_short_term_lufs=_lufs(self._highest[1]),
            full_scale_v=self._full_scale_v,
        )

    def reset(self) -> None:
        """Back to the start."""
        self._intake.reset()
        for array in (self._place, self._sums, self._power, self._highest, self._counts, self._powers):
            array.fill(0)


def _lufs(power: float) -> float:
    return kernels.OFFSET_DB + 10.0 * math.log10(power) if power > 0.0 else -math.inf


def _above(counts: NDArray[np.int64], powers: Real, gate_lu: float) -> tuple[NDArray[np.int64], Real]:
    """Counts and powers of the bins in use whose mean is above the gate, which is relative to the mean of all."""
    used = counts > 0
    counts, powers = counts[used], powers[used]
    if not len(counts):
        return counts, powers
    gate = powers.sum() / counts.sum() * 10.0 ** (gate_lu / 10.0)
    passed = powers > gate * counts
    return counts[passed], powers[passed]


def _gated(counts: NDArray[np.int64], powers: Real) -> float:
    counts, powers = _above(counts, powers, GATE_LU)
    return _lufs(powers.sum() / counts.sum()) if len(counts) else -math.inf


def _range(counts: NDArray[np.int64], powers: Real) -> float:
    counts, powers = _above(counts, powers, RANGE_GATE_LU)
    if not len(counts):
        return 0.0
    last = np.cumsum(counts)
    low, high = (
        np.searchsorted(last, round((last[-1] - 1) * share), side="right")
        for share in (RANGE_LOW, RANGE_HIGH)
    )
    return float(10.0 * np.log10((powers[high] / counts[high]) / (powers[low] / counts[low])))
