"""Why a running circuit was stopped."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["FaultReading"]


@dataclass(frozen=True, slots=True)
class FaultReading:
    """Why a circuit was stopped: it gives 0 V, and is heard muted, until it is recovered."""

    node: str
    """Node or designator at which it happened."""
    time_s: float
    """When, counted in signal time since the circuit began [s]."""
    reason: str
    """What happened, one line."""
