"""What a level meter reads: volts, per channel."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["LevelReading"]


@dataclass(frozen=True, slots=True)
class LevelReading:
    """One reading of a level meter; tuples have one entry a channel."""

    peak_v: tuple[float, ...]
    """Largest sample magnitude since the last reading [V]."""
    hold_v: tuple[float, ...]
    """Largest sample magnitude since the hold was cleared [V]."""
    rms_v: tuple[float, ...]
    """RMS over the last 300 ms (exponential) [V]."""
