"""The parts that can be set: which one is selected, its steps, what is tied to it. No screen in here."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from preview.circuit.limits import check_value
from preview.circuit.parts import Potentiometer, SettablePart, Stage, Switch, TwoTerminal
from preview.circuit.settings import setting_text
from preview.session import Session
from preview.ui.asking import Choice
from preview.ui.changes import series_of, stepped, with_setting
from preview.values.eseries import SERIES, nearest
from preview.values.notation import format_value

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["PartWork", "listed"]

_DIGITS = ".12g"
"""A tied value is rounded to this, so that walking to and fro does not leave crumbs."""


def listed(stage: Stage) -> tuple[SettablePart, ...]:
    """The parts that can be set, those that an engineer would turn first at the top."""
    return tuple(sorted(stage.settable, key=lambda part: not part.adjust))


class PartWork:
    """Setting parts."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.chosen = 0
        self._ties: list[frozenset[str]] = []

    # ---- which part ----

    @property
    def parts(self) -> tuple[SettablePart, ...]:
        """The parts in the order of the list."""
        return listed(self._desk.session.stage)

    @property
    def part(self) -> SettablePart | None:
        """The selected part; None in a stage that has none to set."""
        parts = self.parts
        return parts[min(self.chosen, len(parts) - 1)] if parts else None

    def before(self, designator: str) -> SettablePart | None:
        """The part as it was before; None if there was none."""
        return next((p for p in self._desk.before.stage.settable if p.designator == designator), None)

    def choose(self, index: int) -> None:
        """Select a part by its place in the list."""
        self.chosen = max(0, min(index, len(self.parts) - 1))

    def choose_named(self, designator: str) -> bool:
        """Select a part by its designator, in any case; False if there is none."""
        for index, part in enumerate(self.parts):
            if part.designator.lower() == designator.lower():
                self.chosen = index
                return True
        return False

    def forget(self) -> None:
        """Another stage: its first part, nothing tied."""
        self.chosen = 0
        self._ties.clear()

    def do_next_part(self) -> None:
        """Select the next part."""
        self.choose((self.chosen + 1) % max(1, len(self.parts)))

    def do_previous_part(self) -> None:
        """Select the part before."""
        self.choose((self.chosen - 1) % max(1, len(self.parts)))

    # ---- setting ----

    def set(self, setting: float) -> None:
        """Set the selected part, and what is tied to it; they glide there."""
        if (part := self.part) is not None:
            self._desk.change(self.with_tied(part.designator, setting))

    def _step(self, count: int, *, coarse: bool = False) -> None:
        if (part := self.part) is not None:
            self.set(stepped(part, count, coarse=coarse))

    def do_value_up(self) -> None:
        """Next higher standard value; a hundredth of a turn; close."""
        self._step(1)

    def do_value_down(self) -> None:
        """Next lower standard value; a hundredth of a turn back; open."""
        self._step(-1)

    def do_coarse_up(self) -> None:
        """Next of 1, 2.2, 4.7; a tenth of a turn; close."""
        self._step(1, coarse=True)

    def do_coarse_down(self) -> None:
        """Next lower of 1, 2.2, 4.7; a tenth of a turn back; open."""
        self._step(-1, coarse=True)

    def do_nearest_value(self) -> str | None:
        """The standard value nearest to what was typed or tied."""
        part = self.part
        if not isinstance(part, TwoTerminal):
            return None
        self.set(nearest(part.value, series_of(part)))
        return f"{part.designator} stands at a value of {series_of(part)}"

    def do_next_series(self) -> str | None:
        """The next E series for the selected part; the value stays."""
        part = self.part
        if not isinstance(part, TwoTerminal):
            return None if part is None else f"{part.designator} has no E series"
        names = list(SERIES)
        name = names[(names.index(series_of(part)) + 1) % len(names)]
        desk = self._desk
        desk.session = replace(desk.session, stage=desk.session.stage.with_part(replace(part, series=name)))
        return f"{part.designator} now steps in {name}"

    def do_reset_part(self) -> None:
        """The selected part's setting from before."""
        part = self.part
        if part is not None and (was := self.before(part.designator)) is not None:
            self.set(was.setting)

    def do_reset_all(self) -> str:
        """All settings from before."""
        session = self._desk.session
        for part in session.stage.settable:
            if (was := self.before(part.designator)) is not None:
                session = with_setting(session, part.designator, was.setting)
        self._desk.change(session)
        return f"all values are those from before; {self._desk.keys.shown('undo')} takes this back"

    # ---- ties ----

    def tied_to(self, designator: str) -> tuple[str, ...]:
        """The other parts that move when this one does."""
        group = next((group for group in self._ties if designator in group), frozenset())
        names = (part.designator for part in self.parts)
        return tuple(name for name in names if name in group and name != designator)

    def with_tied(self, designator: str, setting: float) -> Session:
        """The session with the part set and those tied to it moved along: values in ratio, positions alike.

        Raises
        ------
        PartValueError
            One of them would leave the range of such a part.
        """
        session = self._desk.session
        part = session.stage.part(designator)
        assert isinstance(part, SettablePart)
        for name in self.tied_to(designator):
            other = session.stage.part(name)
            moved = setting
            if isinstance(part, TwoTerminal) and isinstance(other, TwoTerminal):
                moved = float(f"{other.value * (setting / part.value):{_DIGITS}}")
                check_value(other.kind, moved, f"{name}, tied to {designator}")
            session = with_setting(session, name, moved)
        return with_setting(session, designator, setting)

    def tie_choices(self) -> list[Choice]:
        """What the selected part can be tied to, and how."""
        part = self.part
        assert part is not None
        rows = []
        tied = self.tied_to(part.designator)
        for other in self.parts:
            if other.designator == part.designator or other.kind is not part.kind:
                continue
            if (
                isinstance(part, TwoTerminal)
                and isinstance(other, TwoTerminal)
                and other.designator not in tied
            ):
                ratio = other.value / part.value
                about = f"now {setting_text(other)}, {ratio:.4g} times {part.designator}; stays in that ratio"
                rows.append(Choice(f"ratio {other.designator}", f"{other.designator} in ratio", about))
            about = f"now {setting_text(other)}; becomes {setting_text(part)} and stays equal"
            rows.append(Choice(f"equal {other.designator}", f"{other.designator} equal", about))
        if tied:
            about = f"moves alone again; tied now: {', '.join(tied)}"
            rows.append(Choice("untie", f"untie {part.designator}", about))
        return rows

    def tie(self, answer: str) -> str:
        """Carry out one of the choices."""
        part = self.part
        assert part is not None
        name = part.designator
        how, _, other = answer.partition(" ")
        if how == "untie":
            self._ties = [group - {name} for group in self._ties if len(group - {name}) > 1]
            return f"{name} moves alone again"
        if how == "equal":
            self._desk.change(with_setting(self._desk.session, other, part.setting))
        joined = frozenset((name, other)).union(*(g for g in self._ties if g & {name, other}))
        self._ties = [group for group in self._ties if not group & joined] + [joined]
        return f"{name} and {other} move together, {'equal' if how == 'equal' else 'in ratio'}"


def kind_words(part: SettablePart) -> tuple[str, str]:
    """The column of the series, and that of the tolerance or track: ``E24`` and ``1 %``; ``log`` and ``10 kΩ``."""
    if isinstance(part, Switch):
        return "switch", ""
    tolerance = (
        "" if part.tolerance_ratio is None else f"{format_value(100.0 * part.tolerance_ratio, 'percent')}"
    )
    if isinstance(part, Potentiometer):
        return part.taper, tolerance
    return series_of(part), tolerance
