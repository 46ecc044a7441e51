"""The noise of the parts, as it is asked for."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["NoiseSetting"]


@dataclass(frozen=True, slots=True)
class NoiseSetting:
    """That the noise of the parts is heard, and how."""

    gain_db: float = 0.0
    """By how much it is brought up for study [dB]."""
    seed: int = 1
    """Which noise it is."""
