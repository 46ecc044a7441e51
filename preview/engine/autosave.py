"""A desk's session kept on the disk while it changes, so that a crash loses the last second or two and nothing else.

Each desk has a file of its own in the person's state folder and holds a lock beside it. A lock goes with its process,
however that ends; a file without one was left behind by a crash.
"""

from __future__ import annotations

import contextlib
import os
import sys
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

import platformdirs

from preview.engine.sessionfile import ENDING, Saved, load, save
from preview.errors import PreviewError

__all__ = ["Autosave", "LeftBehind", "autosave_folder", "left_behind"]

WAIT_S = 1.0
"""Changes within so long are written together [s]."""


@dataclass(frozen=True, slots=True)
class LeftBehind:
    """A session that a crash left."""

    path: Path
    """Its file; ``discard`` or a new session ends its keeping."""
    saved: Saved
    """What was on the desk."""
    written_s: float
    """When it was written last, ``time.time()``."""

    def discard(self) -> None:
        """Forget it."""
        self.path.unlink(missing_ok=True)
        _lock_path(self.path).unlink(missing_ok=True)


class Autosave:
    """Keeps one desk's session; no method waits for the disk but ``close``.

    Parameters
    ----------
    folder : Path, optional
        Where; the person's state folder if not given.
    complain : callable, optional
        Told once, in a line, when it cannot be kept.
    """

    def __init__(self, folder: Path | None = None, complain: Callable[[str], None] | None = None) -> None:
        self._path = (folder or autosave_folder()) / f"desk-{os.getpid()}-{time.time_ns()}{ENDING}"
        self._complain = complain
        self._wanted: Saved | None = None
        self._written: Saved | None = None
        self._lock: BinaryIO | None = None
        self._ended = False
        self._change = threading.Condition()
        self._thread = threading.Thread(target=self._run, name="autosave", daemon=True)
        self._thread.start()

    @property
    def path(self) -> Path:
        """Its file."""
        return self._path

    def note(self, saved: Saved) -> None:
        """What is on the desk now; call it as often as you like."""
        with self._change:
            self._wanted = saved
            self._change.notify()

    def close(self, *, keep: bool = False) -> None:
        """The desk ends well: what was kept is no longer needed, unless it is to be kept."""
        with self._change:
            self._ended = True
            self._change.notify()
        self._thread.join(5.0)
        if self._lock is not None:
            self._lock.close()
        with contextlib.suppress(OSError):
            if not keep:
                self._path.unlink(missing_ok=True)
            _lock_path(self._path).unlink(missing_ok=True)

    def _run(self) -> None:
        while True:
            with self._change:
                while not self._ended and self._wanted == self._written:
                    self._change.wait()
                if self._wanted == self._written:
                    return
                saved, ended = self._wanted, self._ended
            assert saved is not None
            try:
                if self._lock is None:
                    self._path.parent.mkdir(parents=True, exist_ok=True)
                    self._lock = _take_lock(_lock_path(self._path))
                save(self._path, saved)
            except (PreviewError, OSError) as error:
                if self._complain is not None:
                    self._complain(f"the session is not being kept against a crash: {error}")
                    self._complain = None
            with self._change:
                self._written = saved
                if not ended:
                    self._change.wait_for(lambda: self._ended, WAIT_S)


def autosave_folder() -> Path:
    """Where sessions are kept against a crash."""
    return platformdirs.user_state_path("preview", appauthor=False) / "desks"


def left_behind(folder: Path | None = None) -> list[LeftBehind]:
    """Sessions whose desks have crashed, the newest first; one that cannot be read is left out."""
    folder = folder or autosave_folder()
    found = []
    for path in folder.glob(f"desk-*{ENDING}"):
        lock = _take_lock(_lock_path(path))
        if lock is None:
            continue  # its desk is running
        lock.close()
        with contextlib.suppress(PreviewError, OSError):
            found.append(LeftBehind(path, load(path), path.stat().st_mtime))
    return sorted(found, key=lambda one: -one.written_s)


def _lock_path(path: Path) -> Path:
    return path.with_suffix(".lock")


def _take_lock(path: Path) -> BinaryIO | None:
    """The open lock file, None where another process holds it."""
    file = open(path, "ab")  # noqa: SIM115 - held open for as long as the lock
    try:
        if sys.platform == "win32":
            import msvcrt

            msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        file.close()
        return None
    return file
