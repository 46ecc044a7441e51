"""A second engine's process, loaded and waiting beside the one that plays: what is left to do is to open the device."""

from __future__ import annotations

import threading

from preview.engine.process import EngineConfig, EngineProcess

__all__ = ["Spare"]

AFTER_S = 3.0
"""It is started when the engine has been ready for so long, so that it does not slow the first sound down [s]."""


class Spare:
    """Starts engines, and has one more waiting. It costs memory; it computes nothing once it is loaded.

    Parameters
    ----------
    after_s : float
        Time from an engine that is ready to the start of its spare [s].
    """

    def __init__(self, after_s: float = AFTER_S) -> None:
        self._after_s = after_s
        self._waiting: EngineProcess | None = None
        self._guard = threading.Lock()
        self._closed = threading.Event()

    @property
    def waiting(self) -> EngineProcess | None:
        """The one that waits, as long as it lives."""
        waiting = self._waiting
        return waiting if waiting is not None and waiting.alive else None

    def keep_beside(self, engine: EngineProcess) -> None:
        """Have one waiting beside an engine, once that is ready; returns at once."""

        def keep() -> None:
            engine.heard_ready.wait()
            if self._closed.wait(self._after_s):
                return
            with self._guard:
                if engine.alive and self.waiting is None and not self._closed.is_set():
                    self._waiting = EngineProcess.spawn()

        threading.Thread(target=keep, name="spare", daemon=True).start()

    def begin(self, config: EngineConfig) -> EngineProcess:
        """An engine that begins so: the one that waited, else a new one; another will wait beside it."""
        with self._guard:
            engine, self._waiting = self.waiting or EngineProcess.spawn(), None
        engine.begin(config)
        self.keep_beside(engine)
        return engine

    def close(self) -> None:
        """End the one that waits; none is started any more."""
        self._closed.set()
        with self._guard:
            if self._waiting is not None:
                self._waiting.close()
