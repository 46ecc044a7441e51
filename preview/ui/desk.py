"""The state behind the desk: what is heard, chosen and shown. No screen in here.

Each ``do_`` method is an action of :mod:`preview.ui.actions`: it tells the engine and may return a line
to show.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace

from preview.circuit.netlist import OUT, OpAmpSite
from preview.circuit.parts import Stage, TwoTerminal
from preview.engine.messages import (
    ClearHolds,
    Command,
    Pause,
    Play,
    Seek,
    SetAtEnd,
    SetBypass,
    SetQuality,
    SetRegion,
    SetVolume,
    Snapshot,
)
from preview.errors import PreviewError
from preview.session import AtEnd, Session
from preview.ui.changes import commands_between, series_of, whole_state, with_value
from preview.ui.figures import FigurePair
from preview.ui.link import EngineLink
from preview.ui.words import clock
from preview.values.eseries import SERIES, step
from preview.values.quality import Quality

__all__ = ["FIRST_VOLUME_DB", "Desk"]

FIRST_VOLUME_DB = -20.0
"""Listening volume when the desk opens [dB]."""
LOWEST_VOLUME_DB = -60.0
"""Below this the volume is off [dB]."""
OFF_DB = float("-inf")
COARSE_SERIES = "E3"
SMALL_S, LARGE_S = 1.0, 10.0
"""Steps of the playhead [s]."""
_SHORTEST_REGION_S = 0.05
"""A shorter loop is not the recording any more, but a tone or a direct voltage [s]."""
_TRUST_S = 0.4
"""For so long after a key the desk's own wish is shown, not a snapshot that may be older [s]."""
_MOST_UNDONE = 200


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
    now_s : callable
        A clock [s]; for tests.
    """

    def __init__(
        self, session: Session, link: EngineLink, *, now_s: Callable[[], float] = time.monotonic
    ) -> None:
        self.session = session
        self.link = link
        self.before: Session = session
        self.snapshot: Snapshot | None = None
        self.figures = FigurePair()
        self.chosen = 0
        self.playing = False
        self.bypass = False
        self.volume_db = FIRST_VOLUME_DB
        self.region: tuple[int, int] | None = None
        self.phase_shown = False
        self.stopped = False
        self.unanswered = False
        self._now_s = now_s
        self._undone: list[Session] = []
        self._done: list[Session] = []
        self._asked_s = -1e9
        self._before: dict[tuple[str, ...], Session] = {_place(session): session}
        self._sought: tuple[float, int] | None = None
        self._sites: tuple[Session, tuple[OpAmpSite, ...]] | None = None

    # ---- what the engine says ----

    def take(self, snapshot: Snapshot) -> None:
        """The newest word of the engine."""
        self.snapshot = snapshot
        if self._now_s() - self._asked_s > _TRUST_S:
            self.playing = snapshot.playing

    @property
    def position_frame(self) -> int:
        """The playhead: where the engine is, or where it was just sent."""
        if self._sought is not None and self._now_s() - self._sought[0] < _TRUST_S:
            return self._sought[1]
        return self.snapshot.position_frame if self.snapshot else 0

    # ---- the session ----

    def change(self, session: Session) -> None:
        """Make this the session; the engine follows. Raises CircuitError and leaves all as it was."""
        if session == self.session:
            return
        commands = commands_between(self.session, session)
        self._done = [*self._done[-_MOST_UNDONE:], self.session]
        self._undone.clear()
        self._become(session, commands)

    def open_stage(self, stage: Stage) -> None:
        """Another stage on its own supply; its values are the new 'before'."""
        self._before.pop(stage.opened_as, None)
        self.change(self.session.with_stage(stage))

    def _become(self, session: Session, commands: list[Command]) -> None:
        for command in commands:
            self.link.send(command)
        here = _place(session)
        if here != _place(self.session):
            self.before = self._before.setdefault(here, session)
            self.chosen = 0
        self.session = session

    def resume(self, link: EngineLink) -> None:
        """Bring a new engine to where the old one was; it waits at the playhead."""
        position = self.position_frame
        self.link = link
        self.stopped = self.unanswered = False
        for command in whole_state(self.session):
            link.send(command)
        link.send(SetBypass(self.bypass))
        link.send(SetVolume(self.volume_db))
        if self.region is not None:
            link.send(SetRegion(*self.region))
        link.send(Seek(position))
        self.playing = False

    # ---- parts ----

    @property
    def part(self) -> TwoTerminal | None:
        """The selected part; None in a stage without valued parts."""
        parts = self.session.stage.valued
        return parts[min(self.chosen, len(parts) - 1)] if parts else None

    def value_before(self, designator: str) -> float | None:
        """The part's value from before; None if it had none."""
        return next((p.value for p in self.before.stage.valued if p.designator == designator), None)

    def set_value(self, value: float) -> str | None:
        """Give the selected part a value; it glides there."""
        part = self.part
        if part is not None:
            self.change(with_value(self.session, part.designator, value))
        return None

    def choose(self, index: int) -> None:
        """Select a part by its place in the list."""
        self.chosen = max(0, min(index, len(self.session.stage.valued) - 1))

    def do_next_part(self) -> None:
        """Select the next part."""
        self.choose((self.chosen + 1) % max(1, len(self.session.stage.valued)))

    def do_previous_part(self) -> None:
        """Select the part before."""
        self.choose((self.chosen - 1) % max(1, len(self.session.stage.valued)))

    def _step(self, count: int, series: str | None = None) -> str | None:
        part = self.part
        return None if part is None else self.set_value(step(part.value, series or series_of(part), count))

    def do_value_up(self) -> str | None:
        """Next higher standard value."""
        return self._step(1)

    def do_value_down(self) -> str | None:
        """Next lower standard value."""
        return self._step(-1)

    def do_coarse_up(self) -> str | None:
        """Next of 1, 2.2, 4.7."""
        return self._step(1, COARSE_SERIES)

    def do_coarse_down(self) -> str | None:
        """Next lower of 1, 2.2, 4.7."""
        return self._step(-1, COARSE_SERIES)

    def do_next_series(self) -> str | None:
        """The next E series for the selected part; the value stays."""
        part = self.part
        if part is None:
            return None
        names = list(SERIES)
        name = names[(names.index(series_of(part)) + 1) % len(names)]
        self.session = replace(self.session, stage=self.session.stage.with_part(replace(part, series=name)))
        return f"{part.designator} now steps in {name}"

    def do_reset_part(self) -> str | None:
        """The selected part's value from before."""
        part = self.part
        was = self.value_before(part.designator) if part else None
        return self.set_value(was) if was is not None else None

    def do_reset_all(self) -> str:
        """All values from before."""
        session = self.session
        for part in session.stage.valued:
            was = self.value_before(part.designator)
            if was is not None:
                session = with_value(session, part.designator, was)
        self.change(session)
        return "all values are those from before; u takes this back"

    def do_mark_before(self) -> str:
        """The values now become 'before'."""
        self.before = self._before[_place(self.session)] = self.session
        return "these values are the new 'before'"

    def do_undo(self) -> str:
        """Take back the last change."""
        return "taken back" if self._move(self._done, self._undone) else "nothing to take back"

    def do_redo(self) -> str:
        """Make a change again."""
        return "made again" if self._move(self._undone, self._done) else "nothing to make again"

    def _move(self, source: list[Session], target: list[Session]) -> bool:
        if not source:
            return False
        now = self.session
        session = replace(source[-1], quality=now.quality, at_end=now.at_end)
        commands = commands_between(now, session)
        source.pop()
        target.append(now)
        self._become(session, commands)
        return True

    # ---- listening ----

    def play(self, on: bool) -> None:
        """Play or pause."""
        self.playing = on
        self._asked_s = self._now_s()
        self.link.send(Play() if on else Pause())

    def do_play_pause(self) -> None:
        """Play or pause."""
        self.play(not self.playing)

    def seek(self, frame: int) -> None:
        """Send the playhead to a frame, within the recording."""
        last = max(0, self.snapshot.frames - 1) if self.snapshot else 0
        frame = max(0, min(frame, last))
        self._sought = (self._now_s(), frame)
        self.link.send(Seek(frame))

    def _seek_by(self, seconds: float) -> None:
        if self.snapshot is not None:
            self.seek(self.position_frame + round(seconds * self.snapshot.sample_rate_hz))

    def do_back_small(self) -> None:
        """Back 1 s."""
        self._seek_by(-SMALL_S)

    def do_forward_small(self) -> None:
        """Forward 1 s."""
        self._seek_by(SMALL_S)

    def do_back_large(self) -> None:
        """Back 10 s."""
        self._seek_by(-LARGE_S)

    def do_forward_large(self) -> None:
        """Forward 10 s."""
        self._seek_by(LARGE_S)

    def do_to_start(self) -> None:
        """To the start of the region or of the recording."""
        self.seek(self.region[0] if self.region else 0)

    def _set_region(self, start: int, end: int) -> str:
        assert self.snapshot is not None
        self.region = (start, end)
        self.link.send(SetRegion(start, end))
        rate_hz = self.snapshot.sample_rate_hz
        return f"region {clock(start / rate_hz)} to {clock(end / rate_hz)}; x clears it"

    def do_region_start(self) -> str | None:
        """The region starts here."""
        if self.snapshot is None or self.snapshot.frames < 2:
            return None
        frames = self.snapshot.frames
        start = max(0, min(self.position_frame, frames - self._shortest_region))
        end = self.region[1] if self.region else frames
        return self._set_region(start, end if end >= start + self._shortest_region else frames)

    def do_region_end(self) -> str | None:
        """The region ends here."""
        if self.snapshot is None or self.snapshot.frames < 2:
            return None
        end = min(max(self._shortest_region, self.position_frame), self.snapshot.frames)
        start = self.region[0] if self.region else 0
        return self._set_region(start if start <= end - self._shortest_region else 0, end)

    @property
    def _shortest_region(self) -> int:
        """Frames of the shortest region that can be set."""
        assert self.snapshot is not None
        return max(2, round(_SHORTEST_REGION_S * self.snapshot.sample_rate_hz))

    def do_region_clear(self) -> str:
        """The whole recording."""
        self.region = None
        self.link.send(SetRegion(None, None))
        return "no region: the whole recording"

    def do_at_end(self) -> str:
        """Loop or stop."""
        at_end = AtEnd.STOP if self.session.at_end is AtEnd.LOOP else AtEnd.LOOP
        self.session = replace(self.session, at_end=at_end)
        self.link.send(SetAtEnd(at_end))
        return f"at the end: {at_end}"

    def do_bypass(self) -> None:
        """The input without the stage, and back."""
        self.bypass = not self.bypass
        self.link.send(SetBypass(self.bypass))

    def _set_volume(self, volume_db: float) -> None:
        self.volume_db = volume_db
        self.link.send(SetVolume(volume_db))

    def do_volume_up(self) -> str | None:
        """Volume up 1 dB, at most 0 dB."""
        self._set_volume(LOWEST_VOLUME_DB if self.volume_db == OFF_DB else min(0.0, self.volume_db + 1.0))
        return "the volume is at its highest" if self.volume_db == 0.0 else None

    def do_volume_down(self) -> str | None:
        """Volume down 1 dB; below -60 dB it is off."""
        self._set_volume(self.volume_db - 1.0 if self.volume_db > LOWEST_VOLUME_DB else OFF_DB)
        return "the volume is off" if self.volume_db == OFF_DB else None

    def do_next_quality(self) -> str:
        """Draft, standard, fine."""
        names = list(Quality)
        quality = names[(names.index(self.session.quality) + 1) % len(names)]
        self.session = replace(self.session, quality=quality)
        self.link.send(SetQuality(quality))
        return f"quality: {quality}"

    def do_clear_holds(self) -> str:
        """Clear peak holds and counts."""
        self.link.send(ClearHolds())
        return "peak holds and counts cleared"

    # ---- for the screen ----

    @property
    def file_name(self) -> str:
        """Name of the recording, not yet cleaned."""
        return self.session.audio.name if self.session.audio else "no recording"

    def sites(self) -> tuple[OpAmpSite, ...]:
        """The op-amps with the limits that hold for them; none where the circuit cannot be computed."""
        if self._sites is None or self._sites[0] is not self.session:
            try:
                found = self.session.netlist().opamps
            except PreviewError:
                found = ()
            self._sites = (self.session, found)
        return self._sites[1]

    def output_wall(self) -> tuple[float | None, str | None]:
        """The nearer limit of the op-amp that drives ``out`` [V], and its designator; None for no limit.

        The limit on a rail of 0 V is no wall: the signal that reaches it is small, not large.
        """
        supply = self.session.supply
        for site in self.sites():
            walls = [site.high_v] * (supply.positive_v > 0.0) + [-site.low_v] * (supply.negative_v < 0.0)
            walls = [wall_v for wall_v in walls if 0.0 < wall_v < math.inf]
            if site.out == OUT and walls:
                return min(walls), site.designator
        return None, None
