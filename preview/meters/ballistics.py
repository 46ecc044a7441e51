"""How readings move, in closed form: falls, charged capacitors and the needle of a VU meter."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

__all__ = ["fall_per_frame", "movement", "movement_step", "steady_ratio", "taken_per_step"]


def fall_per_frame(fall_db_per_s: float, sample_rate_hz: float) -> float:
    """Factor by which a reading falls from one frame to the next."""
    return float(10.0 ** (-fall_db_per_s / 20.0 / sample_rate_hz))


def taken_per_step(time_s: float, rate_hz: float) -> float:
    """Share of its distance that a one-pole comes nearer in a step: ``1 - exp(-1 / (time rate))``."""
    return -math.expm1(-1.0 / (time_s * rate_hz))


def steady_ratio(charge_s: float, leak_s: float) -> float:
    """What a capacitor settles at that a rectified sine of peak 1 charges while it is above, and that leaks else.

    There what flows in, in the mean ``2/pi (sqrt(1 - y^2) - y acos y) / charge``, is what leaks, ``2/pi y asin y /
    leak``.
    """

    def surplus(y: float) -> float:
        return (math.sqrt(1.0 - y * y) - y * math.acos(y)) / charge_s - y * math.asin(y) / leak_s

    return _root(surplus, 0.0, 1.0)


def movement(rise_s: float, rise_ratio: float, overshoot_ratio: float) -> tuple[float, float]:
    """Natural frequency [rad/s] and damping of the second-order movement with that rise and overshoot on a step."""
    log = math.log(overshoot_ratio)
    damping = -log / math.hypot(math.pi, log)
    ringing = math.sqrt(1.0 - damping * damping)

    def short_of(turn: float) -> float:
        lag = math.cos(ringing * turn) + damping / ringing * math.sin(ringing * turn)
        return rise_ratio - 1.0 + math.exp(-damping * turn) * lag

    return _root(short_of, 0.0, math.pi / ringing) / rise_s, damping


def movement_step(natural_rad_s: float, damping: float, time_s: float) -> NDArray[np.float64]:
    """Exact step of a movement (2, 3): deflection and speed after ``time_s``, from both and a constant force.

    The force is counted in the deflection that it holds, the speed in deflections per second.
    """
    decay = natural_rad_s * damping
    ringing = natural_rad_s * math.sqrt(1.0 - damping * damping)
    c, s = math.cos(ringing * time_s), math.sin(ringing * time_s) / ringing
    e = math.exp(-decay * time_s)
    at, pull = e * (c + decay * s), e * natural_rad_s**2 * s
    return np.array([[at, e * s, 1.0 - at], [-pull, e * (c - decay * s), pull]])


def _root(falling: Callable[[float], float], low: float, high: float) -> float:
    """Where a falling function goes through 0, by halving."""
    for _ in range(60):
        middle = 0.5 * (low + high)
        if falling(middle) > 0.0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
