"""Running the desk in a terminal, and leaving it as it was: by a key, a signal, a crash, or a terminal that is gone."""

from __future__ import annotations

import os
import sys
import threading
from pathlib import Path

from preview.errors import PreviewError
from preview.session import Session
from preview.ui.app import DeskApp
from preview.ui.link import EngineLink, Restart

__all__ = ["run_desk"]

_INTERRUPTED = 130
_PATIENCE_S = 3.0
"""A screen that does not close in this time after a signal never will: its terminal is gone or stands still [s]."""
_LEAVE = b"\x1b[?1049l\x1b[?25h\x1b[?1000l\x1b[?1003l\x1b[?1006l\x1b[?2004l\x1b[0m"
"""Leave the second screen; cursor on, mouse and bracketed paste off (ECMA-48 private modes)."""


def run_desk(
    session: Session,
    link: EngineLink,
    *,
    restart: Restart | None = None,
    autoplay: bool = True,
    config: Path | None = None,
) -> Session:
    """Run the desk until the person leaves; the session as it was left.

    The engine behind ``link`` must be running before this is called, and is closed when it returns.

    Raises
    ------
    PreviewError
        The desk stopped on a fault of its own; the terminal is restored.
    KeyboardInterrupt
        A signal ended it; the terminal is restored.
    """
    app = DeskApp(session, link, restart=restart, autoplay=autoplay, config=config)
    before = _settings()
    insists: list[threading.Timer] = []

    def insist() -> None:
        """End all the same where the screen cannot be closed."""
        timer = threading.Timer(_PATIENCE_S, _end_hard, (app, before))
        timer.daemon = True
        timer.start()
        insists.append(timer)

    app.on_signal = insist
    app.keep = True
    try:
        left = app.run()
    finally:
        for timer in insists:
            timer.cancel()
        if app._exception is None:
            app.desk.keeping.end(keep=app.ended_by is not None)
        app.desk.link.close()
    if app.ended_by is not None:
        raise KeyboardInterrupt
    if left is None and app.return_code:
        fault = app._exception
        what = f" ({type(fault).__name__}: {fault})" if fault is not None else ""
        raise PreviewError(
            f"the desk stopped on a fault of its own{what}", "PREVIEW_DEBUG=1 shows where"
        ) from fault
    return left or app.desk.session


def _settings() -> object:
    """The terminal's settings; None where there is no terminal, or on a system that keeps them elsewhere."""
    try:
        import termios

        return termios.tcgetattr(sys.__stdin__.fileno()) if sys.__stdin__ else None
    except Exception:  # no termios, no terminal; termios.error is no OSError
        return None


def _end_hard(app: DeskApp, before: object) -> None:
    """Close the engine, put the terminal back as well as can be, and end."""
    try:
        app.desk.link.close()
        if isinstance(before, list) and sys.__stdin__ is not None and sys.__stderr__ is not None:
            import termios

            termios.tcsetattr(sys.__stdin__.fileno(), termios.TCSANOW, before)
            os.set_blocking(sys.__stderr__.fileno(), False)
            os.write(sys.__stderr__.fileno(), _LEAVE)
    finally:
        os._exit(_INTERRUPTED)
