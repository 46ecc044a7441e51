"""A pretended engine that answers the desk's commands as the real one does, without sound or a process."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from preview.circuit.library import find_stage
from preview.circuit.opamp import OpAmpReading
from preview.circuit.parts import Stage
from preview.engine.messages import (
    CandidateReading,
    ClearHolds,
    Command,
    DropCandidate,
    KeepCandidate,
    ListenNull,
    Notice,
    Pause,
    Play,
    Report,
    Seek,
    SelectCandidate,
    SetAtEnd,
    SetBypass,
    SetCircuit,
    SetFullScale,
    SetMatch,
    SetQuality,
    SetRegion,
    SetVolume,
    Snapshot,
)
from preview.meters.reading import LevelReading
from preview.session import AtEnd, Session
from preview.ui.app import DeskApp
from preview.ui.desk import Desk
from preview.ui.figures import FigureJob, Figures
from preview.values.levels import parse_full_scale
from preview.values.quality import Quality

SILENCE = LevelReading((0.0, 0.0), (0.0, 0.0), (0.0, 0.0))


def two_in_a_row(stage: Stage) -> Stage:
    """The stage with a follower behind it."""
    first = stage.opamps[0]
    parts = tuple(
        replace(p, nodes=tuple("mid" if node == "out" else node for node in p.nodes)) for p in stage.valued
    )
    first = replace(first, out="mid")
    return replace(
        stage, parts=(*parts, first, replace(first, designator="U2", plus="mid", minus="out", out="out"))
    )


class FakeEngine:
    """Answers commands in its next snapshot; ``sent`` keeps what was asked."""

    def __init__(self, *, frames: int = 600_000, sample_rate_hz: float = 48_000.0) -> None:
        self.sent: list[Command] = []
        self.alive = True
        self.closed = False
        self.waiting: list[Notice] = []
        self.found: list[Report] = []
        self.snapshot: Snapshot | None = Snapshot(
            playing=False,
            position_frame=0,
            frames=frames,
            sample_rate_hz=sample_rate_hz,
            region=None,
            at_end=AtEnd.LOOP,
            input=SILENCE,
            output=SILENCE,
            opamps=(OpAmpReading("U1", 0.0, 0.0, 0.0, math.inf, 0, 0.0, 0.0),),
            bypass=False,
            volume_db=-20.0,
            quality=Quality.STANDARD,
            full_scale_v=8.70143,
            limited_blocks=0,
            dropouts=0,
            load_ratio=0.04,
            latency_s=0.03,
            output_name="silent clock",
            gliding=False,
            candidates=(CandidateReading("A", True, None, 0.0),),
        )
        self._new = True

    def say(self, **fields: object) -> None:
        """Change the next snapshot."""
        assert self.snapshot is not None
        self.snapshot = replace(self.snapshot, **fields)  # type: ignore[arg-type]  # fields by name
        self._new = True

    def send(self, command: Command) -> None:
        """Take a command and answer it in the next snapshot."""
        self.sent.append(command)
        match command:
            case Play():
                self.say(playing=True)
            case Pause():
                self.say(playing=False)
            case Seek(frame):
                self.say(position_frame=frame)
            case SetRegion(start, end):
                self.say(region=None if start is None or end is None else (start, end))
            case SetAtEnd(at_end):
                self.say(at_end=at_end)
            case SetBypass(on):
                self.say(bypass=on)
            case SetVolume(volume_db):
                self.say(volume_db=volume_db)
            case SetQuality(quality):
                self.say(quality=quality)
            case SetFullScale(full_scale_v):
                self.say(full_scale_v=full_scale_v)
            case SetCircuit(netlist):
                self.say(opamps=tuple(_quiet(site.designator) for site in netlist.opamps))
            case ClearHolds():
                self.say(dropouts=0, limited_blocks=0)
            case SetMatch(on):
                self.say(match=on)
            case ListenNull(pair):
                self.say(null=pair)
            case KeepCandidate(letter):
                others = [c for c in self._candidates if c.letter != letter]
                self.say(candidates=(*others, CandidateReading(letter, True, None, 0.0)))
            case SelectCandidate(letter):
                self.say(letter=letter, null=None)
            case DropCandidate(letter):
                self.say(candidates=tuple(c for c in self._candidates if c.letter != letter))

    @property
    def _candidates(self) -> tuple[CandidateReading, ...]:
        assert self.snapshot is not None
        return self.snapshot.candidates

    def latest(self) -> Snapshot | None:
        """The newest snapshot, once."""
        new, self._new = self._new, False
        return self.snapshot if new else None

    def notices(self) -> list[Notice]:
        """Those waiting."""
        waiting, self.waiting = self.waiting, []
        return waiting

    def reports(self) -> list[Report]:
        """Those waiting."""
        found, self.found = self.found, []
        return found

    def close(self) -> None:
        """End."""
        self.closed = True
        self.alive = False


def _quiet(designator: str) -> OpAmpReading:
    return OpAmpReading(designator, 0.0, 0.0, 0.0, math.inf, 0, 0.0, 0.0)


def first_order_figures(job: FigureJob) -> Figures:
    """A first-order low-pass from R1, R2 and C1, in closed form: quick and without the analysis room."""
    values = job.netlist.values
    corner_hz = 1.0 / (2.0 * math.pi * values.get("R2", 1e5) * values.get("C1", 1e-9))
    gain = values.get("R2", 1e5) / values.get("R1", 1e4)
    frequency_hz = np.geomspace(1.0, 1e6, 121)
    response = -gain / (1.0 + 1j * frequency_hz / corner_hz)
    return Figures(
        frequency_hz=frequency_hz,
        gain_db=20.0 * np.log10(np.abs(response)),
        phase_deg=np.degrees(np.angle(response)),
        corners_hz=(corner_hz,),
        passband_gain_db=20.0 * math.log10(gain),
        error_db=0.0004 if job.sample_rate_hz else None,
        sample_rate_hz=job.sample_rate_hz,
        quality=job.quality,
    )


def low_pass_session(audio: Path | None = Path("announcement.wav")) -> Session:
    """The bundled inverting low-pass on +18 dBu."""
    stage = find_stage("inverting-low-pass")
    return Session(
        audio=audio,
        stage=stage,
        supply=stage.supply,
        full_scale=parse_full_scale("+18 dBu"),
    )


@pytest.fixture(autouse=True)
def _faults_are_seen(monkeypatch: pytest.MonkeyPatch) -> None:
    """What a panel or an action cannot do fails the test instead of being said on the screen."""
    monkeypatch.setenv("PREVIEW_DEBUG", "1")


@pytest.fixture
def engine() -> FakeEngine:
    """A pretended engine that waits at the start of a 12.5 s stereo file."""
    return FakeEngine()


@pytest.fixture
def session() -> Session:
    """The bundled inverting low-pass on +18 dBu."""
    return low_pass_session()


@pytest.fixture
def two_opamps(session, engine) -> Desk:
    """A desk on a stage of two op-amps."""
    desk = Desk(replace(session, stage=two_in_a_row(session.stage)), engine)
    desk.take(engine.snapshot)
    return desk


MakeApp = Callable[..., DeskApp]


@pytest.fixture
def make_app(engine: FakeEngine, session: Session, tmp_path: Path) -> MakeApp:
    """Builds a desk on the pretended engine; the hearing caution counts as seen unless ``first_run``."""

    def build(*, first_run: bool = False, **options: object) -> DeskApp:
        if not first_run:
            (tmp_path / "hearing-caution-seen").touch()
        given = {"session": session, "link": engine, "make_figures": first_order_figures, "config": tmp_path}
        arguments = {**given, **options}
        return DeskApp(arguments.pop("session"), arguments.pop("link"), **arguments)  # type: ignore[arg-type]

    return build
