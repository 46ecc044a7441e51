"""Frequency weighting: A and C [IEC 61672], the 468 network [ITU 468] and the K filter of loudness [ITU 1770].

A, C and 468 are defined by analogue poles, K by its coefficients at 48 kHz. A filter at a sample rate has the same
poles, each carried to ``exp(s T)``, the same zeros at 0 Hz, and a numerator fitted so that the gain is the standard's
within 0.03 dB up to 20 kHz at 44.1 kHz, where the bilinear transform alone is out by more than 10 dB.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum
from functools import lru_cache

import numpy as np
from numpy.polynomial import polynomial
from numpy.typing import ArrayLike, NDArray

from preview.errors import UsageError

__all__ = ["LOWEST_RATE_HZ", "Weighting", "sections", "standard_gain_db"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

LOWEST_RATE_HZ = 8_000.0
"""Below this rate there is no frequency weighting, nor a meter that needs one."""

FITTED_RATIO = 0.4536
"""Upper end of the fit as a share of the sample rate: 20 kHz at 44.1 kHz."""

NUMERATOR_ORDER = 6


class Weighting(StrEnum):
    """A frequency weighting."""

    A = "A"
    """As the ear at low level; 0 dB at 1 kHz."""
    C = "C"
    """Flat with its ends rolled off; 0 dB at 1 kHz."""
    ITU_468 = "468"
    """Audibility of noise; 0 dB at 1 kHz, +12.2 dB at 6.3 kHz."""
    AES17 = "468 (2 kHz)"
    """The same network 5.63 dB lower, 0 dB at 2 kHz, for noise as RMS after AES17."""
    K = "K"
    """Loudness: a high shelf and a high-pass; 0.69 dB at 997 Hz."""


@dataclass(frozen=True, slots=True)
class _Network:
    """What a filter shall be like."""

    poles_rad_s: tuple[complex, ...]
    """Poles that the filter takes over."""
    zeros_at_0: int
    """How many of its zeros lie at 0 Hz."""
    power: Callable[[Real], Real]
    """Square of the gain at frequencies [Hz]."""


# IEC 61672-1, annex E
_F1_HZ, _F2_HZ, _F3_HZ, _F4_HZ = 20.598997, 107.65265, 737.86223, 12194.217

# BS.468, figure 1a, from the source of 600 ohm to the load of 600 ohm: (element, henry or farad) along the ladder
_LADDER_OHM = 600.0
_LADDER = (
    ("shunt C", 13.85e-9),
    ("series L", 12.88e-3),
    ("shunt C", 26.82e-9),
    ("series C", 33.06e-9),
    ("shunt C", 9.21e-9),
    ("series L", 26.49e-3),
    ("shunt C", 31.47e-9),
)

# BS.1770, annex 1, tables 1 and 2: a high shelf and a high-pass at 48 kHz
_K_RATE_HZ = 48_000.0
_K_48K = np.array(
    [
        [1.53512485958697, -2.69169618940638, 1.19839281085285, -1.69065929318241, 0.73248077421585],
        [1.0, -2.0, 1.0, -1.99004745483398, 0.99007225036621],
    ]
)

_SCALE = 1e4
"""Frequencies are counted in 10 krad/s where their powers would span 30 decades."""


def _ladder_poles() -> tuple[complex, ...]:
    """Poles of the ladder: chain matrices with polynomials in s for entries, the lowest power first.

    A series capacitor is a chain matrix times ``1 / sC``; that factor is the network's zero at 0 Hz.
    """
    one, nil = np.array([1.0]), np.array([0.0])
    a, b, c, d = one, nil, nil, one
    for element, size in _LADDER:
        s = np.array([0.0, size])
        if element == "shunt C":
            a, c = (
                polynomial.polyadd(a, polynomial.polymul(b, s)),
                polynomial.polyadd(c, polynomial.polymul(d, s)),
            )
        elif element == "series L":
            b, d = (
                polynomial.polyadd(b, polynomial.polymul(a, s)),
                polynomial.polyadd(d, polynomial.polymul(c, s)),
            )
        else:
            b, d = (
                polynomial.polyadd(a, polynomial.polymul(b, s)),
                polynomial.polyadd(c, polynomial.polymul(d, s)),
            )
            a, c = polynomial.polymul(a, s), polynomial.polymul(c, s)
    down: Real = polynomial.polyadd(
        polynomial.polyadd(a, b / _LADDER_OHM), polynomial.polyadd(c * _LADDER_OHM, d)
    )
    return tuple((polynomial.polyroots(down * _SCALE ** np.arange(len(down))) * _SCALE).tolist())


def _analog(poles_rad_s: tuple[complex, ...], zeros_at_0: int, level_db: float = 0.0) -> _Network:
    """The network with these poles, ``level_db`` at 1 kHz."""

    def square(frequency_hz: Real) -> Real:
        s = 2j * math.pi * frequency_hz[..., np.newaxis] / _SCALE
        down = np.prod(np.abs(s - np.array(poles_rad_s) / _SCALE) ** 2, axis=-1)
        return np.asarray(np.abs(s[..., 0]) ** (2 * zeros_at_0) / down)

    level = 10.0 ** (level_db / 10.0) / square(np.array(1000.0))
    return _Network(poles_rad_s, zeros_at_0, lambda frequency_hz: level * square(frequency_hz))


@lru_cache
def _network(weighting: Weighting) -> _Network:
    low, high = -2.0 * math.pi * _F1_HZ, -2.0 * math.pi * _F4_HZ
    if weighting is Weighting.C:
        return _analog((low, low, high, high), 2)
    if weighting is Weighting.A:
        return _analog((low, low, -2.0 * math.pi * _F2_HZ, -2.0 * math.pi * _F3_HZ, high, high), 4)
    if weighting is Weighting.K:
        poles = np.concatenate([np.roots([1.0, *row[3:]]) for row in _K_48K]).astype(np.complex128)
        s = np.log(poles) * _K_RATE_HZ
        return _Network(
            tuple(s.tolist()), 2, lambda f: _power(_K_48K, np.minimum(f, _K_RATE_HZ / 2), _K_RATE_HZ)
        )
    return _analog(_ladder_poles(), 1, -5.63 if weighting is Weighting.AES17 else 0.0)


def _power(rows: Real, frequency_hz: Real, rate: float) -> Real:
    """Square of the gain of a filter in sections."""
    turn = np.exp(-2j * math.pi / rate * np.multiply.outer(np.arange(3), frequency_hz))
    result = np.ones(np.shape(frequency_hz))
    for row in rows:
        up, down = np.tensordot(row[:3], turn, 1), 1.0 + np.tensordot(row[3:], turn[1:], 1)
        result *= np.abs(up / down) ** 2
    return result


def standard_gain_db(weighting: Weighting, frequency_hz: ArrayLike) -> Real:
    """Gain as the standard defines it [dB]."""
    return np.asarray(10.0 * np.log10(_network(weighting).power(np.asarray(frequency_hz, dtype=np.float64))))


@lru_cache
def sections(weighting: Weighting, sample_rate_hz: float) -> Real:
    """The filter as second-order sections (k, 5): b0 b1 b2 a1 a2, with a0 = 1.

    Raises
    ------
    UsageError
        A sample rate below 8 kHz.
    """
    if not sample_rate_hz >= LOWEST_RATE_HZ:
        raise UsageError(
            f"{weighting} weighting at {sample_rate_hz:g} Hz: sample rates from 8 kHz on have one",
            "use a meter without frequency weighting",
        )
    by_table = weighting is Weighting.K and sample_rate_hz == _K_RATE_HZ
    found = _K_48K.copy() if by_table else _fitted(_network(weighting), sample_rate_hz)
    found.flags.writeable = False
    return found


def _fitted(network: _Network, rate: float) -> Real:
    poles = np.exp(np.array(network.poles_rad_s, dtype=np.complex128) / rate)
    fixed = np.ones(network.zeros_at_0, dtype=np.complex128)
    zeros = np.concatenate([fixed, _fitted_zeros(network, poles, rate)])
    top, down = _in_pairs(zeros), _in_pairs(poles)
    none = np.array([1.0, 0.0, 0.0])
    count = max(len(top), len(down))
    result = np.array(
        [
            [*(top[k] if k < len(top) else none), *(down[k] if k < len(down) else none)[1:]]
            for k in range(count)
        ]
    )
    at_1k = np.array(1000.0)
    result[0, :3] *= np.sqrt(network.power(at_1k) / _power(result, at_1k, rate))
    return result


def _fitted_zeros(network: _Network, poles: Complex, rate: float) -> Complex:
    """Zeros, within the unit circle, that bring the gain to the network's up to ``FITTED_RATIO`` of the rate.

    The square of a numerator's magnitude is a polynomial in cos w. It is fitted in relative error at Chebyshev's
    points, weighted until the largest errors are alike (Lawson's method); half of its roots are the zeros.
    """
    low, order = math.cos(2.0 * math.pi * FITTED_RATIO), NUMERATOR_ORDER
    x = (1.0 + low) / 2.0 + (1.0 - low) / 2.0 * np.cos((np.arange(400) + 0.5) * math.pi / 400)
    w = np.arccos(x)
    turn = np.exp(-1j * w)
    wanted = network.power(w * rate / (2.0 * math.pi))
    wanted *= np.prod(np.abs(1.0 - poles * turn[:, np.newaxis]) ** 2, axis=1)
    wanted /= np.abs(1.0 - turn) ** (2 * network.zeros_at_0)
    basis = np.cos(np.outer(w, np.arange(order + 1))) / wanted[:, np.newaxis]
    weight = np.ones(len(w))
    for _ in range(30):
        series = np.linalg.lstsq(basis * weight[:, np.newaxis], weight, rcond=None)[0]
        error = np.abs(basis @ series - 1.0)
        weight *= np.sqrt(error / error.max() + 1e-3)
        weight /= weight.max()
    halves = np.concatenate([series[:0:-1] / 2.0, series[:1], series[1:] / 2.0])
    roots = polynomial.polyroots(halves)
    return np.asarray(roots[np.abs(roots) < 1.0])


def _in_pairs(roots: Complex) -> list[Real]:
    """Second-order polynomials (1, c1, c2) in 1/z with these roots; conjugates together, real ones in order."""
    upper = [root for root in roots if root.imag > 1e-9]
    real = sorted((float(root.real) for root in roots if abs(root.imag) <= 1e-9), reverse=True)
    pairs = [np.array([1.0, -2.0 * root.real, abs(root) ** 2]) for root in upper]
    for k in range(0, len(real), 2):
        one, other = real[k], real[k + 1] if k + 1 < len(real) else 0.0
        pairs.append(np.array([1.0, -one - other, one * other]))
    return sorted(pairs, key=lambda pair: -pair[2])
