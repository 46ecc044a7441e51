"""What the desk needs from an engine: commands in, snapshots and notices out."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

from preview.engine.messages import Command, Notice, Report, Snapshot
from preview.engine.process import EngineConfig

__all__ = ["AnswerWatch", "EngineLink", "Restart", "Reviver", "StillLink"]

_PATIENCE_POLLS = 75
"""3 s at the desk's pace."""
_REVIVE_S = 10.0
"""An engine that stops again so soon after it was started by itself is left to the person [s]."""


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

    def reports(self) -> list[Report]:
        """What was found out since the last call, the newest of each kind."""

    def close(self) -> None:
        """End the engine; a second call does nothing."""


Restart = Callable[[EngineConfig], EngineLink]
"""Starts a new engine in place of one that stopped, on the device of the first; may raise PreviewError."""


class AnswerWatch:
    """Notices that an engine which has spoken before has fallen silent, though its process lives.

    It counts polls and not seconds: a desk that was suspended itself has not asked in the meantime.
    """

    def __init__(self) -> None:
        self._unanswered: int | None = None

    def late(self, spoke: bool) -> bool:
        """One more poll, answered by a snapshot or not; whether the answer is overdue."""
        if spoke:
            self._unanswered = 0
        elif self._unanswered is not None:
            self._unanswered += 1
        return (self._unanswered or 0) >= _PATIENCE_POLLS


class Reviver:
    """Whether an engine that stopped is replaced without asking: not one that was so just before."""

    def __init__(self) -> None:
        self._revived_s = -_REVIVE_S

    def may(self, now_s: float) -> bool:
        """Whether it may be replaced now; counted as done."""
        if now_s - self._revived_s < _REVIVE_S:
            return False
        self._revived_s = now_s
        return True


class StillLink:
    """A link to no engine: fixed reports, and one fixed snapshot again and again, for a picture of the desk."""

    def __init__(self, snapshot: Snapshot | None = None, reports: tuple[Report, ...] = ()) -> None:
        self._snapshot = snapshot
        self._reports = list(reports)

    @property
    def alive(self) -> bool:
        """Always true."""
        return True

    def send(self, command: Command) -> None:
        """Does nothing with the command."""

    def latest(self) -> Snapshot | None:
        """The fixed snapshot."""
        return self._snapshot

    def notices(self) -> list[Notice]:
        """None, ever."""
        return []

    def reports(self) -> list[Report]:
        """Those that were given, once."""
        reports, self._reports = self._reports, []
        return reports

    def close(self) -> None:
        """Nothing to end."""
