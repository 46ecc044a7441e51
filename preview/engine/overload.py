"""Whether the computation keeps up with the sound, and what to do where it does not."""

from __future__ import annotations

from preview.engine.messages import Snapshot
from preview.values.quality import Quality

__all__ = ["Overload"]

TOO_MUCH, ENOUGH = 0.95, 0.7
"""Share of the time from which on sound is lost, and below which there is room again."""
TURNS = 15
"""Snapshots one after the other before it is said: half a second."""


class Overload:
    """Looks at each snapshot, and says once what takes too long."""

    def __init__(self) -> None:
        self._turns = 0
        self._told = False

    def look(self, snapshot: Snapshot) -> str:
        """A line for the person; empty where there is nothing new to say."""
        if snapshot.load_ratio < ENOUGH:
            self._turns, self._told = 0, False
        elif snapshot.load_ratio >= TOO_MUCH:
            self._turns += 1
        if self._told or self._turns < TURNS:
            return ""
        self._told = True
        cure = "another op-amp type or stage takes less"
        if snapshot.quality is not Quality.DRAFT:
            cure = f"a lower quality than {snapshot.quality} takes less"
        return (
            f"the sound drops out: computing it takes {100.0 * snapshot.load_ratio:.0f} % of the time; {cure}"
        )
