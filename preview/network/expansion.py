"""Op-amps taken apart: an inner voltage behind an output stage, and what their inputs load the circuit with."""

from __future__ import annotations

import math
from dataclasses import replace

from preview.circuit.netlist import GND, Branch, Junction, Netlist, OpAmpSite, Port
from preview.circuit.opamp import OpAmpModel
from preview.circuit.parts import PartKind

__all__ = [
    "expanded",
    "gain_bandwidth_hz",
    "has_real_opamps",
    "inner_node",
    "output_ohm",
    "runs_as_they_are",
]

LEAST_OUTPUT_OHM = 0.01
"""Output resistance that an op-amp without one is given beside real ones [ohm]."""
IDEAL_GAIN_BANDWIDTH_HZ = 1e9
"""Gain-bandwidth that an ideal op-amp is given beside real ones [Hz]."""
CROSSOVER_SLOPE_V = 0.0259
"""Slope voltage of the output transistors of a class-B stage, kT/q at 300 K [V]."""
CROSSOVER_AT_A = 100e-6
"""Current at which each of them takes half of the dead zone [A]."""
DIODE_LEAK_OHM = 100e6
"""What lies across a diode in series with an inductor, so that the inductor's current always has a way [ohm]."""
CROSSOVER_LEAK_OHM = 10e6
"""What joins the inner voltage to the output within the dead zone [ohm]."""


def has_real_opamps(netlist: Netlist) -> bool:
    """Whether any op-amp has figures of its own."""
    return any(o.model.real for o in netlist.opamps)


def runs_as_they_are(netlist: Netlist) -> bool:
    """Whether anything in a circuit needs more than ideal op-amps between R, L and C."""
    return has_real_opamps(netlist) or bool(netlist.ports) or bool(netlist.fixed)


def output_ohm(model: OpAmpModel) -> float:
    """Output resistance that is computed with [ohm]."""
    return max(model.output_resistance_ohm, LEAST_OUTPUT_OHM)


def gain_bandwidth_hz(model: OpAmpModel) -> float:
    """Gain-bandwidth that is computed with [Hz]."""
    return model.gain_bandwidth_hz if math.isfinite(model.gain_bandwidth_hz) else IDEAL_GAIN_BANDWIDTH_HZ


def inner_node(opamp: OpAmpSite) -> str:
    """Node of the inner voltage of an op-amp taken apart."""
    return f"{opamp.designator}.w"


def expanded(netlist: Netlist) -> Netlist:
    """The netlist with each op-amp's inner voltage as its output node, followed by its output stage as parts.

    The output stage is the output resistance or, for a class-B stage, a junction each way with that resistance. Input
    capacitances are branches, but between nodes that are held they are left out.
    """
    held = {GND, netlist.input_node, *(f.node for f in netlist.fixed)}
    branches, ports = list(netlist.branches), list(netlist.ports)
    for o in netlist.opamps:
        name, w, model = o.designator, inner_node(o), o.model
        if model.crossover_v > 0.0:
            saturation_a = CROSSOVER_AT_A * math.exp(-0.5 * model.crossover_v / CROSSOVER_SLOPE_V)
            law = Junction(saturation_a, CROSSOVER_SLOPE_V, output_ohm(model))
            ports += [Port(f"{name}.source", w, o.out, law), Port(f"{name}.sink", o.out, w, law)]
            branches.append(Branch(f"{name}.leak", PartKind.RESISTOR, w, o.out, CROSSOVER_LEAK_OHM))
        else:
            branches.append(Branch(f"{name}.Rout", PartKind.RESISTOR, w, o.out, output_ohm(model)))
        for label, a, b, farad in (
            ("C+", o.plus, GND, model.input_farad),
            ("C-", o.minus, GND, model.input_farad),
            ("Cd", o.plus, o.minus, model.input_differential_farad),
        ):
            if farad > 0.0 and not (a in held and b in held):
                branches.append(Branch(f"{name}.{label}", PartKind.CAPACITOR, a, b, farad))
    for p in _through_inductors(netlist.input_node, branches, netlist):
        branches.append(Branch(f"{p.designator}.leak", PartKind.RESISTOR, p.a, p.b, DIODE_LEAK_OHM))
    return replace(
        netlist,
        branches=tuple(branches),
        ports=tuple(ports),
        opamps=tuple(replace(o, out=inner_node(o)) for o in netlist.opamps),
    )


def _through_inductors(source: str, branches: list[Branch], netlist: Netlist) -> list[Port]:
    """Diodes between nodes that without them only inductors join."""
    group: dict[str, str] = {}

    def root(node: str) -> str:
        while group.setdefault(node, node) != node:
            node = group[node]
        return node

    held = (GND, source, *(f.node for f in netlist.fixed), *(inner_node(o) for o in netlist.opamps))
    for a, b in (
        *((GND, node) for node in held),
        *((b.a, b.b) for b in branches if b.kind is not PartKind.INDUCTOR),
    ):
        group[root(a)] = root(b)
    found = []
    for p in netlist.ports:
        if root(p.a) != root(p.b):
            found.append(p)
            group[root(p.a)] = root(p.b)
    return found
