"""What the desk needs from an engine: commands in, snapshots and notices out."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

from preview.engine.messages import Command, Notice, Snapshot

__all__ = ["EngineLink", "Restart", "StillLink"]


class EngineLink(Protocol):
    """A running engine. No method waits."""

    @property
    def alive(self) -> bool:
        """Whether the engine still runs."""

    def send(self, command: Command) -> None:
        """Hand over a command; dropped without an error when the engine has stopped."""

    def latest(self) -> Snapshot | None:
        """The newest snapshot, None if there is none since the last call."""

    def notices(self) -> list[Notice]:
        """Notices since the last call, oldest first."""

    def close(self) -> None:
        """End the engine; a second call does nothing."""


Restart = Callable[[], EngineLink]
"""Starts a new engine in place of one that stopped; may take a second; may raise PreviewError."""


class StillLink:
    """A link to no engine: one fixed snapshot, for a picture of the desk."""

    def __init__(self, snapshot: Snapshot | None = None) -> None:
        self._snapshot = snapshot

    @property
    def alive(self) -> bool:
        """Always true."""
        return True

    def send(self, command: Command) -> None:
        """Does nothing with the command."""

    def latest(self) -> Snapshot | None:
        """The fixed snapshot at the first call, then None."""
        snapshot, self._snapshot = self._snapshot, None
        return snapshot

    def notices(self) -> list[Notice]:
        """None, ever."""
        return []

    def close(self) -> None:
        """Nothing to end."""
