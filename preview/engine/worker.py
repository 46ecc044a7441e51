"""A process beside the engine for work that must not disturb the sound: low priority, one piece of a job at a time."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import sys
import threading
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from multiprocessing.connection import Connection
from typing import TYPE_CHECKING

from preview.engine.door import end_with_parent
from preview.engine.messages import Notice
from preview.errors import PreviewError

if TYPE_CHECKING:
    from multiprocessing.context import SpawnProcess

    from preview.engine.jobs import Found, Job

__all__ = ["Worker"]

NICE = 10
IDLE_S = 3600.0
PATIENCE_S = 0.3


@dataclass(frozen=True, slots=True)
class _Order:
    """What the engine asks for; a job in place of another of the same key, None to stop that one."""

    key: str
    job: Job | None


class Worker:
    """A handle for the background process, which is started with the first job. No method waits but ``close``."""

    def __init__(self) -> None:
        self._process: SpawnProcess | None = None
        self._connection: Connection | None = None
        self._told: deque[Found | Notice] = deque()
        self._orders: deque[_Order] = deque()
        self._there = threading.Condition()
        self._closed = False
        self._thread: threading.Thread | None = None
        self._reader: threading.Thread | None = None

    def submit(self, key: str, job: Job | None) -> None:
        """Do a job, in place of the one of that key; None stops it."""
        with self._there:
            if self._closed:
                return
            self._orders.append(_Order(key, job))
            if self._thread is None:
                self._thread = threading.Thread(target=self._speak, name="worker-writer", daemon=True)
                self._thread.start()
            self._there.notify()

    def told(self) -> list[Found | Notice]:
        """What was found out since the last call, oldest first."""
        told = []
        while self._told:
            told.append(self._told.popleft())
        return told

    def close(self) -> None:
        """End the process; what it was doing is given up, and nothing is left behind."""
        with self._there:
            self._closed = True
            self._there.notify()
        if self._process is not None:
            for force in (self._process.terminate, self._process.kill):
                force()
                self._process.join(PATIENCE_S)
                if not self._process.is_alive():
                    break
        if self._reader is not None and self._connection is not None:
            self._reader.join(PATIENCE_S)  # it has read to the end; closed under its hands it would fail
            self._connection.close()

    def _speak(self) -> None:
        """Start the process, and again after it has died; send it the orders."""
        while True:
            with self._there:
                while not self._orders and not self._closed:
                    self._there.wait()
                if self._closed:
                    return
                order = self._orders.popleft()
            if order.job is None and self._process is None:
                continue
            try:
                if self._process is None or not self._process.is_alive():
                    self._start()
                assert self._connection is not None
                self._connection.send(order)
            except (OSError, ValueError) as error:
                self._told.append(Notice(f"background work cannot be done: {error}", "warning"))

    def _start(self) -> None:
        context = multiprocessing.get_context("spawn")
        ours, theirs = context.Pipe(duplex=True)
        process = context.Process(target=_child, args=(theirs,), name="preview-worker", daemon=True)
        process.start()
        theirs.close()
        self._process, self._connection = process, ours
        self._reader = threading.Thread(target=self._listen, args=(ours,), name="worker-reader", daemon=True)
        self._reader.start()

    def _listen(self, connection: Connection) -> None:
        with contextlib.suppress(EOFError, OSError):
            while True:
                self._told.append(connection.recv())


def _child(connection: Connection) -> None:
    """Runs in the child until the engine is gone."""
    signal.signal(signal.SIGTERM, lambda *_: sys.exit())  # so that what is half written is taken away
    for number in (signal.SIGINT, *([signal.SIGHUP] if sys.platform != "win32" else [])):
        signal.signal(number, signal.SIG_IGN)
    if hasattr(os, "nice"):
        os.nice(NICE)
    end_with_parent(PATIENCE_S)
    with contextlib.suppress(EOFError, OSError):
        _Bench(connection).serve()


class _Bench:
    """The jobs in hand, a piece of each in turn."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection
        self._running: dict[str, tuple[Job, Iterator[Found | None]]] = {}

    def serve(self) -> None:
        """Until the engine's end of the pipe is closed."""
        try:
            while True:
                while self._connection.poll(0.0 if self._running else IDLE_S):
                    self._take(self._connection.recv())
                for key in list(self._running):
                    self._go_on(key)
        finally:
            for key in list(self._running):
                self._drop(key)

    def _take(self, order: _Order) -> None:
        from preview.engine.jobs import run  # loads the kernels, at the low priority that was taken on before

        self._drop(order.key)
        if order.job is not None:
            self._running[order.key] = order.job, run(order.job)

    def _drop(self, key: str) -> None:
        if key in self._running:
            _, pieces = self._running.pop(key)
            pieces.close()  # type: ignore[attr-defined] # every job is a generator

    def _go_on(self, key: str) -> None:
        from preview.engine.jobs import failed

        job, pieces = self._running[key]
        try:
            told = next(pieces, self)
        except PreviewError as error:
            told = failed(job, error)
            self._connection.send(told or Notice(str(error), "warning"))
            del self._running[key]
        except Exception as error:  # the others go on; what failed is said, not hidden
            self._connection.send(
                Notice(f"background work failed ({type(error).__name__}: {error})", "warning")
            )
            del self._running[key]
        else:
            if told is self:
                del self._running[key]
            elif told is not None:
                self._connection.send(told)
