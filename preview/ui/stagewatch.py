"""A stage's file that is edited while it is heard: read anew, or left as it was heard where it is wrong."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from preview.circuit.library import open_stages
from preview.circuit.parts import OpAmp, SettablePart, Stage
from preview.errors import PreviewError, printable
from preview.ui.stagework import doubts

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["StageWatch"]

_EVERY_S = 0.7
"""Files are looked at no more often than this [s]."""

Stamp = tuple[int, int]
"""Time of the last change and size of a file."""


class StageWatch:
    """Looks at the files of the stage that is heard."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self._looked_s = -1e9
        self._seen: dict[Path, Stamp] = {}

    def look(self) -> tuple[str, str] | None:
        """What became of an edited file and how serious that is; None where nothing was edited."""
        now_s = self._desk.now_s()
        if now_s - self._looked_s < _EVERY_S:
            return None
        self._looked_s = now_s
        seen = {path: stamp for path in self._files() if (stamp := _stamp(path)) is not None}
        edited = [path for path, stamp in seen.items() if self._seen.get(path, stamp) != stamp]
        self._seen |= seen
        if not edited:
            return None
        names = ", ".join(printable(path.name) for path in edited)
        try:
            self._take(open_stages(self._desk.session.stage.opened_as))
        except PreviewError as error:
            return f"{error}; what is heard stays as it was", "error"
        if said := doubts(self._desk.session):
            return f"{names} was edited and is read anew; {said}", "warning"
        return (
            f"{names} was edited and is read anew; {self._desk.keys.shown('undo')} takes that back",
            "information",
        )

    def _files(self) -> list[Path]:
        """The files behind the stage; none for those that come with the program."""
        return [path for name in self._desk.session.stage.opened_as if (path := Path(name)).suffix == ".toml"]

    def _take(self, stage: Stage) -> None:
        """The stage as its file has it now, with what the person has set on the desk."""
        desk = self._desk
        before, now = desk.before, desk.session
        was = {part.designator: part for part in before.stage.parts}
        set_here = {
            part.designator: part
            for part in now.stage.parts
            if part.designator in was and part != was[part.designator]
        }
        merged = stage
        for part in stage.parts:
            own = set_here.get(part.designator)
            if isinstance(part, SettablePart) and isinstance(own, SettablePart) and own.kind is part.kind:
                merged = merged.with_part(part.with_setting(own.setting))
            elif isinstance(part, OpAmp) and isinstance(own, OpAmp):
                merged = merged.with_part(replace(part, type=own.type))
        supply = now.supply if now.supply != before.supply else stage.supply
        opened = before.with_stage(stage)
        desk.change(replace(now.with_stage(merged), supply=supply))
        desk.before = opened


def _stamp(path: Path) -> Stamp | None:
    """When a file was changed last, and its size; None while it is away, as editors make it for a moment."""
    try:
        found = path.stat()
    except OSError:
        return None
    return found.st_mtime_ns, found.st_size
