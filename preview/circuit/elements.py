"""What a netlist is made of: branches, op-amps in their places, nonlinear ports, held nodes, controls."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

from preview.circuit.controls import Contact, Track
from preview.circuit.diodes import ROOM_DEGC, Junction
from preview.circuit.nodes import GND
from preview.circuit.opamp import IDEAL, OpAmpModel
from preview.circuit.parts import PartKind

__all__ = ["Branch", "Charge", "FixedNode", "Netlist", "OpAmpSite", "Port"]


@dataclass(frozen=True, slots=True)
class Branch:
    """A two-terminal element between two nodes."""

    designator: str
    """R1, C2 ...; what drives and follows the stage is called ``Rsource``, ``Ccable``, ``Rload`` and so on."""
    kind: PartKind
    """Resistor, capacitor or inductor."""
    a: str
    """First node."""
    b: str
    """Second node."""
    value: float
    """Ohm, farad or henry."""
    part: str = ""
    """The potentiometer, switch or diode that it is a piece of; empty for a part of its own."""

    @property
    def owner(self) -> str:
        """The part it belongs to, itself included."""
        return self.part or self.designator

    def with_value(self, value: float) -> Branch:
        """The same element of another value; a glide makes many."""
        return Branch(self.designator, self.kind, self.a, self.b, value, self.part)


@dataclass(frozen=True, slots=True)
class OpAmpSite:
    """An op-amp in its place with the limits that hold for it there."""

    designator: str
    """U1, U2 ..."""
    plus: str
    """Node of the non-inverting input."""
    minus: str
    """Node of the inverting input."""
    out: str
    """Node of the output."""
    type: str
    """Its type's name."""
    high_v: float
    """Highest output voltage, the positive rail less the type's swing [V]; inf for ``perfect``."""
    low_v: float
    """Lowest output voltage, the negative rail plus the type's swing [V]; -inf for ``perfect``."""
    model: OpAmpModel = IDEAL
    """The figures of its type."""
    input_high_v: float = math.inf
    """Highest input voltage that its input stage follows [V]; inf without a limit."""
    input_low_v: float = -math.inf
    """Lowest input voltage that its input stage follows [V]; -inf without a limit."""


@dataclass(frozen=True, slots=True)
class Charge:
    """What a class 2 dielectric adds to a linear capacitor: charge ``C (V0 atan(v / V0) - v)``.

    Its small-signal capacitance is ``C / (1 + (v / V0)^2)``, half at ``half_v``.
    """

    farad: float
    """C, capacitance without a voltage [F]; the linear capacitor itself stands among the branches."""
    half_v: float
    """V0 [V]."""


@dataclass(frozen=True, slots=True)
class Port:
    """A nonlinear two-terminal element; the current flows from ``a`` to ``b``."""

    designator: str
    """D1, C3 ..."""
    a: str
    """Anode, or first node."""
    b: str
    """Cathode, or second node."""
    law: Junction | Charge
    """Its current or its charge by its voltage."""


@dataclass(frozen=True, slots=True)
class FixedNode:
    """A node held at a constant voltage against gnd."""

    designator: str
    """V1 ...; a rail is called as its node is."""
    node: str
    """The node."""
    volts: float
    """Its voltage [V]."""


@dataclass(frozen=True, slots=True)
class Netlist:
    """A circuit ready to be solved."""

    input_node: str
    """Node that the ideal signal source drives: ``in``, or ``source`` where anything is in series with it."""
    output_node: str
    """Node that is listened to: ``out``, or another of the stage's outputs."""
    branches: tuple[Branch, ...]
    """Every resistor, capacitor and inductor, source, load and the pieces of other parts included."""
    opamps: tuple[OpAmpSite, ...]
    """Every op-amp."""
    ports: tuple[Port, ...] = ()
    """Every diode, and the nonlinear part of every class 2 capacitor."""
    fixed: tuple[FixedNode, ...] = ()
    """Every node held at a constant voltage."""
    controls: tuple[Track | Contact, ...] = ()
    """Every potentiometer and switch; their branches are among the branches."""
    temperature_degc: float = ROOM_DEGC
    """Temperature of the circuit [degrees Celsius]."""

    @property
    def nodes(self) -> tuple[str, ...]:
        """Every node but gnd, in order of first mention; the input node first."""
        names: dict[str, None] = {self.input_node: None}
        for branch in self.branches:
            names[branch.a] = None
            names[branch.b] = None
        for opamp in self.opamps:
            names[opamp.plus] = None
            names[opamp.minus] = None
            names[opamp.out] = None
        for port in self.ports:
            names[port.a] = None
            names[port.b] = None
        for fixed in self.fixed:
            names[fixed.node] = None
        names.pop(GND, None)
        return tuple(names)

    @property
    def values(self) -> dict[str, float]:
        """Setting of each part by designator.

        Ohm, farad and henry; the position 0..1 of a potentiometer; 1 and 0 of a closed and an open switch.
        """
        own = {b.designator: b.value for b in self.branches if not b.part}
        return own | {control.designator: control.setting for control in self.controls}

    def with_values(self, values: Mapping[str, float]) -> Netlist:
        """The same netlist with other settings; designators not named keep theirs. Nothing is checked anew."""
        wanted = dict(values)
        turned = []
        for control in self.controls:
            if control.designator in values:
                control = control.at(values[control.designator])
                wanted |= control.branch_values()
            turned.append(control)
        return replace(
            self,
            controls=tuple(turned),
            branches=tuple(
                b.with_value(wanted[b.designator]) if b.designator in wanted else b for b in self.branches
            ),
            ports=tuple(
                replace(p, law=replace(p.law, farad=values[p.designator]))
                if isinstance(p.law, Charge) and p.designator in values
                else p
                for p in self.ports
            ),
        )
