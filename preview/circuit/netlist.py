"""The netlist: a stage with its source, load and supply, checked, ready for the nodal equations."""

from __future__ import annotations

from preview.circuit.checks import check
from preview.circuit.controls import Contact, Track
from preview.circuit.diodes import Junction
from preview.circuit.elements import Branch, Charge, FixedNode, Netlist, OpAmpSite, Port
from preview.circuit.limits import check_value
from preview.circuit.nodes import (
    GND,
    IN,
    LOAD_DESIGNATOR,
    NEGATIVE_RAIL,
    OUT,
    POSITIVE_RAIL,
    SOURCE_DESIGNATOR,
    SOURCE_NODE,
)
from preview.circuit.parts import PartKind, Stage, Supply
from preview.circuit.sites import check_supply, opamp_site
from preview.circuit.wiring import Wiring
from preview.errors import UnknownNameError

__all__ = [
    "GND",
    "IN",
    "LOAD_DESIGNATOR",
    "NEGATIVE_RAIL",
    "OUT",
    "POSITIVE_RAIL",
    "SOURCE_DESIGNATOR",
    "SOURCE_NODE",
    "Branch",
    "Charge",
    "Contact",
    "FixedNode",
    "Junction",
    "Netlist",
    "OpAmpSite",
    "Port",
    "Track",
    "check_supply",
    "netlist",
]


def netlist(
    stage: Stage,
    *,
    supply: Supply | None = None,
    source_ohm: float = 0.0,
    load_ohm: float | None = None,
    output: str = OUT,
) -> Netlist:
    """The checked netlist of a stage.

    Parameters
    ----------
    supply : Supply, optional
        Rails that replace the stage's own.
    source_ohm : float
        Resistance of the source [ohm]; 0 for an ideal one.
    load_ohm : float, optional
        Resistance from the output to gnd [ohm]; None for no load.
    output : str
        Node that is listened to and loaded: ``out`` or another of the stage's outputs.

    Raises
    ------
    CircuitError
        The circuit cannot be computed: see ``preview.circuit.checks``.
    """
    where = f"stage {stage.name}"
    rails = supply or stage.supply
    check_supply(rails, where)
    if output != OUT and output not in stage.outputs:
        outputs = ", ".join((OUT, *stage.outputs))
        raise UnknownNameError(f"{where} has no output {output}", f"outputs are {outputs}")
    wiring = Wiring(where, stage.temperature_degc)
    if source_ohm != 0.0:
        check_value(PartKind.RESISTOR, source_ohm, "source resistance")
        wiring.branches.append(Branch(SOURCE_DESIGNATOR, PartKind.RESISTOR, SOURCE_NODE, IN, source_ohm))
    for part in stage.parts:
        wiring.add(part)
    if load_ohm is not None:
        check_value(PartKind.RESISTOR, load_ohm, "load resistance")
        wiring.branches.append(Branch(LOAD_DESIGNATOR, PartKind.RESISTOR, output, GND, load_ohm))
    used = {node for part in stage.parts for node in part.nodes}
    for node, volts in ((POSITIVE_RAIL, rails.positive_v), (NEGATIVE_RAIL, rails.negative_v)):
        if node in used:
            wiring.fixed.append(FixedNode(node, node, volts))
    circuit = Netlist(
        input_node=SOURCE_NODE if source_ohm != 0.0 else IN,
        output_node=output,
        branches=tuple(wiring.branches),
        opamps=tuple(opamp_site(opamp, rails, where) for opamp in stage.opamps),
        ports=tuple(wiring.ports),
        fixed=tuple(wiring.fixed),
        controls=tuple(wiring.controls),
        temperature_degc=stage.temperature_degc,
    )
    check(circuit, where)
    return circuit
