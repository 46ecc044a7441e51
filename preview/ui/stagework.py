"""Choosing the stage that is heard: another one, one more behind it, the last one away. No screen in here."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from preview.circuit.cascade import supplies_differ, with_stage_behind, without_last_stage
from preview.circuit.cautions import warnings
from preview.circuit.library import find_stage, stage_names
from preview.circuit.parts import Stage
from preview.errors import PreviewError
from preview.ui.asking import Choice, Menu, Outcome, Question
from preview.ui.words import rails

if TYPE_CHECKING:
    from preview.session import Session
    from preview.ui.desk import Desk

__all__ = ["StageWork", "doubts", "stage_choices"]

_FILE, _BEHIND, _LAST = "\0file", "\0behind", "\0last"
"""Answers of the stage menu that no name can be."""


def stage_choices() -> list[Choice]:
    """Every stage by name, and a file of one's own."""
    rows = []
    for name in stage_names():
        try:
            about = find_stage(name).title
        except PreviewError as error:
            about = f"cannot be used: {error}"
        rows.append(Choice(name, name, about))
    return [*rows, Choice(_FILE, "a file ...", "type the path of a stage file")]


def doubts(session: Session) -> str:
    """What of the circuit is hardly meant, with its cure; empty where nothing is."""
    found = [f"{what} ({cure})" for what, cure in warnings(session.netlist())]
    return f"warning: {'; '.join(found)}" if found else ""


class StageWork:
    """The actions that choose stages."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk

    def do_choose_stage(self) -> Menu:
        """Choose a stage from the list, or a file; or one more behind the present one."""
        now = self._desk.session.stage
        *named, file = stage_choices()
        chain = [Choice(_BEHIND, "one more behind ...", "a cascade: the next stage is driven by this one")]
        if now.joined:
            chain.append(Choice(_LAST, "without the last", f"{now.joined[-1].name} goes, the others stay"))

        def chosen(name: str) -> Outcome:
            if name == _BEHIND:
                return self.do_cascade()
            if name == _LAST:
                return self.do_cascade_drop()
            if name == _FILE:
                return self._ask_file("Stage file", self._desk.session.with_stage, self._open)
            return self._open(find_stage(name)) if name != self._desk.session.stage.name else None

        return Menu("Stage", [*chain, *named, file], chosen, now=now.name)

    def do_cascade(self) -> Menu:
        """Choose the stage that goes behind the present one."""

        def chosen(name: str) -> Outcome:
            if name == _FILE:
                return self._ask_file("Stage file behind", self._joined, self._append)
            return self._append(find_stage(name))

        return Menu("The next stage of the cascade", stage_choices(), chosen)

    def do_cascade_drop(self) -> str:
        """Take the last stage of the cascade away."""
        was = self._desk.session.stage
        if not was.joined:
            return f"this is a single stage; {self._desk.keys.shown('cascade')} puts another one behind it"
        self._desk.rejoin(without_last_stage)
        return f"without stage {len(was.joined)}, {was.joined[-1].name}"

    def _ask_file(
        self, title: str, tried: Callable[[Stage], Session], take: Callable[[Stage], str]
    ) -> Question:
        def understand(text: str) -> str:
            stage = find_stage(text.strip())
            tried(stage).netlist()
            return f"{stage.title}: {len(stage.parts)} parts, supply {rails(stage.supply)}"

        return Question(
            title,
            "The path of a .toml file, or a name",
            self._desk.session.stage.name,
            understand,
            lambda text: take(find_stage(text.strip())),
        )

    def _joined(self, stage: Stage) -> Session:
        session = self._desk.session
        return replace(session.with_stage(with_stage_behind(session.stage, stage)), supply=session.supply)

    def _open(self, stage: Stage) -> str:
        return self._doubted(self._desk.open_stage(stage))

    def _append(self, stage: Stage) -> str:
        self._desk.rejoin(lambda present: with_stage_behind(present, stage))
        now = self._desk.session.stage
        count, first = len(now.joined), stage.parts[0].designator
        told = f"stage {count}, {stage.name}, is driven by {count - 1}.out; its parts are {count}.{first} ..."
        return self._doubted("; ".join(one for one in (told, supplies_differ(now)) if one))

    def _doubted(self, told: str) -> str:
        """The line, or what of the circuit is hardly meant, which goes before it."""
        return doubts(self._desk.session) or told
