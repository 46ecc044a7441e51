"""The engine's own process: holds the player and its output, takes commands, tells what it reads.

The audio thread belongs to the device (or the silent clock) and only runs ``Player.fill``. Here, on the main
thread, commands are taken from the pipe, snapshots sent about 30 times a second, and the output is watched.
"""

from __future__ import annotations

import contextlib
import gc
import signal
import sys
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from multiprocessing.connection import Connection

from preview.audio.signals import ENDLESS_FRAMES
from preview.circuit.netlist import Netlist
from preview.engine import messages
from preview.engine.attention import Attention
from preview.engine.bench import Bench
from preview.engine.errands import Errands
from preview.engine.intake import Intake, open_file, open_live, open_session, open_signal
from preview.engine.logfile import write_to_log
from preview.engine.messages import Command, InputKind, Notice, Snapshot
from preview.engine.orders import change_circuit, change_playing
from preview.engine.outlet import Outlet
from preview.engine.overload import Overload
from preview.engine.player import Player
from preview.engine.preparer import Preparer
from preview.engine.process import EngineConfig
from preview.errors import PreviewError
from preview.meters.level import LevelMeter
from preview.session import AtEnd
from preview.values.quality import Quality

__all__ = ["Host", "run"]

TURN_S = 1.0 / 30.0
FADE_WAIT_S = 0.15
SETTLE_S = 0.15
WARM_SETTLE_S = 0.05
PATIENCE_S = 3.0
LATENCY_WAIT_S = 0.25
LIVE_MUTE = "live input begins muted: lower the volume, then end the mute"


def run(connection: Connection, config: EngineConfig, *, warm: bool = False) -> None:
    """Run an engine until the desk says quit or is gone; ``warm`` says that its kernels are loaded."""
    sys.setswitchinterval(0.0005)
    write_to_log(config.log)
    host = Host(connection, config, settle_s=WARM_SETTLE_S if warm else SETTLE_S)
    with contextlib.suppress(ValueError):  # not the main thread
        signal.signal(signal.SIGTERM, lambda *_: host.end())
    try:
        host.live()
    finally:
        host.close()


@dataclass(frozen=True, slots=True)
class _Setup:
    """What stays when the recording changes."""

    netlists: dict[str, Netlist]
    letter: str
    quality: Quality
    full_scale_v: float
    at_end: AtEnd
    volume_db: float
    bypass: bool


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
        self._intake: Intake | None = None
        self._preparer: Preparer | None = None
        self._bench: Bench | None = None
        self._errands = Errands(self._tell)
        self._attention: Attention | None = None
        self._overload = Overload()
        self._damage_told = self._collected = self._asked_for_patience = self._ended = False
        self._began_s = time.monotonic()

    def live(self) -> None:
        """Serve until told to quit or until the desk is gone."""
        config, session = self._config, self._config.session
        setup = _Setup(
            {**dict(config.candidates), config.letter: session.netlist()},
            config.letter,
            session.quality,
            session.full_scale.volts,
            session.at_end,
            config.start_volume_db,
            bypass=False,
        )
        loop = session.at_end is AtEnd.LOOP
        if self._open(lambda: open_session(session, loop=loop, output_device=config.device), setup):
            self._begin(config)
        next_turn_s = time.monotonic()
        while not self._ended:
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

    def end(self) -> None:
        """Leave ``live`` at the next turn."""
        self._ended = True

    def close(self) -> None:
        """Fade out and let go of everything."""
        self._fade_out()
        self._outlet.close()
        self._let_go()
        self._errands.close()
        with contextlib.suppress(OSError):
            self._connection.close()

    def _begin(self, config: EngineConfig) -> None:
        player = self._player
        assert player is not None
        if config.region is not None:
            player.set_region(*config.region)
        if config.start_frame:
            player.seek(config.start_frame)
        self._errands.matcher.on = config.match
        if config.play:
            player.play()

    def _tell(self, text: str, severity: str = "information") -> None:
        self._untold.append(Notice(text, severity))

    # -- a turn

    def _turn(self) -> None:
        """Send what there is to tell and look after the output."""
        player, intake, preparer = self._player, self._intake, self._preparer
        if player is not None and intake is not None and preparer is not None:
            while player.faults:
                self._tell(player.faults.popleft(), "error")
            if intake.error is not None and not self._damage_told:
                self._damage_told = True
                self._tell(str(intake.error), "error")
            if self._attention is not None:
                self._untold.extend(Notice(text, "warning") for text in self._attention.turn())
            snapshot = player.snapshot
            if snapshot is not None:
                player.snapshot = None
                if self._collected and (said := self._overload.look(snapshot)):
                    self._tell(said, "warning")
                self._connection.send(self._whole(snapshot, intake, preparer))
                if self._collected and self._errands.look(snapshot, preparer):
                    self._apply_match()
        for report in self._errands.reports():
            self._connection.send(report)
        waited_s = time.monotonic() - self._began_s
        if waited_s > PATIENCE_S and not (self._collected or self._asked_for_patience):
            self._asked_for_patience = True
            self._tell("preparing the computation; the first start on a machine takes longest")
        while self._untold:
            self._connection.send(self._untold.popleft())
        self._outlet.watch()
        if self._errands.comeback.due(self._outlet.stood_in_for, time.monotonic()):
            self._fade_out(pause=False)
            self._outlet.open_anew()

    def _whole(self, snapshot: Snapshot, intake: Intake, preparer: Preparer) -> Snapshot:
        """The player's snapshot with what the player does not know."""
        live = intake.kind is InputKind.LIVE
        in_s = self._outlet.live_latency_s
        return replace(
            snapshot,
            frames=0 if snapshot.frames >= ENDLESS_FRAMES else snapshot.frames,
            input_kind=intake.kind,
            input_name=(self._outlet.input_name or intake.name) if live else intake.name,
            live_latency_s=in_s + snapshot.latency_s if live and in_s else 0.0,
            spectrum=self._attention.spectrum if self._attention is not None else None,
            letter=preparer.letter,
            match=self._errands.matcher.on,
            candidates=self._errands.candidates(preparer),
        )

    # -- commands

    def _obey(self, command: Command) -> None:
        player, preparer, bench = self._player, self._preparer, self._bench
        match command:
            case messages.OpenFile(path):
                self._open_another(lambda: open_file(path, loop=True))
            case messages.UseSignal(stimulus):
                self._open_another(lambda: open_signal(stimulus))
            case messages.UseLive(device):
                self._open_another(lambda: open_live(device, self._outlet.device))
            case messages.SetDevice(name):
                self._fade_out(pause=False)
                self._errands.comeback.forget()
                self._outlet.change_device(name)
            case messages.RescanDevices():
                self._errands.list_devices()
            case messages.ProbeNodes(on):
                self._errands.probing = on
            case messages.CancelExport():
                self._errands.cancel_export()
            case messages.Export() if player is not None:
                recorder = self._errands.export(command)
                if recorder is not None:
                    player.record(recorder.take)
            case _ if player is None or preparer is None or bench is None:
                pass
            case (
                messages.SetPart()
                | messages.SetCircuit()
                | messages.SetQuality()
                | messages.KeepCandidate()
                | messages.SelectCandidate()
                | messages.DropCandidate()
                | messages.ListenNull()
            ):
                change_circuit(command, preparer, bench)
            case messages.SetMatch(on):
                self._errands.matcher.on = on
                self._apply_match()
            case _:
                change_playing(command, player)

    def _apply_match(self) -> None:
        if self._bench is not None:
            self._bench.hand_over(self._bench.set_gains(self._errands.matcher.gains()))

    # -- what is heard

    def _open_another(self, open_intake: Callable[[], Intake | None]) -> None:
        """Replace the input; circuit, levels and settings stay."""
        old, preparer, intake = self._player, self._preparer, self._intake
        if old is None or preparer is None or intake is None:
            return
        setup = _Setup(
            preparer.netlists,
            preparer.letter,
            preparer.quality,
            old.deck.full_scale_v,
            AtEnd.LOOP if old.deck.head.reader.loop or intake.kind is not InputKind.FILE else AtEnd.STOP,
            old.deck.monitor.volume_db,
            old.deck.bypass,
        )
        self._open(open_intake, setup)

    def _open(self, open_intake: Callable[[], Intake | None], setup: _Setup) -> bool:
        """Open an input; it waits at its start. What cannot be opened is told, and the old one stays."""
        try:
            intake = open_intake()
        except PreviewError as error:
            self._tell(str(error), "error")
            return False
        if intake is None:
            return False
        self._fade_out()
        self._let_go()
        for warning in intake.warnings:
            self._tell(f"{intake.name}: {warning}", "warning")
        rate, channels = intake.sample_rate_hz, intake.channels
        player = Player(
            intake.reader,
            sample_rate_hz=rate,
            channels=channels,
            full_scale_v=setup.full_scale_v,
            meters=(LevelMeter(rate, channels), LevelMeter(rate, channels)),
            volume_db=setup.volume_db,
            settle_s=self._settle_s,
            in_volts=intake.stimulus is not None,
        )
        player.set_bypass(setup.bypass)
        player.set_at_end(setup.at_end)
        session = self._config.session
        bench = Bench(player, self._first_circuit_ready, noise=session.noise, power_on=session.power_on)
        preparer = Preparer(
            bench,
            netlists=setup.netlists,
            letter=setup.letter,
            quality=setup.quality,
            complain=lambda text: self._tell(text, "error"),
        )
        self._player, self._intake, self._preparer, self._bench = player, intake, preparer, bench
        self._damage_told = False
        self._attention = Attention(player, live=intake.inlet is not None)
        if intake.inlet is not None:
            player.mute(True, LIVE_MUTE)
            player.play()
        self._errands.begin(intake)
        self._outlet.play(player, intake.inlet)
        preparer.start()
        if setup.at_end is AtEnd.LOOP and intake.reader.frames < player.deck.loop_min_frames:
            self._tell("shorter than 10 ms: it is played once, as a loop of it would be no sound", "warning")
        return True

    def _first_circuit_ready(self) -> None:
        """Everything is loaded: from here on no garbage collection may stall the audio thread."""
        if not self._collected:
            self._collected = True
            gc.collect()
            gc.freeze()
            gc.disable()

    def _let_go(self) -> None:
        self._outlet.play(None)
        if self._preparer is not None:
            self._preparer.end()
        if self._intake is not None:
            self._intake.reader.close()
        self._player = self._intake = self._preparer = self._bench = None

    def _fade_out(self, *, pause: bool = True) -> None:
        """Pause or wait, until it is silent at the device, or the output is not running."""
        player = self._player
        if player is None or (player.silent and not player.inbox):
            return
        if pause:
            player.pause()
        else:
            player.hold()
        deadline_s = time.monotonic() + FADE_WAIT_S
        while (player.inbox or not player.silent) and time.monotonic() < deadline_s:
            time.sleep(0.002)
        time.sleep(min(player.latency_s, LATENCY_WAIT_S))  # the faded end is still on its way to the ear
