"""Parts, supply, source and load: what a stage is made of."""

from __future__ import annotations

from dataclasses import dataclass, replace
from enum import StrEnum
from pathlib import Path

from preview.circuit.controls import Taper
from preview.circuit.diodes import ROOM_DEGC, DiodeModel
from preview.circuit.nodes import OUT
from preview.errors import UnknownNameError

__all__ = [
    "Diode",
    "Expect",
    "FixedVoltage",
    "OpAmp",
    "Part",
    "PartKind",
    "Potentiometer",
    "SettablePart",
    "Stage",
    "Supply",
    "Switch",
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
    half_v: float | None = None
    """Capacitors of a class 2 dielectric: DC voltage that halves the capacitance [V]; None for a linear one."""
    adjust: bool = False
    """Whether an engineer would try other values of it first."""

    @property
    def setting(self) -> float:
        """The value."""
        return self.value

    def with_setting(self, setting: float) -> TwoTerminal:
        """The same part of another value."""
        return replace(self, value=setting)


@dataclass(frozen=True, slots=True)
class Potentiometer:
    """A resistive track with a wiper."""

    designator: str
    """Name on the schematic, such as P1."""
    ends: tuple[str, str]
    """Nodes of the track's ends; at position 0 the wiper stands at the first."""
    wiper: str
    """Node of the wiper; one of the ends for a variable resistor."""
    value: float
    """The whole track [ohm]."""
    taper: Taper = "linear"
    """How the resistance grows with the turn."""
    position: float = 0.5
    """Turn of the shaft, 0..1."""
    tolerance_ratio: float | None = None
    """Half width of the track's tolerance band as a ratio, None where not stated."""
    role: str = ""
    """What it does, in words."""
    adjust: bool = True
    """Whether an engineer would turn it first; false for one that is set once."""

    @property
    def kind(self) -> PartKind:
        """Potentiometer."""
        return PartKind.POTENTIOMETER

    @property
    def nodes(self) -> tuple[str, ...]:
        """Both ends and the wiper."""
        return (*self.ends, self.wiper)

    @property
    def setting(self) -> float:
        """The position."""
        return self.position

    def with_setting(self, setting: float) -> Potentiometer:
        """The same part at another position."""
        return replace(self, position=setting)


@dataclass(frozen=True, slots=True)
class Switch:
    """Two contacts."""

    designator: str
    """Name on the schematic, such as S1."""
    nodes: tuple[str, str]
    """The two nodes it joins when it is closed."""
    closed: bool
    """Whether it is closed."""
    role: str = ""
    """What it does, in words."""
    adjust: bool = True
    """Whether an engineer would throw it first."""

    @property
    def kind(self) -> PartKind:
        """Switch."""
        return PartKind.SWITCH

    @property
    def setting(self) -> float:
        """1 closed, 0 open."""
        return float(self.closed)

    def with_setting(self, setting: float) -> Switch:
        """The same part, closed from a setting of one half on."""
        return replace(self, closed=setting >= 0.5)


@dataclass(frozen=True, slots=True)
class Diode:
    """A junction: signal diode, LED, zener."""

    designator: str
    """Name on the schematic, such as D1."""
    anode: str
    """Node of the anode."""
    cathode: str
    """Node of the cathode."""
    type: str
    """A key of ``preview.circuit.diodes.DIODE_TYPES``."""
    model: DiodeModel
    """The figures of its type with those that the stage file puts in their place."""
    temperature_degc: float | None = None
    """Its own temperature [degrees Celsius]; None where it has the stage's."""
    role: str = ""
    """What it does, in words."""

    @property
    def kind(self) -> PartKind:
        """Diode."""
        return PartKind.DIODE

    @property
    def nodes(self) -> tuple[str, str]:
        """Anode and cathode."""
        return self.anode, self.cathode


@dataclass(frozen=True, slots=True)
class FixedVoltage:
    """A constant voltage between a node and gnd."""

    designator: str
    """Name on the schematic, such as V1."""
    nodes: tuple[str, str]
    """Positive and negative node; one of them is gnd."""
    value: float
    """Voltage of the first node above the second [V]."""
    role: str = ""
    """What it does, in words."""

    @property
    def kind(self) -> PartKind:
        """Voltage."""
        return PartKind.VOLTAGE


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

    @property
    def kind(self) -> PartKind:
        """Op-amp."""
        return PartKind.OPAMP

    @property
    def nodes(self) -> tuple[str, ...]:
        """Both inputs and the output."""
        return self.plus, self.minus, self.out


SettablePart = TwoTerminal | Potentiometer | Switch
"""What has a setting that can change while it plays: a value, a position, open or closed."""
Part = TwoTerminal | Potentiometer | Switch | Diode | FixedVoltage | OpAmp


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
    """Settings of parts this figure holds for, where they differ from the stage's own."""
    output: str = OUT
    """The output it is a figure of."""
    opamp: str = ""
    """Type of every op-amp this figure holds for (``ideal``); empty for the stage's own."""


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
    outputs: tuple[str, ...] = ()
    """Further nodes that can be listened to instead of ``out``."""
    temperature_degc: float = ROOM_DEGC
    """Temperature of the circuit [degrees Celsius]."""
    joined: tuple[Stage, ...] = ()
    """The stages of a cascade, each as it was joined; empty for a single stage."""

    @property
    def opened_as(self) -> tuple[str, ...]:
        """What opens it again: a file's path or a name, one for each stage of a cascade."""
        return tuple(str(stage.path or stage.name) for stage in self.joined or (self,))

    def part(self, designator: str) -> Part:
        """The part of that designator; UnknownNameError names those there are."""
        for part in self.parts:
            if part.designator == designator:
                return part
        known = ", ".join(p.designator for p in self.parts)
        raise UnknownNameError(f"stage {self.name} has no part {designator}", f"it has {known}")

    @property
    def valued(self) -> tuple[TwoTerminal, ...]:
        """The resistors, capacitors and inductors, in the file's order."""
        return tuple(p for p in self.parts if isinstance(p, TwoTerminal))

    @property
    def settable(self) -> tuple[SettablePart, ...]:
        """The parts whose setting can change while it plays, in the file's order."""
        return tuple(p for p in self.parts if isinstance(p, SettablePart))

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
