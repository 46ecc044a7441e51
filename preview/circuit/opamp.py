"""Op-amps: the built-in types and what is read off one while the circuit runs."""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["BUILT_IN_TYPES", "OpAmpReading"]

BUILT_IN_TYPES = ("perfect", "ideal")
"""``perfect`` has no limit at all; ``ideal`` has no limit but the rails."""


@dataclass(frozen=True, slots=True)
class OpAmpReading:
    """What one op-amp did since its reading was last cleared, worst channel where there are several."""

    designator: str
    """U1, U2 ..."""
    peak_v: float
    """Largest magnitude of the output voltage [V]."""
    high_v: float
    """Largest output voltage [V]."""
    low_v: float
    """Smallest output voltage [V]."""
    headroom_db: float
    """Distance of the peak to the nearer rail [dB]; inf without a rail or a signal; 0 at the rail."""
    clip_events: int
    """Visits to a rail, all channels together."""
    clipped_s: float
    """Time spent at a rail, all channels together [s]."""
    slew_peak_v_per_s: float
    """Fastest output change [V/s]."""
    slew_limit_v_per_s: float = math.inf
    """Limit of its type [V/s]; inf where it has none."""
    current_peak_a: float = 0.0
    """Largest magnitude of the output current [A]."""
    unsolved_steps: int = 0
    """Steps in which the limits could not be solved to tolerance; 0 in a healthy run."""
