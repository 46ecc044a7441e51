"""Parts, supply, source and load: what a stage is made of."""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum
from pathlib import Path

from preview.errors import UnknownNameError

__all__ = [
    "Expect",
    "OpAmp",
    "Part",
    "PartKind",
    "Stage",
    "Supply",
    "TwoTerminal",
]


class PartKind(StrEnum):
    """The kinds of part that a stage file can name."""

    RESISTOR = "resistor"
    """Linear resistance, value in ohms."""
    CAPACITOR = "capacitor"
    """Linear capacitance, value in farads."""
    INDUCTOR = "inductor"
    """Linear inductance, value in henries."""
    POTENTIOMETER = "potentiometer"
    """Resistive track with a wiper, value of the whole track in ohms."""
    SWITCH = "switch"
    """Two contacts, closed or open."""
    DIODE = "diode"
    """Junction: signal diode, LED, zener."""
    VOLTAGE = "voltage"
    """Fixed voltage between a node and gnd, in volts."""
    OPAMP = "opamp"
    """Operational amplifier; no value of its own, a type."""


@dataclass(frozen=True, slots=True)
class Supply:
    """The rails, in volts against gnd."""

    positive_v: float
    """Positive rail [V]."""
    negative_v: float
    """Negative rail [V]; 0 for a single supply."""


@dataclass(frozen=True, slots=True)
class TwoTerminal:
    """A resistor, capacitor or inductor."""

    designator: str
    """Name on the schematic, such as R1."""
    kind: PartKind
    """Resistor, capacitor or inductor."""
    nodes: tuple[str, str]
    """The two nodes it joins."""
    value: float
    """Ohm, farad or henry."""
    tolerance_ratio: float | None = None
    """Half width of the tolerance band as a ratio (0.01 for 1 %), None where not stated."""
    series: str | None = None
    """Name of its E series (E24), None where not stated: the desk then takes E24 for R, E12 for C and L."""
    role: str = ""
    """What it does, in words."""
    dielectric: str = ""
    """Capacitors: the dielectric, in words."""


@dataclass(frozen=True, slots=True)
class OpAmp:
    """An operational amplifier."""

    designator: str
    """Name on the schematic, such as U1."""
    plus: str
    """Node of the non-inverting input."""
    minus: str
    """Node of the inverting input."""
    out: str
    """Node of the output."""
    type: str
    """``perfect`` (no limits), ``ideal`` (the rails are its only limit) or a type's name."""
    role: str = ""
    """What it does, in words."""


Part = TwoTerminal | OpAmp


@dataclass(frozen=True, slots=True)
class Expect:
    """A figure that a stage must come out with."""

    what: str
    """Name of the figure, such as ``corner_hz`` or ``gain_db_at_1000_hz``."""
    value: float
    """The published or derived figure, in the unit that ends ``what``."""
    within: float
    """Allowed deviation as a ratio of ``value`` (``within = "0.1 %"``) or, if ``absolute``, in its unit."""
    absolute: bool
    """Whether ``within`` is in the unit of the figure and not a ratio."""
    source: str
    """Where the figure comes from."""
    parts: tuple[tuple[str, float], ...] = ()
    """Part values this figure holds for, where they differ from the stage's own."""


@dataclass(frozen=True, slots=True)
class Stage:
    """A circuit with a signal input ``in``, an output ``out`` and a reference ``gnd``."""

    name: str
    """Short name (file name without ending)."""
    title: str
    """Title, one line."""
    about: str
    """What it does, a sentence or two."""
    supply: Supply
    """The rails it is drawn with."""
    parts: tuple[Part, ...]
    """All parts in the file's order."""
    expects: tuple[Expect, ...] = ()
    """Figures that must come true."""
    drawing: str = ""
    """The schematic as text with the designators in it; empty where the file has none."""
    path: Path | None = None
    """The file it was read from."""

    def part(self, designator: str) -> Part:
        """The part of that designator; UnknownNameError names those there are."""
        for part in self.parts:
            if part.designator == designator:
                return part
        known = ", ".join(p.designator for p in self.parts)
        raise UnknownNameError(f"stage {self.name} has no part {designator}", f"it has {known}")

    @property
    def valued(self) -> tuple[TwoTerminal, ...]:
        """The parts that have a value, in the file's order."""
        return tuple(p for p in self.parts if isinstance(p, TwoTerminal))

    @property
    def opamps(self) -> tuple[OpAmp, ...]:
        """The op-amps, in the file's order."""
        return tuple(p for p in self.parts if isinstance(p, OpAmp))

    def with_part(self, part: Part) -> Stage:
        """The same stage with the part of that designator replaced."""
        self.part(part.designator)
        return replace(
            self,
            parts=tuple(part if p.designator == part.designator else p for p in self.parts),
        )
