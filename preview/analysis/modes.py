"""Natural frequency and Q of the sections that a circuit is made of, from its poles and zeros."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np

__all__ = ["Mode", "modes", "modes_line"]

HIGHEST_HZ = 100e6
"""What lies above is the model's and not the circuit's [Hz]."""
_REAL = 1e-3
"""A pair with less imaginary part than this share counts as two on the axis: a double one is never found exactly."""
SHOWN_HZ = 1e6
"""What lies above is told a person by its number only [Hz]."""
_AT_REST = 1e-5
"""A zero below this share of the lowest pole is at 0 Hz: a double one is never found exactly."""


@dataclass(frozen=True, slots=True)
class Mode:
    """A real pole or zero (order 1), or a pair (order 2)."""

    f0_hz: float
    """Natural frequency, its distance from 0 over 2 pi [Hz]."""
    q: float | None
    """Quality factor of a pair; inf on the frequency axis; None for a real one."""
    right: bool = False
    """Whether it lies in the right half plane, as zeros may."""

    @property
    def order(self) -> int:
        """1 or 2."""
        return 1 if self.q is None else 2

    def as_object(self) -> dict[str, object]:
        """The mode with its unit in each key."""
        return {"f0_hz": self.f0_hz, "q": self.q, "order": self.order, "right_half_plane": self.right}


def modes(s_rad: Iterable[complex], beside: Iterable[complex] = ()) -> tuple[Mode, ...]:
    """Poles or zeros [rad/s] as sections, rising; what is above 100 MHz is left out.

    Parameters
    ----------
    s_rad : iterable of complex
        The poles or the zeros [rad/s].
    beside : iterable of complex
        For zeros, the poles: a zero far below all of them is at 0 Hz.
    """
    found = [complex(s) for s in s_rad if abs(s) <= 2.0 * np.pi * HIGHEST_HZ]
    least = _AT_REST * min((abs(s) for s in beside), default=0.0)
    sections = []
    for s in found:
        size, hz = abs(s), abs(s) / (2.0 * np.pi)
        if size <= least or size == 0.0:
            sections.append(Mode(0.0, None))
        elif abs(s.imag) <= _REAL * size:
            sections.append(Mode(hz, None, s.real > 0.0))
        elif s.imag > 0.0:
            decay = abs(s.real)
            on_axis = decay <= 1e-9 * size
            sections.append(
                Mode(hz, math.inf if on_axis else size / (2.0 * decay), s.real > 0.0 and not on_axis)
            )
    return tuple(sorted(sections, key=lambda mode: mode.f0_hz))


def modes_line(found: tuple[Mode, ...], hertz: Callable[[float], str]) -> str:
    """The sections in words: ``159 Hz, 1.59 kHz Q 0.707``."""
    words = []
    for mode in found:
        if mode.f0_hz > SHOWN_HZ:
            words.append(f"{sum(other.f0_hz > SHOWN_HZ for other in found)} above {hertz(SHOWN_HZ)}")
            break
        text = hertz(mode.f0_hz)
        if mode.q is not None:
            text += f" Q {mode.q:.4g}" if math.isfinite(mode.q) else " on the axis"
        words.append(f"{text} (right half plane)" if mode.right else text)
    return ", ".join(words) or "none"
