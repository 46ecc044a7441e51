"""Oversampling: linear-phase interpolators and decimators with one known delay for every quality.

Two stages each way. The first doubles the rate with a steep filter, the second does the rest with a short one.
What leaves the circuit are means over a step, so the decimator's passband is shaped by the inverse of the
mean's droop ``sin(wT/2)/(wT/2)``; its length is chosen so that the half step of delay disappears as well.
All are ideal responses under a Kaiser window [Kaiser1974].
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from preview.values.quality import Quality

__all__ = ["LATENCY_FRAMES", "Filters", "design", "factor_for"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

LATENCY_FRAMES = 100
"""Delay of interpolator, half step and decimator together [frames], at every factor."""

PASSBAND_RATIO = 0.4535
"""Edge of the flat band as a share of the sample rate: 20 kHz at 44.1 kHz."""

ATTENUATION_DB = 125.0
"""Stopband attenuation of every filter [dB]."""

STEEP_TAPS = 183
SHORT_TAPS = 20

_STEPS_AT_48K = {Quality.DRAFT: 8, Quality.STANDARD: 16, Quality.FINE: 32}


def factor_for(quality: Quality, sample_rate_hz: float) -> int:
    """Steps per frame: a power of two, halved at twice the rate, at least 4."""
    halvings = max(0, int(np.floor(np.log2(sample_rate_hz / 44_100.0) + 1e-9)))
    return max(4, _STEPS_AT_48K[quality] >> halvings)


def _beta() -> float:
    return 0.1102 * (ATTENUATION_DB - 8.7)


def _low_pass(taps: int, cutoff: float) -> Real:
    """Windowed ideal low-pass of unit gain; cutoff as a share of the sample rate."""
    at = np.arange(taps) - (taps - 1) / 2.0
    h = 2.0 * cutoff * np.sinc(2.0 * cutoff * at) * np.kaiser(taps, _beta())
    return np.asarray(h / h.sum(), dtype=np.float64)


@lru_cache
def _quadrature() -> tuple[Real, Real]:
    """Nodes and weights on -1..1 for an integrand of up to 50 periods."""
    node, weight = np.polynomial.legendre.leggauss(200)
    return node, weight


def _lifted_low_pass(taps: int, cutoff: float, factor_left: float) -> Real:
    """Low-pass whose passband undoes the droop of a mean over ``1/factor_left`` of its sample interval."""
    at = np.arange(taps) - (taps - 1) / 2.0
    node, weight = _quadrature()
    f = cutoff * (node + 1.0) / 2.0
    lift = 1.0 / np.sinc(f / factor_left)
    ideal = cutoff * np.cos(2.0 * np.pi * np.outer(at, f)) @ (weight * lift)
    h = ideal * np.kaiser(taps, _beta())
    return np.asarray(h / h.sum(), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Filters:
    """Filters of one oversampling factor; arrays are polyphase, ready for the kernels."""

    factor: int
    """Steps per frame."""
    up_1: Real
    """(2, taps): to twice the rate."""
    up_2: Real
    """(factor / 2, taps): to the full rate."""
    down_2: Real
    """(factor / 2, taps): back to twice the rate."""
    down_1: Real
    """(2, taps): back to the rate."""
    prototypes: tuple[Real, Real, Real, Real]
    """The four filters as plain sequences, same order."""

    @property
    def circuit_delay_frames(self) -> float:
        """How far the circuit's time lags behind the frames put in: after n of them it has come to n less this.

        The delays of both interpolators, and the two samples that a step's mean looks ahead.
        """
        first, second, _, _ = self.prototypes
        return (len(first) - 1) / 4.0 + ((len(second) - 1) / 2.0 + 2.0) / self.factor

    def up_response(self, frequency_ratio: Real) -> Complex:
        """Gain of the interpolation at frequencies given as a share of the sample rate, delay taken out."""
        first, second, _, _ = self.prototypes
        return _zero_phase(first, frequency_ratio / 2.0) * _zero_phase(second, frequency_ratio / self.factor)

    def down_response(self, frequency_ratio: Real) -> Complex:
        """Gain of the decimation, delay taken out."""
        _, _, second, first = self.prototypes
        return _zero_phase(first, frequency_ratio / 2.0) * _zero_phase(second, frequency_ratio / self.factor)


def _zero_phase(h: Real, f: Real) -> Complex:
    at = np.arange(len(h)) - (len(h) - 1) / 2.0
    return np.asarray(np.cos(2.0 * np.pi * np.outer(f, at)) @ h, dtype=np.complex128)


@lru_cache
def design(factor: int) -> Filters:
    """Filters for ``factor`` steps a frame (4, 8, 16 or 32)."""
    phases = factor // 2
    short = SHORT_TAPS * phases
    cut_short = 0.5 / phases
    up_1 = _low_pass(STEEP_TAPS, 0.25)
    up_2 = _low_pass(short - 1, cut_short)
    down_2 = _low_pass(short - 2, cut_short)
    down_1 = _lifted_low_pass(STEEP_TAPS, 0.25, phases)
    pad = np.concatenate
    by_phase_1 = pad([up_1, [0.0]]).reshape(-1, 2).T * 2.0
    by_phase_2 = pad([up_2, [0.0]]).reshape(-1, phases).T * phases
    back_2 = pad([down_2, [0.0, 0.0]]).reshape(-1, phases).T[::-1]
    back_1 = pad([down_1, [0.0]]).reshape(-1, 2).T[::-1]
    return Filters(
        factor,
        np.ascontiguousarray(by_phase_1),
        np.ascontiguousarray(by_phase_2),
        np.ascontiguousarray(back_2),
        np.ascontiguousarray(back_1),
        (up_1, up_2, down_2, down_1),
    )
