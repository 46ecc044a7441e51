"""A device that another one stands in for: looked for now and then, by a process that does not play."""

from __future__ import annotations

from collections.abc import Callable

__all__ = ["Comeback"]

FIRST_S, LONGEST_S = 3.0, 60.0
"""Time to the first look, and the longest between two that were for nothing [s]."""
STEADY_S = 10.0
"""A device that has played for so long is not one that refuses [s]."""


class Comeback:
    """Says when the device that is wanted can be opened again.

    Parameters
    ----------
    look : callable
        Has it tried whether the device of that name can be opened; ``hear`` gets the answer.
    """

    def __init__(self, look: Callable[[str], None]) -> None:
        self._look = look
        self._wanted: str | None = None
        self._wait_s = FIRST_S
        self._next_s = 0.0
        self._there = False
        self._well_since_s = -STEADY_S

    def due(self, wanted: str | None, now_s: float) -> bool:
        """Whether to change to the device that is wanted; None where no other one stands in for it."""
        if wanted != self._wanted:
            self._wanted, self._there = wanted, False
            if wanted is None:
                self._well_since_s = now_s
            elif now_s - self._well_since_s >= STEADY_S:
                self._wait_s = FIRST_S
            self._next_s = now_s + self._wait_s
        if wanted is None:
            return False
        if self._there:
            self._there = False
            self._wait_s = min(2.0 * self._wait_s, LONGEST_S)  # it may refuse all the same
            self._next_s = now_s + self._wait_s
            return True
        if now_s >= self._next_s:
            self._next_s = now_s + self._wait_s
            self._look(wanted)
        return False

    def hear(self, name: str, there: bool) -> None:
        """The answer to a look."""
        self._there = there and name == self._wanted

    def forget(self) -> None:
        """The person has chosen a device: what was tried before is no guide."""
        self._wait_s = FIRST_S
