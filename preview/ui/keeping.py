"""Saving and opening what is on the desk, keeping it against a crash, exporting what is heard. No screen in here."""

from __future__ import annotations

import contextlib
import os
import time
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from preview.engine.autosave import Autosave, LeftBehind, left_behind
from preview.engine.messages import (
    CancelExport,
    Export,
    ExportDepth,
    ExportState,
    OpenFile,
    UseLive,
    UseSignal,
)
from preview.engine.sessionfile import ENDING, Saved, SavedCandidate, load, save
from preview.errors import OutputFileError, UsageError, printable
from preview.session import Session
from preview.ui.asking import Choice, Menu, Outcome, Question
from preview.ui.changes import with_input_of
from preview.ui.words import clock, percent

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Keeping"]

_FILE = "\0file"
_DEPTHS: tuple[ExportDepth, ...] = ("16", "24", "float")
_NOTE_S = 0.5
"""What is on the desk is noted no more often than this [s]."""


class Keeping:
    """The actions of session files and exports."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.autosave: Autosave | None = None
        """Keeps the session against a crash; None where it is not wanted."""
        self.left: list[LeftBehind] = []
        """Sessions that crashes left behind."""
        self.export: ExportState | None = None
        """How far the last export is."""
        self._noted_s = -1e9

    # ---- what is on the desk ----

    def saved(self) -> Saved:
        """Everything on the desk."""
        desk = self._desk
        room = desk.candidates
        return Saved(
            candidates=tuple(
                SavedCandidate(letter, self._common(room.session(letter)), room.name(letter))
                for letter in room.letters
            ),
            letter=room.letter,
            position_frame=desk.listening.position_frame,
            region=desk.listening.region,
            volume_db=desk.listening.volume_db,
            bypass=desk.listening.bypass,
            match=room.matched,
        )

    def _common(self, session: Session) -> Session:
        """A candidate's session with what is common to all as it is now."""
        now = self._desk.session
        session = replace(
            session, full_scale=now.full_scale, quality=now.quality, at_end=now.at_end, notes=()
        )
        return with_input_of(session, now)

    def note(self) -> None:
        """Have what is on the desk kept, now and then."""
        now_s = self._desk.now_s()
        if self.autosave is not None and now_s - self._noted_s >= _NOTE_S:
            self._noted_s = now_s
            self.autosave.note(self.saved())

    def begin(self) -> str:
        """Keep from now on; a line about what a crash has left, if there is anything."""
        self.left = left_behind()
        self.autosave = Autosave()
        if not self.left:
            return ""
        opens = self._desk.keys.shown("open_session")
        return f"a session was left behind by a crash or a closed terminal; {opens} opens it"

    def end(self, *, keep: bool = False) -> None:
        """The desk is left; what is on it is kept where a signal and not the person has ended it."""
        if self.autosave is not None:
            if keep:
                self.autosave.note(self.saved())
            self.autosave.close(keep=keep)
            self.autosave = None

    def restore(self, saved: Saved) -> str:
        """Put everything on the desk as it was saved; the volume stays, or goes down to what was saved."""
        desk = self._desk
        old, new = desk.session, saved.session
        desk.candidates.restore(saved)
        if (old.audio, old.stimulus, old.live, old.live_device) != (
            *(new.audio, new.stimulus, new.live, new.live_device),
        ):
            if new.live:
                desk.connections.use(UseLive(new.live_device), new)
            elif new.stimulus is not None:
                desk.connections.use(UseSignal(new.stimulus), new)
            elif new.audio is not None:
                desk.connections.use(OpenFile(new.audio), new)
        desk.listening.restore(saved)
        count = len(saved.candidates)
        return f"opened: {'one candidate' if count == 1 else f'{count} candidates'}, {saved.letter} is heard"

    # ---- session files ----

    def do_save_session(self) -> Question:
        """Save everything on the desk in a file."""

        def path_of(text: str) -> Path:
            path = Path(text.strip()).expanduser()
            if not path.name.endswith(".toml"):
                path = path.with_name(path.name + ENDING)
            if not path.parent.is_dir():
                raise OutputFileError(f"{path.parent}: no such folder", "make it first")
            return path

        def understand(text: str) -> str:
            path = path_of(text)
            return f"{path}{' (replaces the file that is there)' if path.exists() else ''}"

        def take(text: str) -> str:
            path = path_of(text)
            save(path, self.saved())
            return f"saved in {printable(path.name)}"

        now = f"{self._desk.session.stage.name}{ENDING}"
        return Question("Save the session as", f"A file; its name ends in {ENDING}", now, understand, take)

    def do_open_session(self) -> Outcome:
        """Open a saved session, or one that a crash has left."""
        if not self.left:
            return self._ask_session()
        rows = []
        for place, one in enumerate(self.left):
            ago = max(0.0, time.time() - one.written_s) / 60.0
            what = one.saved.session.audio.name if one.saved.session.audio else "no recording"
            about = (
                f"{printable(what)}, {one.saved.session.stage.title}, {len(one.saved.candidates)} candidates"
            )
            rows.append(Choice(str(place), f"left {ago:.0f} min ago", about))
        rows.append(Choice(_FILE, "a file ...", "type the path of a saved session"))

        def chosen(answer: str) -> Outcome:
            if answer == _FILE:
                return self._ask_session()
            one = self.left.pop(int(answer))
            said = self.restore(one.saved)
            one.discard()
            return said

        return Menu("Open", rows, chosen)

    def _ask_session(self) -> Question:
        def read(text: str) -> Saved:
            return load(Path(text.strip()).expanduser())

        def understand(text: str) -> str:
            saved = read(text)
            return f"{saved.session.stage.title}, {len(saved.candidates)} candidates"

        return Question(
            "Open a session",
            f"A file; its name ends in {ENDING}",
            "none",
            understand,
            lambda text: self.restore(read(text)),
        )

    # ---- export ----

    def hear_export(self, state: ExportState) -> str | None:
        """How far an export is; a line once it has ended."""
        self.export = state
        return None if state.state == "running" else f"{state.state}: {state.text}"

    def export_line(self) -> str:
        """How far the export is, in words; empty where none runs."""
        state, snapshot = self.export, self._desk.snapshot
        if state is None or state.state != "running":
            return ""
        if self._records:
            return (
                f"recording {clock(state.done_frames / snapshot.sample_rate_hz)}" if snapshot else "recording"
            )
        return f"exporting {percent(state.done_frames / state.frames)}"

    @property
    def _records(self) -> bool:
        """Whether what is written now is live input, of which nobody knows how long it will be."""
        return self.export is not None and self.export.state == "running" and self.export.frames == 0

    def break_off(self) -> str:
        """The engine that wrote is gone; a line about it, empty where nothing was being written."""
        state, self.export = self.export, None
        if state is None or state.state != "running":
            return ""
        if state.readable:
            try:
                if os.path.exists(state.hidden) or not os.path.exists(state.out):
                    os.replace(state.hidden, state.out)
            except OSError as error:
                return f"what was recorded is in {state.hidden}: {error.strerror}"
            return f"what was recorded until then is in {state.out}"
        if state.hidden:
            with contextlib.suppress(OSError):
                os.unlink(state.hidden)
        return "what was being written to a file is lost"

    def do_export(self) -> Outcome:
        """Write what is heard to a file, in the background; stops an export that runs."""
        if self.export_line():
            self._desk.link.send(CancelExport())
            return "the recording ends" if self._records else "the export is stopped; nothing is left behind"
        live = self._desk.session.live

        def read(text: str) -> tuple[Path, ExportDepth]:
            name, _, last = text.strip().rpartition(" ")
            depth = next((d for d in _DEPTHS if d == last and name), None)
            path = Path(name.strip() if depth else text.strip()).expanduser()
            if not path.suffix:
                raise UsageError(
                    f"{path}: no ending that says what to write", "such as out.wav or out.flac 24"
                )
            if not path.parent.is_dir():
                raise OutputFileError(f"{path.parent}: no such folder", "make it first")
            audio = self._desk.session.audio
            if audio is not None and path.exists() and path.samefile(audio):
                raise OutputFileError(f"{path}: is the recording itself", "another name")
            return path, depth or "float"

        def understand(text: str) -> str:
            path, depth = read(text)
            where = "the region" if self._desk.listening.region else "the whole"
            where = "from now on, half an hour at most," if live else where
            return f"{where} to {path}, {depth}{', replaces the file that is there' if path.exists() else ''}"

        def take(text: str) -> str:
            path, depth = read(text)
            desk = self._desk
            desk.link.send(Export(self._common(desk.session), path, depth, desk.listening.region))
            stops = desk.keys.shown("export")
            if live:
                return f"recording to {printable(path.name)}; {stops} ends it"
            return f"exporting to {printable(path.name)}; {stops} stops it"

        about = "A file and, if wanted, 16, 24 or float: out.wav, out.flac 24"
        title = "Record what the stage puts out to" if live else "Export what is heard to"
        return Question(title, about, "none", understand, take)
