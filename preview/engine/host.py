"""The engine's own process: holds the player and its output, takes commands, tells what it reads.

The audio thread belongs to the device (or the silent clock) and only runs ``Player.fill``. Here, on the main
thread, commands are taken from the pipe, snapshots sent about 30 times a second, and the output is watched.
"""

from __future__ import annotations

import contextlib
import gc
import os
import signal
import sys
import time
from collections import deque
from collections.abc import Callable, Mapping
from multiprocessing.connection import Connection
from pathlib import Path
from typing import TYPE_CHECKING

import platformdirs

from preview.audio.prefetch import Prefetch
from preview.audio.source import FileSource
from preview.circuit.netlist import Netlist
from preview.engine import messages
from preview.engine.messages import Command, Notice
from preview.engine.outlet import Outlet
from preview.engine.player import Player
from preview.engine.preparer import Preparer
from preview.engine.process import EngineConfig
from preview.errors import PreviewError
from preview.meters.level import LevelMeter
from preview.session import AtEnd
from preview.values.quality import Quality

if TYPE_CHECKING:
    from preview.dsp.chain import Chain

__all__ = ["Host", "run"]

TURN_S = 1.0 / 30.0
FADE_WAIT_S = 0.15
SETTLE_S = 0.15
WARM_SETTLE_S = 0.05
PATIENCE_S = 3.0
LATENCY_WAIT_S = 0.25
LOG_BYTES_MAX = 1 << 20


def run(connection: Connection, config: EngineConfig, *, warm: bool = False) -> None:
    """Run an engine until the desk says quit or is gone; ``warm`` says that its kernels are loaded."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is for the desk, which then says quit
    sys.setswitchinterval(0.0005)
    _write_to_log(config.log)
    host = Host(connection, config, settle_s=WARM_SETTLE_S if warm else SETTLE_S)
    try:
        host.live()
    finally:
        host.close()


def _write_to_log(log: Path | None) -> None:
    """Point stdout and stderr at a file: the audio libraries write there and would wreck the desk."""
    try:
        if log is None:
            folder = platformdirs.user_log_path("preview", appauthor=False, ensure_exists=True)
            log = folder / "engine.log"
        too_long = log.exists() and log.stat().st_size > LOG_BYTES_MAX
        flags = os.O_WRONLY | os.O_CREAT | (os.O_TRUNC if too_long else os.O_APPEND)
        target = os.open(log, flags, 0o600)
    except OSError:
        target = os.open(os.devnull, os.O_WRONLY)
    for stream in (1, 2):
        os.dup2(target, stream)
    os.close(target)


class _Bench:
    """Builds circuits for one player; called on the preparer's thread."""

    def __init__(self, player: Player, ready: Callable[[], None]) -> None:
        self._player = player
        self._ready = ready
        self._chain: Chain | None = None
        self._handed_over = 0
        self._taken = 0

    def build(self, netlist: Netlist, quality: Quality) -> Callable[[], None]:
        """Compute and warm a circuit."""
        from preview.dsp.chain import Chain
        from preview.dsp.oversample import design, factor_for
        from preview.dsp.stage import StageProcessor, load_kernels

        player = self._player
        processor = StageProcessor(
            netlist, sample_rate_hz=player.sample_rate_hz, channels=player.channels, quality=quality
        )
        chain = self._chain
        if chain is not None:

            def swap() -> None:
                chain.swap(processor)
                player.circuit_changed(quality)

            return swap
        first = self._chain = Chain(processor)
        for each in Quality:  # designed now and kept: while it plays, that would take the device's blocks
            design(factor_for(each, player.sample_rate_hz))
        load_kernels()  # likewise
        self._ready()
        return lambda: player.take_circuit(first, quality)

    def plan(self, values: Mapping[str, float]) -> Callable[[], None]:
        """Plan a glide of the running circuit."""
        assert self._chain is not None
        processor = self._chain.processor
        glide = processor.plan(values)
        return lambda: processor.glide(glide)

    def settled(self) -> bool:
        """Whether the running circuit can take another glide or circuit."""
        if self._taken != self._handed_over:
            return False
        return self._chain is None or (self._chain.processor.ready and not self._chain.swapping)

    def hand_over(self, start: Callable[[], None]) -> None:
        """Have a call made on the audio thread."""

        def take() -> None:
            self._taken += 1
            start()

        self._handed_over += 1
        self._player.inbox.append(take)


class Host:
    """One engine.

    Parameters
    ----------
    connection : Connection
        Pipe to the desk.
    config : EngineConfig
        What to begin with.
    settle_s : float
        Silence after the first circuit has come, in which the device gets over the stalls of loading [s].
    """

    def __init__(self, connection: Connection, config: EngineConfig, *, settle_s: float = SETTLE_S) -> None:
        self._connection = connection
        self._config = config
        self._settle_s = settle_s
        self._untold: deque[Notice] = deque()
        self._outlet = Outlet(
            device=config.device, silent=config.silent, block_frames=config.block_frames, tell=self._tell
        )
        self._player: Player | None = None
        self._reader: Prefetch | None = None
        self._preparer: Preparer | None = None
        self._reader_error = False
        self._collected = False
        self._began_s = time.monotonic()
        self._asked_for_patience = False

    def live(self) -> None:
        """Serve until told to quit or until the desk is gone."""
        session = self._config.session
        if session.audio is not None:
            self._open(
                session.audio,
                netlist=session.netlist(),
                quality=session.quality,
                full_scale_v=session.full_scale.volts,
                at_end=session.at_end,
                volume_db=self._config.start_volume_db,
                bypass=False,
            )
            if self._config.play and self._player is not None:
                self._player.play()
        next_turn_s = time.monotonic()
        while True:
            wait_s = max(next_turn_s - time.monotonic(), 0.0)
            try:
                while self._connection.poll(wait_s):
                    command = self._connection.recv()
                    if isinstance(command, messages.Quit):
                        return
                    self._obey(command)
                    wait_s = max(next_turn_s - time.monotonic(), 0.0)
                if time.monotonic() >= next_turn_s:
                    next_turn_s = max(next_turn_s + TURN_S, time.monotonic())
                    self._turn()
            except (EOFError, OSError):
                return

    def close(self) -> None:
        """Fade out and let go of everything."""
        self._fade_out()
        self._outlet.close()
        self._close_file()
        with contextlib.suppress(OSError):
            self._connection.close()

    def _tell(self, text: str, severity: str = "information") -> None:
        self._untold.append(Notice(text, severity))

    def _turn(self) -> None:
        """Send what there is to tell and look after the output."""
        player = self._player
        if player is not None:
            while player.faults:
                self._tell(player.faults.popleft(), "error")
            if self._reader is not None and self._reader.error is not None and not self._reader_error:
                self._reader_error = True
                self._tell(str(self._reader.error), "error")
            snapshot = player.snapshot
            if snapshot is not None:
                player.snapshot = None
                self._connection.send(snapshot)
        waited_s = time.monotonic() - self._began_s
        if waited_s > PATIENCE_S and not (self._collected or self._asked_for_patience):
            self._asked_for_patience = True
            self._tell("preparing the computation; the first start on a machine takes longest")
        while self._untold:
            self._connection.send(self._untold.popleft())
        self._outlet.watch()

    def _obey(self, command: Command) -> None:
        player, preparer = self._player, self._preparer
        if isinstance(command, messages.OpenFile):
            self._open_another(command.path)
            return
        if player is None or preparer is None:
            return
        match command:
            case messages.SetPart(designator, value):
                preparer.set_part(designator, value)
            case messages.SetCircuit(netlist):
                preparer.set_circuit(netlist)
            case messages.SetQuality(quality):
                preparer.set_quality(quality)
            case messages.SetFullScale(full_scale_v):
                player.set_full_scale(full_scale_v)
            case messages.Play():
                player.play()
            case messages.Pause():
                player.pause()
            case messages.Seek(frame):
                player.seek(frame)
            case messages.SetRegion(start, end):
                player.set_region(start, end)
            case messages.SetAtEnd(at_end):
                player.set_at_end(at_end)
            case messages.SetBypass(on):
                player.set_bypass(on)
            case messages.SetVolume(volume_db):
                player.set_volume(volume_db)
            case messages.ClearHolds():
                player.clear_holds()

    def _open_another(self, path: Path) -> None:
        """Replace the recording; circuit, levels and settings stay."""
        old, preparer = self._player, self._preparer
        if old is None or preparer is None:
            return
        self._fade_out()
        self._open(
            path,
            netlist=preparer.netlist,
            quality=preparer.quality,
            full_scale_v=old.full_scale_v,
            at_end=AtEnd.LOOP if self._reader is not None and self._reader.loop else AtEnd.STOP,
            volume_db=old.volume_db,
            bypass=old.bypass,
        )

    def _open(
        self,
        path: Path,
        *,
        netlist: Netlist,
        quality: Quality,
        full_scale_v: float,
        at_end: AtEnd,
        volume_db: float,
        bypass: bool,
    ) -> None:
        """Open a recording; it waits at its start. What cannot be opened is told, and the old one stays."""
        try:
            source = FileSource(path)
        except PreviewError as error:
            self._tell(str(error), "error")
            return
        self._close_file()
        for warning in source.warnings:
            self._tell(f"{path.name}: {warning}", "warning")
        rate, channels = source.sample_rate_hz, source.channels
        reader = Prefetch(source, loop=at_end is AtEnd.LOOP)
        player = Player(
            reader,
            sample_rate_hz=rate,
            channels=channels,
            full_scale_v=full_scale_v,
            meters=(LevelMeter(rate, channels), LevelMeter(rate, channels)),
            quality=quality,
            volume_db=volume_db,
            settle_s=self._settle_s,
        )
        player.set_bypass(bypass)
        preparer = Preparer(
            _Bench(player, self._first_circuit_ready),
            netlist=netlist,
            quality=quality,
            complain=lambda text: self._tell(text, "error"),
        )
        self._player, self._reader, self._preparer = player, reader, preparer
        self._reader_error = False
        self._outlet.play(player)
        preparer.start()

    def _first_circuit_ready(self) -> None:
        """Everything is loaded: from here on no garbage collection may stall the audio thread."""
        if not self._collected:
            self._collected = True
            gc.collect()
            gc.freeze()
            gc.disable()

    def _close_file(self) -> None:
        self._outlet.play(None)
        if self._preparer is not None:
            self._preparer.end()
        if self._reader is not None:
            self._reader.close()
        self._player = self._reader = self._preparer = None

    def _fade_out(self) -> None:
        """Pause, and wait until it is silent at the device, or the output is not running."""
        player = self._player
        if player is None or (player.silent and not player.inbox):
            return
        player.pause()
        deadline_s = time.monotonic() + FADE_WAIT_S
        while (player.inbox or not player.silent) and time.monotonic() < deadline_s:
            time.sleep(0.002)
        time.sleep(min(player.latency_s, LATENCY_WAIT_S))  # the faded end is still on its way to the ear
