"""The three qualities of computation."""

from __future__ import annotations

from enum import StrEnum

__all__ = ["Quality"]


class Quality(StrEnum):
    """How finely the running circuit is computed."""

    DRAFT = "draft"
    """For weak machines: 8 steps a frame at 48 kHz."""
    STANDARD = "standard"
    """The default, live and off-line: 16 steps a frame at 48 kHz."""
    FINE = "fine"
    """For the record: 32 steps a frame at 48 kHz."""
