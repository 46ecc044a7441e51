"""The engine's process: how it is started, and the door by which it comes in. Little is loaded for that."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from multiprocessing import resource_tracker
from multiprocessing.connection import Connection
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from multiprocessing.context import SpawnProcess

__all__ = ["end_with_parent", "start_child"]

GRACE_S = 0.6
"""Time for a process to end by itself when its parent is gone [s]."""
FROM_TERMINAL = tuple(getattr(signal, name) for name in ("SIGINT", "SIGHUP") if hasattr(signal, name))
"""Signals that a terminal sends to every process of the desk: the interrupt key, and that it was closed."""


def start_child() -> tuple[SpawnProcess, Connection]:
    """Start an engine's process, which loads its libraries and waits for its configuration on the pipe."""
    context = multiprocessing.get_context("spawn")
    with _real_stderr(), _deaf_to_the_terminal():
        resource_tracker.ensure_running()
        ours, theirs = context.Pipe(duplex=True)
        process = context.Process(target=_child, args=(theirs,), name="preview-engine")
        process.start()
    theirs.close()
    return process, ours


def end_with_parent(grace_s: float = GRACE_S) -> None:
    """Have this process end when its parent does, whatever its main thread is at: compiling takes half a minute."""
    parent = multiprocessing.parent_process()
    assert parent is not None

    def watch() -> None:
        parent.join()
        time.sleep(grace_s)
        os._exit(1)

    threading.Thread(target=watch, name="parent-watch", daemon=True).start()


@contextlib.contextmanager
def _real_stderr() -> Iterator[None]:
    """The process's own stderr while a child is started: a desk may have put one without a file there."""
    held = sys.stderr
    if sys.__stderr__ is not None:
        sys.stderr = sys.__stderr__
    try:
        yield
    finally:
        sys.stderr = held


@contextlib.contextmanager
def _deaf_to_the_terminal() -> Iterator[None]:
    """A child started here does not hear what the terminal sends to all its processes until it says so itself."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    held = signal.pthread_sigmask(signal.SIG_BLOCK, FROM_TERMINAL)
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, held)


def _child(connection: Connection) -> None:
    """Runs in the child: everything that touches sound is loaded here and nowhere else."""
    for number in FROM_TERMINAL:  # they are for the desk, which then says quit
        signal.signal(number, signal.SIG_IGN)
    if hasattr(signal, "pthread_sigmask"):
        signal.pthread_sigmask(signal.SIG_UNBLOCK, FROM_TERMINAL)
    end_with_parent()
    import preview.engine.rack  # noqa: F401 - loaded while the desk still reads its options
    from preview.dsp.stage import load_kernels
    from preview.engine.host import run
    from preview.engine.process import EngineConfig

    warm = load_kernels()  # what must be compiled first is left: that takes long, and is told
    with contextlib.suppress(EOFError, OSError):
        config = connection.recv()
        if isinstance(config, EngineConfig):
            run(connection, config, warm=warm)
    os._exit(0)  # a sound system that hangs would hold up the library's own end for ever
