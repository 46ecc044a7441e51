"""The state behind the desk: what is heard, chosen and shown. No screen in here.

The actions of :mod:`preview.ui.actions` are the ``do_`` methods of the desk and of its rooms: ``parts``,
``listening`` and so on. Each tells the engine and answers with an :data:`~preview.ui.asking.Outcome`.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace

from preview.circuit.netlist import OUT, Netlist, OpAmpSite
from preview.circuit.parts import Stage
from preview.engine.messages import (
    ClipMarks,
    Command,
    DeviceList,
    NodePeaks,
    Overview,
    ProbeNodes,
    Report,
    Snapshot,
)
from preview.engine.process import EngineConfig
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.asking import Outcome
from preview.ui.candidates import Candidates
from preview.ui.changes import catching_up, commands_between
from preview.ui.clips import Clips
from preview.ui.connections import Connections
from preview.ui.figures import FigureSet
from preview.ui.history import History
from preview.ui.keeping import Keeping
from preview.ui.keymap import KeyMap
from preview.ui.link import EngineLink
from preview.ui.listening import Listening
from preview.ui.partwork import PartWork
from preview.ui.questions import Questions
from preview.ui.stagewatch import StageWatch
from preview.ui.stagework import StageWork
from preview.ui.view import View

__all__ = ["Desk"]


def _place(session: Session) -> tuple[str, ...]:
    """Which stage a session is about."""
    return session.stage.opened_as


class Desk:
    """What the desk knows.

    Parameters
    ----------
    session : Session
        As it is opened.
    link : EngineLink
        The engine, already running this session.
    keys : KeyMap, optional
        The keys in force, which messages name.
    now_s : callable
        A clock [s]; for tests.
    """

    def __init__(
        self,
        session: Session,
        link: EngineLink,
        *,
        keys: KeyMap | None = None,
        now_s: Callable[[], float] = time.monotonic,
    ) -> None:
        self.keys = keys or KeyMap()
        self.session = session
        self.link = link
        self.now_s = now_s
        self.before: Session = session
        self.history = History()
        self.snapshot: Snapshot | None = None
        self.figures = FigureSet()
        self.overview: Overview | None = None
        self.marks: ClipMarks | None = None
        self.node_peaks: NodePeaks | None = None
        """Peaks at the inner nodes of what is heard; None as long as they are not known."""
        self.marks_old = False
        """Whether the circuit has been changed since the clips were looked for."""
        self.stopped = False
        self.unanswered = False
        self._before: dict[tuple[str, ...], Session] = {_place(session): session}
        self._circuit: tuple[Session, Netlist | None] | None = None
        self.parts = PartWork(self)
        self.listening = Listening(self)
        self.view = View(self)
        self.clips = Clips(self)
        self.candidates = Candidates(self)
        self.connections = Connections(self)
        self.keeping = Keeping(self)
        self.stage_watch = StageWatch(self)
        self._rooms = (
            *(self, self.parts, self.listening, self.view, self.clips, self.candidates),
            *(self.connections, self.keeping, StageWork(self), Questions(self)),
        )

    # ---- actions ----

    def method(self, name: str) -> Callable[[], Outcome] | None:
        """The method that carries the action of that name out; None where it needs a screen."""
        for room in self._rooms:
            found: Callable[[], Outcome] | None = getattr(room, f"do_{name}", None)
            if found is not None:
                return found
        return None

    # ---- what the engine says ----

    def take(self, snapshot: Snapshot) -> None:
        """The newest word of the engine."""
        self.snapshot = snapshot
        self.listening.take(snapshot)
        self.candidates.take(snapshot)
        self.connections.take(snapshot)

    def hear_report(self, report: Report) -> str | None:
        """What the engine has found out; a line about it, where a person should read one."""
        if isinstance(report, Overview):
            self.overview = report
        elif isinstance(report, ClipMarks):
            self.marks, self.marks_old = report, False
        elif isinstance(report, NodePeaks):
            self.node_peaks = report
        elif isinstance(report, DeviceList):
            return self.connections.hear_devices(report)
        else:
            return self.keeping.hear_export(report)
        return None

    def as_left(self) -> EngineConfig:
        """What an engine begins with to be where this desk is; it waits at the playhead."""
        return EngineConfig(
            session=replace(self.session, power_on=False),
            start_volume_db=self.listening.volume_db,
            start_frame=self.listening.position_frame,
            region=self.listening.region,
            letter=self.candidates.letter,
            candidates=self.candidates.others(),
            match=self.candidates.matched,
        )

    def resume(self, link: EngineLink, began: EngineConfig) -> str:
        """Work with a new engine, which began as the old one was left; what was done since is told it.

        What went with the old one, in a line; empty for nothing.
        """
        for command in catching_up(began, self.as_left()):
            link.send(command)
        self.link = link
        self.stopped = self.unanswered = False
        if self.view.node_volts:
            link.send(ProbeNodes(True))
        self.connections.resume(link)
        self.listening.resume(link)
        return self.keeping.break_off()

    # ---- the session ----

    def change(self, session: Session) -> None:
        """Make this the session; the engine follows. Raises CircuitError and leaves all as it was."""
        if session == self.session:
            return
        commands = commands_between(self.session, session)
        self.history.note(self.session)
        self._become(session, commands)

    def adopt(self, session: Session, history: History) -> None:
        """A session that the engine has ready already, with what can be taken back in it."""
        self.history = history
        self._become(session, [])

    def open_stage(self, stage: Stage) -> str:
        """Another stage on its own supply; its values are the new 'before'."""
        self._before.pop(stage.opened_as, None)
        self.change(self.session.with_stage(stage))
        return stage.about

    def rejoin(self, changed: Callable[[Stage], Stage]) -> None:
        """Another chain of stages, its parts as they are set and as they were before, on the rails in force."""
        now, before = self.session, self.before
        stage = changed(now.stage)
        self.change(replace(now.with_stage(stage), supply=now.supply))
        self.before = replace(before.with_stage(changed(before.stage)), supply=before.supply)
        self._before[stage.opened_as] = self.before

    def _become(self, session: Session, commands: list[Command]) -> None:
        for command in commands:
            self.link.send(command)
        self.marks_old, self.node_peaks = True, None
        here = _place(session)
        if here != _place(self.session):
            self.before = self._before.setdefault(here, session)
            self.parts.forget()
        self.session = session

    def do_mark_before(self) -> str:
        """The values now become 'before'."""
        self.before = self._before[_place(self.session)] = self.session
        return "these values are the new 'before'"

    def do_undo(self) -> str:
        """Take back the last change."""
        now, session = self.session, self.history.last
        if session is None:
            return "nothing to take back"
        self._restore(session)
        self.history.back(now)
        return "taken back"

    def do_redo(self) -> str:
        """Make a change again."""
        now, session = self.session, self.history.undone
        if session is None:
            return "nothing to make again"
        self._restore(session)
        self.history.forward(now)
        return "made again"

    def _restore(self, session: Session) -> None:
        """A session from the history; quality and end are not the circuit's and stay."""
        session = replace(session, quality=self.session.quality, at_end=self.session.at_end)
        self._become(session, commands_between(self.session, session))

    # ---- for the screen ----

    @property
    def file_name(self) -> str:
        """Recording, test signal or live input in words, not yet cleaned."""
        session, snapshot = self.session, self.snapshot
        if session.live:
            return f"live input {snapshot.input_name if snapshot else ''}".strip()
        if session.stimulus is not None:
            return session.stimulus.text
        return session.audio.name if session.audio else "no recording"

    def circuit(self) -> Netlist | None:
        """The circuit of the session; None where it cannot be computed."""
        if self._circuit is None or self._circuit[0] is not self.session:
            try:
                found = self.session.netlist()
            except PreviewError:
                found = None
            self._circuit = (self.session, found)
        return self._circuit[1]

    def sites(self) -> tuple[OpAmpSite, ...]:
        """The op-amps with the limits that hold for them; none where the circuit cannot be computed."""
        circuit = self.circuit()
        return circuit.opamps if circuit is not None else ()

    def output_wall(self) -> tuple[float | None, str | None]:
        """The nearer limit of the op-amp that drives ``out`` [V], and its designator; None for no limit."""
        for site in self.sites():
            wall_v = self.wall_of(site)
            if site.out == OUT and wall_v is not None:
                return wall_v, site.designator
        return None, None

    def wall_of(self, site: OpAmpSite) -> float | None:
        """The nearer limit of an op-amp's output [V]; None for no limit.

        The limit on a rail of 0 V is no wall: the signal that reaches it is small, not large.
        """
        supply = self.session.supply
        walls = [site.high_v] * (supply.positive_v > 0.0) + [-site.low_v] * (supply.negative_v < 0.0)
        return min((wall_v for wall_v in walls if 0.0 < wall_v < math.inf), default=None)
