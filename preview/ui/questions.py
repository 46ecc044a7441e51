"""The actions that ask: how an answer is understood, and what it does. No screen in here.

Each answer is tried on the whole circuit while it is typed, so that one that cannot work is refused in place and
not afterwards.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from preview.circuit.drive import NO_LOAD, exact_load, exact_source, parse_load, parse_source, said
from preview.circuit.library import open_stages
from preview.circuit.opamp import LIMITS
from preview.circuit.parts import Supply
from preview.circuit.settings import read_setting, setting_note, setting_text
from preview.errors import PreviewError
from preview.session import Session
from preview.ui.asking import Choice, Menu, Outcome, Page, Question
from preview.ui.changes import render_command
from preview.ui.opamps import (
    CHOICE_HEADS,
    LIMIT_WORDS,
    opamp_choices,
    toggled,
    type_in_force,
    with_opamp_type,
)
from preview.ui.words import full_scale, rails
from preview.values.levels import FULL_SCALE_PRESETS, parse_full_scale, parse_supply

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Questions"]

_USUAL_SINGLE_V = (5.0, 9.0, 12.0, 24.0)
_USUAL_DUAL_V = (5.0, 9.0, 12.0, 15.0, 18.0)

Reading = Callable[[str], tuple[Session, str]]
"""Text -> the session with the answer in it, and what was understood; raises PreviewError."""


def _tried(session: Session) -> Session:
    """The session, once its circuit is known to be one that can be computed."""
    session.netlist()
    return session


class Questions:
    """What the desk asks for."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk

    def _value(self, title: str, about: str, now: str, read: Reading) -> Question:
        """A question whose answer becomes the session."""

        def take(text: str) -> None:
            self._desk.change(read(text)[0])

        return Question(title, about, now, lambda text: read(text)[1], take)

    # ---- parts ----

    def do_type_value(self) -> Outcome:
        """Type the selected part's value, position, or open or closed."""
        desk, part = self._desk, self._desk.parts.part
        if part is None:
            return "this stage has no part to set"

        def read(text: str) -> tuple[Session, str]:
            setting = read_setting(part, text, f"{part.designator} = ")
            changed = _tried(desk.parts.with_tied(part.designator, setting))
            return changed, setting_note(part.with_setting(setting), text)

        return self._value(f"Value of {part.designator}", part.role, setting_text(part), read)

    def do_tie(self) -> Outcome:
        """Tie the selected part to another one."""
        parts = self._desk.parts
        part = parts.part
        if part is None:
            return "this stage has no part to set"
        choices = parts.tie_choices()
        if not choices:
            return f"there is no other {part.kind} that {part.designator} could be tied to"
        return Menu(f"Tie {part.designator}: when one moves, the others move with it", choices, parts.tie)

    # ---- supply and levels ----

    def do_full_scale(self) -> Question:
        """Type full scale."""
        session = self._desk.session

        def read(text: str) -> tuple[Session, str]:
            scale = parse_full_scale(text)
            return replace(self._desk.session, full_scale=scale), full_scale(scale)

        presets = ", ".join(preset.text for preset in FULL_SCALE_PRESETS[:6])
        about = (
            f"The level of a sine at the file's full scale, such as {presets}; a plain voltage is its peak."
        )
        return self._value("Full scale", about, session.full_scale.text, read)

    def do_supply(self) -> Question:
        """Type the rails."""

        def read(text: str) -> tuple[Session, str]:
            supply = Supply(*parse_supply(text))
            return _tried(replace(self._desk.session, supply=supply)), f"supply {rails(supply)}"

        now = rails(self._desk.session.supply)
        return self._value("Supply", "±15, +12 -5, or 9 for a single supply", now, read)

    def do_next_supply(self) -> str:
        """The next usual supply that the op-amps take."""
        session = self._desk.session
        now = session.supply
        dual = now.negative_v < 0.0
        usual_v = _USUAL_DUAL_V if dual else _USUAL_SINGLE_V
        above_v = [v for v in usual_v if (2.0 * v if dual else v) > now.positive_v - now.negative_v + 1e-9]
        for rail_v in (*above_v, *(v for v in usual_v if v not in above_v)):
            try:
                changed = _tried(replace(session, supply=Supply(rail_v, -rail_v if dual else 0.0)))
            except PreviewError:
                continue  # outside the range of a type
            self._desk.change(changed)
            return f"supply {rails(changed.supply)}"
        return f"no other usual supply suits these op-amps; the supply stays {rails(session.supply)}"

    def do_source(self) -> Question:
        """Type what drives the stage."""

        def read(text: str) -> tuple[Session, str]:
            source = parse_source(text)
            return _tried(replace(self._desk.session, source=source)), said(source)

        about = "What drives the input: 0 for ideal, 600, 7k5 + 2.5 H, 20 nF; piezo disc, cable 500p ..."
        return self._value("Source", about, exact_source(self._desk.session.source), read)

    def do_load(self) -> Question:
        """Type what follows the stage."""

        def read(text: str) -> tuple[Session, str]:
            load = parse_load(text)
            return _tried(replace(self._desk.session, load=load)), "no load" if load == NO_LOAD else said(
                load
            )

        about = "From out to gnd: none, 600, 10k || 220p; headphones 32 ohm, line input, cable 1n ..."
        return self._value("Load", about, exact_load(self._desk.session.load), read)

    # ---- op-amps ----

    def do_opamp_type(self) -> Outcome:
        """Choose the type of the stage's op-amps from the list."""
        opamps = self._desk.session.stage.opamps
        if not opamps:
            return "this stage has no op-amp"
        chosen_one = self._desk.view.opamp
        named = [opamp.designator for opamp in opamps if chosen_one in (None, opamp.designator)]
        now = type_in_force(self._desk.session.stage, named)

        def chosen(kind: str) -> Outcome:
            session, told = with_opamp_type(self._desk.session, kind, named)
            if session.stage == self._desk.session.stage:
                return None
            self._desk.change(session)
            return f"{told}; {self._desk.keys.shown('undo')} takes this back"

        return Menu(
            f"Op-amp type of {', '.join(named)}", opamp_choices(now), chosen, now=now, heads=CHOICE_HEADS
        )

    def do_opamp_limits(self) -> Outcome:
        """Take a limit away from the op-amps, to hear what it does, or give it back."""
        if not self._desk.session.stage.opamps:
            return "this stage has no op-amp"
        return self._limits_menu(LIMITS[0])

    def _limits_menu(self, at: str) -> Menu:
        without = self._desk.session.without
        rows = [Choice("all", "all of them", "every limit and fault as the type has it")]
        for limit in LIMITS:
            state = "taken away" if limit in without else "in force"
            rows.append(Choice(limit, limit, f"{state:<11} {LIMIT_WORDS[limit]}"))

        def chosen(answer: str) -> Menu:
            self._desk.change(
                replace(self._desk.session, without=toggled(self._desk.session.without, answer))
            )
            return self._limits_menu(answer)

        return Menu("Limits of the op-amps: Enter takes one away or gives it back", rows, chosen, now=at)

    # ---- what is set ----

    def do_write_out(self) -> Page:
        """The command that renders what is set."""
        session = self._desk.session
        opened = open_stages(session.stage.opened_as)
        return Page(
            "The command that renders this",
            (
                render_command(session, opened),
                "OUT.wav stands for the file to write; what is rendered is what is heard here.",
            ),
        )
