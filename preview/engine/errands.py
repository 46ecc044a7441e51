"""What the engine has done in the background: overview, clip marks, loudness, export, the list of devices."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

from preview.circuit.netlist import Netlist
from preview.engine.comeback import Comeback
from preview.engine.commands import Export
from preview.engine.intake import Intake
from preview.engine.jobs import (
    DeviceJob,
    ExportJob,
    Loudness,
    LoudnessJob,
    MarksJob,
    OverviewJob,
    ProbeJob,
    Tried,
    TryJob,
)
from preview.engine.matching import Matcher
from preview.engine.messages import CandidateReading, ExportState, InputKind, Notice, Report, Snapshot
from preview.engine.passages import Material
from preview.engine.preparer import Preparer
from preview.engine.recorder import Recorder
from preview.engine.worker import Worker
from preview.errors import PreviewError

__all__ = ["Errands"]

SETTLE_S = 0.7
"""The worker begins when the input has been there for so long; and clips are looked for when circuit and levels have
been left alone for so long [s]."""

LIVE_PROBE_S = 10.0
"""The inner nodes of live input are looked at so often: what is kept of it is as long [s]."""


class Errands:
    """Decides what is to be found out, has it done by a worker process, and hands on what that finds.

    Parameters
    ----------
    tell : callable
        Told a line and its severity.
    """

    def __init__(self, tell: Callable[[str, str], None]) -> None:
        self._tell = tell
        self._worker = Worker()
        self.matcher = Matcher()
        """Loudness of the candidates."""
        self.comeback = Comeback(lambda name: self._worker.submit("try", TryJob(name)))
        """A device that another one stands in for."""
        self._intake: Intake | None = None
        self._full_scale_v = 1.0
        self._region: tuple[int, int] | None = None
        self._began_s = 0.0
        self._overview_asked = False
        self._marks: tuple[str, Netlist, float] | None = None
        self._marks_since_s = 0.0
        self._marks_asked = False
        self._probes: tuple[object, ...] | None = None
        self._probes_since_s = 0.0
        self._probes_asked = False
        self.probing = False
        """Whether the peaks at inner nodes are wanted."""
        self._gains: dict[str, float] = {}
        self._exporting: Path | None = None
        self._own: list[Report] = []
        self._recorder: Recorder | None = None

    def begin(self, intake: Intake) -> None:
        """Another input: what was found out about the one before is no use."""
        if self._recorder is not None:
            self._recorder.end()
        self._intake, self._began_s = intake, time.monotonic()
        self._overview_asked = False
        self._marks = self._probes = None
        self._gains = {}
        self.matcher.forget()
        for key in ("overview", "marks", "probes", *self._loudness_keys()):
            self._worker.submit(key, None)

    def close(self) -> None:
        """End the worker; a recording is finished first."""
        if self._recorder is not None:
            self._recorder.close()
        self._worker.close()

    def look(self, snapshot: Snapshot, preparer: Preparer) -> bool:
        """Have done what is due; whether the gains of the match have changed."""
        intake = self._intake
        if intake is None:
            return False
        netlists = preparer.netlists
        if (snapshot.full_scale_v, snapshot.region) != (self._full_scale_v, self._region):
            self._full_scale_v, self._region = snapshot.full_scale_v, snapshot.region
            self.matcher.forget()
        if intake.path is not None:
            if not self._overview_asked and time.monotonic() - self._began_s >= SETTLE_S:
                self._overview_asked = True
                self._worker.submit("overview", OverviewJob(intake.path))
            self._look_for_marks(preparer.letter, netlists[preparer.letter])
        self._look_at_nodes(preparer.letter, netlists[preparer.letter])
        due = self.matcher.due(netlists)
        material = self._material(self._region) if due else None
        for letter in due:
            assert material is not None
            self._worker.submit(f"loudness {letter}", LoudnessJob(letter, netlists[letter], material))
        gains = self.matcher.gains()
        changed, self._gains = gains != self._gains, gains
        return changed

    def reports(self) -> list[Report]:
        """What was found out since the last call."""
        told, self._own = self._own, []
        if self._recorder is not None and (state := self._recorder.state()) is not None:
            told.append(state)
            if state.state != "running":
                self._recorder = self._exporting = None
        for found in self._worker.told():
            if isinstance(found, Loudness):
                self.matcher.note(found.letter, found.netlist, found.lufs)
            elif isinstance(found, Tried):
                self.comeback.hear(found.name, found.there)
            elif isinstance(found, Notice):
                self._tell(found.text, found.severity)
            else:
                if isinstance(found, ExportState) and found.state != "running":
                    self._exporting = None
                told.append(found)
        return told

    def candidates(self, preparer: Preparer) -> tuple[CandidateReading, ...]:
        """Every candidate, by letter."""
        unbuilt, gains_db = preparer.unbuilt, self.matcher.gains_db()
        return tuple(
            CandidateReading(
                letter, letter not in unbuilt, self.matcher.loudness(letter), gains_db.get(letter, 0.0)
            )
            for letter in sorted(preparer.netlists)
        )

    def list_devices(self) -> None:
        """List the sound devices there are now."""
        self._worker.submit("devices", DeviceJob())

    def export(self, order: Export) -> Recorder | None:
        """Write what is heard to a file; live input is recorded by what is returned, None for anything else."""
        intake = self._intake
        if intake is None:
            self._tell("there is nothing to export", "error")
        elif self._exporting is not None:
            self._tell(f"{self._exporting.name} is still being written", "error")
        elif intake.path is not None and order.out.exists() and order.out.samefile(intake.path):
            self._tell(f"{order.out}: is also the recording that is heard; give another name", "error")
        elif intake.kind is InputKind.LIVE:
            return self._begin_to_record(order, intake)
        else:
            self._exporting = order.out
            self._worker.submit("export", ExportJob(order, self._material(order.region)))
        return None

    def _begin_to_record(self, order: Export, intake: Intake) -> Recorder | None:
        try:
            self._recorder = Recorder(order, sample_rate_hz=intake.sample_rate_hz, channels=intake.channels)
        except PreviewError as error:
            self._own.append(ExportState(str(order.out), 0, 0, "failed", str(error)))
            return None
        self._exporting = order.out
        self._own.append(ExportState(str(order.out), 0, 0, "running"))
        return self._recorder

    def cancel_export(self) -> None:
        """Stop the export; nothing is left behind but a recording of live input."""
        if self._recorder is not None:
            self._recorder.end()
        elif self._exporting is not None:
            self._worker.submit("export", None)
            self._own.append(ExportState(str(self._exporting), 0, 0, "cancelled", "nothing was written"))
            self._exporting = None

    def _loudness_keys(self) -> list[str]:
        return [f"loudness {chr(code)}" for code in range(ord("A"), ord("Z") + 1)]

    def _look_for_marks(self, letter: str, netlist: Netlist) -> None:
        now_s = time.monotonic()
        wanted = letter, netlist, self._full_scale_v
        if wanted != self._marks:
            self._marks, self._marks_since_s, self._marks_asked = wanted, now_s, False
            self._worker.submit("marks", None)
        elif not self._marks_asked and now_s - self._marks_since_s >= SETTLE_S:
            self._marks_asked = True
            self._worker.submit("marks", MarksJob(letter, netlist, self._material()))

    def _look_at_nodes(self, letter: str, netlist: Netlist) -> None:
        now_s = time.monotonic()
        wanted = (letter, netlist, self._full_scale_v, self._region) if self.probing else None
        if wanted != self._probes:
            self._probes, self._probes_since_s, self._probes_asked = wanted, now_s, False
            self._worker.submit("probes", None)
            return
        live = self._intake is not None and self._intake.kind is InputKind.LIVE
        if live and now_s - self._probes_since_s >= LIVE_PROBE_S:
            self._probes_since_s, self._probes_asked = now_s, False
        if wanted and not self._probes_asked and now_s - self._probes_since_s >= SETTLE_S:
            self._probes_asked = True
            self._worker.submit("probes", ProbeJob(letter, netlist, self._material(self._region)))

    def _material(self, region: tuple[int, int] | None = None) -> Material:
        """What is heard, for another process."""
        intake = self._intake
        assert intake is not None
        return Material(
            path=intake.path,
            stimulus=intake.stimulus,
            recorded=intake.live.history() if intake.live is not None else None,
            recorded_rate_hz=intake.sample_rate_hz,
            full_scale_v=self._full_scale_v,
            region=region,
        )
