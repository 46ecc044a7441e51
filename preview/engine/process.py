"""The engine as a process of its own: a handle for the desk."""

from __future__ import annotations

import atexit
import contextlib
import queue
import signal
import threading
from collections import deque
from dataclasses import dataclass, replace
from multiprocessing.connection import Connection
from pathlib import Path
from typing import TYPE_CHECKING

from preview.circuit.netlist import Netlist
from preview.engine.door import start_child
from preview.engine.messages import ClearHolds, Command, Notice, Quit, Report, Snapshot
from preview.meters.reading import LevelReading
from preview.session import Session

if TYPE_CHECKING:
    from multiprocessing.context import SpawnProcess

__all__ = ["EngineConfig", "EngineProcess"]

START_VOLUME_DB = -20.0


@dataclass(frozen=True, slots=True)
class EngineConfig:
    """What an engine is started with."""

    session: Session
    """What is heard, through what, at which levels."""
    device: str | None = None
    """Sound device by name; None for the default."""
    silent: bool = False
    """Run on the silent clock, without a device."""
    start_volume_db: float = START_VOLUME_DB
    """Listening volume at the start [dB]."""
    block_frames: int | None = None
    """Frames a block; None lets the device choose."""
    play: bool = False
    """Whether it plays at once."""
    start_frame: int = 0
    """Frame of the recording to begin at."""
    region: tuple[int, int] | None = None
    """Loop region to begin with."""
    letter: str = "A"
    """The letter of the session's circuit among the candidates."""
    candidates: tuple[tuple[str, Netlist], ...] = ()
    """Further candidates, by letter."""
    match: bool = False
    """Whether candidates are heard at matched loudness."""
    log: Path | None = None
    """File for what the audio libraries write; None for the person's log folder."""


class EngineProcess:
    """A running engine. No method but ``close`` waits. Made by ``start``, or by ``spawn`` and ``begin``.

    Parameters
    ----------
    process : SpawnProcess
        From :func:`~preview.engine.door.start_child`.
    connection : Connection
        The pipe to it.
    """

    def __init__(self, process: SpawnProcess, connection: Connection) -> None:
        self._process = process
        self._connection = connection
        self._unread: Snapshot | None = None
        self._notices: deque[Notice] = deque()
        self._reports: dict[type[Report], Report] = {}
        self._guard = threading.Lock()
        self._orders: queue.SimpleQueue[EngineConfig | Command | None] = queue.SimpleQueue()
        self._closed = False
        self._begun = False
        self.heard_ready = threading.Event()
        """Set once it has said that every candidate can be heard, and when it has ended."""
        self._reader = threading.Thread(target=self._listen, name="engine-reader", daemon=True)
        self._reader.start()
        threading.Thread(target=self._speak, name="engine-writer", daemon=True).start()
        atexit.register(self.close)  # not a daemon, as it has a worker of its own: nobody else would end it

    @classmethod
    def start(cls, config: EngineConfig) -> EngineProcess:
        """Start an engine process; returns at once, its first snapshot follows within a second or two."""
        engine = cls.spawn()
        engine.begin(config)
        return engine

    @classmethod
    def spawn(cls) -> EngineProcess:
        """Start the process alone: it loads its libraries and waits for ``begin``. Returns at once."""
        return cls(*start_child())

    def begin(self, config: EngineConfig) -> None:
        """Tell a process that was only spawned what to begin with; once, before anything is sent."""
        self._begun = True
        self._orders.put(config)

    @property
    def alive(self) -> bool:
        """Whether the engine still runs."""
        return not self._closed and self._process.is_alive()

    @property
    def ending(self) -> str:
        """How it has ended, in words; empty while it runs and when it was told to."""
        code = self._process.exitcode
        if code is None or code == 0 or self._closed:
            return ""
        if code > 0:
            return f"the engine ended with code {code}"
        try:
            name = signal.Signals(-code).name
        except ValueError:
            name = str(-code)
        return f"the engine was ended by signal {name}"

    @property
    def pid(self) -> int | None:
        """Process id of the engine."""
        return self._process.pid

    def send(self, command: Command) -> None:
        """Hand over a command; dropped without an error when the engine has stopped."""
        if not self._closed:
            self._orders.put(command)

    def latest(self) -> Snapshot | None:
        """The newest snapshot, None if there is none since the last call; its peaks reach back to there."""
        with self._guard:
            snapshot, self._unread = self._unread, None
        return snapshot

    def notices(self) -> list[Notice]:
        """Notices since the last call, oldest first."""
        with self._guard:
            told = list(self._notices)
            self._notices.clear()
        return told

    def reports(self) -> list[Report]:
        """What was found out since the last call, the newest of each kind."""
        with self._guard:
            told = list(self._reports.values())
            self._reports.clear()
        return told

    def close(self, timeout_s: float = 2.0) -> None:
        """Fade out and end the engine, by force if it does not answer; a second call does nothing."""
        if self._closed:
            return
        self._closed = True
        atexit.unregister(self.close)
        self._orders.put(Quit())
        self._orders.put(None)
        self._process.join(timeout_s if self._begun else 0.0)
        for force in (self._process.terminate, self._process.kill):
            if self._process.is_alive():
                force()
                self._process.join(1.0)
        self._reader.join(1.0)  # it has read to the end; closed under its hands it would fail
        self._connection.close()

    def _listen(self) -> None:
        """Take in what the engine says until it falls silent."""
        with contextlib.suppress(EOFError, OSError):
            while True:
                message = self._connection.recv()
                with self._guard:
                    if isinstance(message, Snapshot):
                        self._unread = _with_peaks_of(message, self._unread)
                    elif isinstance(message, Notice):
                        self._notices.append(message)
                    elif isinstance(message, Report):
                        self._reports[type(message)] = message
                if isinstance(message, Snapshot) and all(one.ready for one in message.candidates):
                    self.heard_ready.set()
        self.heard_ready.set()

    def _speak(self) -> None:
        """Send the orders on; a full pipe makes this thread wait, not the desk."""
        with contextlib.suppress(OSError, ValueError):
            while (command := self._orders.get()) is not None:
                if isinstance(command, ClearHolds):
                    with self._guard:
                        self._unread = None
                self._connection.send(command)


def _with_peaks_of(new: Snapshot, unread: Snapshot | None) -> Snapshot:
    """The new snapshot; its peaks not below those of one that nobody has read."""
    if unread is None:
        return new
    opamp_peaks_v = new.opamp_peaks_v
    if len(opamp_peaks_v) == len(unread.opamp_peaks_v):
        opamp_peaks_v = tuple(map(max, opamp_peaks_v, unread.opamp_peaks_v))
    return replace(
        new,
        input=_higher_peaks(new.input, unread.input),
        output=_higher_peaks(new.output, unread.output),
        opamp_peaks_v=opamp_peaks_v,
    )


def _higher_peaks(new: LevelReading, old: LevelReading) -> LevelReading:
    if len(new.peak_v) != len(old.peak_v):
        return new
    return replace(new, peak_v=tuple(map(max, new.peak_v, old.peak_v)))
