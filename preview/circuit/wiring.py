"""From the parts of a stage to the elements of a netlist."""

from __future__ import annotations

from preview.circuit.controls import Contact, Track
from preview.circuit.diodes import ROOM_DEGC, junction
from preview.circuit.elements import Branch, Charge, FixedNode, Port
from preview.circuit.limits import check_value
from preview.circuit.nodes import GND
from preview.circuit.parts import (
    Diode,
    FixedVoltage,
    Part,
    PartKind,
    Potentiometer,
    Switch,
    TwoTerminal,
)
from preview.errors import CircuitError

__all__ = ["LEAK_OHM", "Wiring"]

LEAK_OHM = 1e10
"""Resistance across every diode, so that no node floats for want of a current through it [ohm]."""


class Wiring:
    """Collects the elements of a netlist, part by part; op-amps are left to ``preview.circuit.sites``.

    Parameters
    ----------
    where : str
        What a message starts with: the stage's name.
    temperature_degc : float
        Temperature of the parts that have none of their own [degrees Celsius].
    """

    def __init__(self, where: str, temperature_degc: float = ROOM_DEGC) -> None:
        self.branches: list[Branch] = []
        self.ports: list[Port] = []
        self.fixed: list[FixedNode] = []
        self.controls: list[Track | Contact] = []
        self._where = where
        self._temperature_degc = temperature_degc

    def add(self, part: Part) -> None:
        """Add the elements of one part; PartValueError or CircuitError where it cannot be what it says."""
        place = f"{self._where}, {part.designator}"
        match part:
            case TwoTerminal():
                check_value(part.kind, part.value, place)
                self._two_terminal(part)
            case Potentiometer():
                check_value(part.kind, part.value, place)
                self._potentiometer(part)
            case Switch():
                contact = Contact(part.designator, part.closed)
                self.controls.append(contact)
                (ohm,) = contact.branch_values().values()
                self._resistor(part.designator, *part.nodes, ohm, of=part.designator)
            case Diode():
                self._diode(part)
            case FixedVoltage():
                check_value(part.kind, part.value, place)
                self._fixed(part, place)

    def _resistor(self, designator: str, a: str, b: str, ohm: float, *, of: str) -> None:
        self.branches.append(Branch(designator, PartKind.RESISTOR, a, b, ohm, part=of))

    def _two_terminal(self, part: TwoTerminal) -> None:
        a, b = part.nodes
        self.branches.append(Branch(part.designator, part.kind, a, b, part.value))
        if part.half_v is not None:
            self.ports.append(Port(part.designator, a, b, Charge(part.value, part.half_v)))

    def _potentiometer(self, part: Potentiometer) -> None:
        """Two resistors; a half whose ends are one node, as in a variable resistor, is left out."""
        track = Track(part.designator, part.value, part.taper, part.position)
        self.controls.append(track)
        first, last = part.ends
        pairs = ((first, part.wiper), (part.wiper, last))
        for (name, ohm), (a, b) in zip(track.branch_values().items(), pairs, strict=True):
            if a != b:
                self._resistor(name, a, b, ohm, of=part.designator)

    def _diode(self, part: Diode) -> None:
        temperature_degc = self._temperature_degc if part.temperature_degc is None else part.temperature_degc
        name, a, b = part.designator, part.anode, part.cathode
        self._resistor(f"{name}.leak", a, b, LEAK_OHM, of=name)
        if part.model.capacitance_farad > 0.0:
            farad = part.model.capacitance_farad
            self.branches.append(Branch(f"{name}.junction", PartKind.CAPACITOR, a, b, farad, part=name))
        self.ports.append(Port(name, a, b, junction(part.model, temperature_degc)))

    def _fixed(self, part: FixedVoltage, place: str) -> None:
        a, b = part.nodes
        if GND not in part.nodes:
            raise CircuitError(
                f"{place}: a fixed voltage between {a} and {b}, neither of which is gnd",
                "one end goes to gnd",
            )
        node, volts = (a, part.value) if b == GND else (b, -part.value)
        self.fixed.append(FixedNode(part.designator, node, volts))
