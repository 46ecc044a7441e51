"""What can be taken back and made again, without a limit."""

from __future__ import annotations

from preview.session import Session

__all__ = ["History"]


class History:
    """Sessions before the present one, and those that were taken back."""

    def __init__(self) -> None:
        self._done: list[Session] = []
        self._undone: list[Session] = []

    @property
    def last(self) -> Session | None:
        """The session before the present one; None where nothing was changed."""
        return self._done[-1] if self._done else None

    @property
    def undone(self) -> Session | None:
        """The session that was taken back last; None where nothing was."""
        return self._undone[-1] if self._undone else None

    def note(self, session: Session) -> None:
        """The present session is about to become another one."""
        self._done.append(session)
        self._undone.clear()

    def back(self, now: Session) -> None:
        """``last`` becomes the present one in place of ``now``."""
        self._done.pop()
        self._undone.append(now)

    def forward(self, now: Session) -> None:
        """``undone`` becomes the present one in place of ``now``."""
        self._undone.pop()
        self._done.append(now)
