"""The netlist: a stage with its source, load and supply, checked, ready for the nodal equations."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

from preview.circuit.checks import check
from preview.circuit.controls import Contact, Track
from preview.circuit.diodes import Junction
from preview.circuit.drive import Element, LoadModel, SourceModel
from preview.circuit.elements import Branch, Charge, FixedNode, Netlist, OpAmpSite, Port
from preview.circuit.limits import QUANTITY, check_value
from preview.circuit.nodes import (
    GND,
    IN,
    NEGATIVE_RAIL,
    OUT,
    POSITIVE_RAIL,
    SOURCE_NODE,
)
from preview.circuit.opamp import Limit
from preview.circuit.parts import PartKind, Stage, Supply
from preview.circuit.paths import closure, floating, neighbours
from preview.circuit.sites import check_supply, opamp_site
from preview.circuit.wiring import Wiring
from preview.errors import UnknownNameError

__all__ = [
    "GND",
    "IN",
    "NEGATIVE_RAIL",
    "OUT",
    "POSITIVE_RAIL",
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

LEAKAGE_OHM = 1e12
"""Leakage of a capacitive source that nothing else leads direct current from; an assumption [ohm]."""


def netlist(
    stage: Stage,
    *,
    supply: Supply | None = None,
    source: SourceModel | None = None,
    load: LoadModel | None = None,
    source_ohm: float = 0.0,
    load_ohm: float | None = None,
    output: str = OUT,
    without: Collection[Limit] = (),
) -> Netlist:
    """The checked netlist of a stage.

    Parameters
    ----------
    supply : Supply, optional
        Rails that replace the stage's own.
    source : SourceModel, optional
        What drives it.
    load : LoadModel, optional
        What follows its output.
    source_ohm : float
        Resistance of a source that is nothing else [ohm]; 0 for an ideal one.
    load_ohm : float, optional
        Resistance of a load that is nothing else [ohm]; None for no load.
    output : str
        Node that is listened to and loaded: ``out`` or another of the stage's outputs.
    without : collection of Limit
        Limits taken away from every op-amp, to hear what they do.

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
    source = source or SourceModel(source_ohm)
    wiring.branches.extend(_driving(source))
    for part in stage.parts:
        wiring.add(part)
    at_the_end = not stage.joined or output.startswith(f"{len(stage.joined)}.")
    loaded = output if at_the_end else OUT  # an output between the stages of a cascade is listened to only
    wiring.branches.extend(_across(loaded, (load or LoadModel(load_ohm)).across, "load"))
    used = {node for part in stage.parts for node in part.nodes}
    for node, volts in ((POSITIVE_RAIL, rails.positive_v), (NEGATIVE_RAIL, rails.negative_v)):
        if node in used:
            wiring.fixed.append(FixedNode(node, node, volts))
    circuit = Netlist(
        input_node=SOURCE_NODE if source.series else IN,
        output_node=output,
        branches=tuple(wiring.branches),
        opamps=tuple(opamp_site(opamp, rails, where, without) for opamp in stage.opamps),
        ports=tuple(wiring.ports),
        fixed=tuple(wiring.fixed),
        controls=tuple(wiring.controls),
        temperature_degc=stage.temperature_degc,
    )
    circuit = _with_leakage(circuit)
    check(circuit, where)
    return circuit


def _with_leakage(circuit: Netlist) -> Netlist:
    """The circuit with the leakage of a capacitive source, where nothing else leads direct current from its node.

    Between two capacitors, as a piezo disc and a coupling capacitor, the leakage of the parts decides where a node
    rests, and any is enough. An op-amp input or a diode there would draw a current of its own: that is for the checks.
    """
    conducting = (branch for branch in circuit.branches if branch.kind is not PartKind.CAPACITOR)
    between = closure([IN], neighbours(conducting))
    drawing = {node for opamp in circuit.opamps for node in (opamp.plus, opamp.minus)}
    drawing |= {node for port in circuit.ports if isinstance(port.law, Junction) for node in (port.a, port.b)}
    capacitive = any(branch.designator == "Csource" for branch in circuit.branches)
    if not capacitive or IN not in floating(circuit) or between & drawing:
        return circuit
    leakage = Branch("Rleakage", PartKind.RESISTOR, IN, GND, LEAKAGE_OHM)
    return replace(circuit, branches=(*circuit.branches, leakage))


def _driving(source: SourceModel) -> tuple[Branch, ...]:
    """The parts of the source, in a row from ``source`` to ``in`` and then across it."""
    inner = [f"{SOURCE_NODE}.{i}" for i in range(1, len(source.series))]
    ends = [SOURCE_NODE, *inner, IN]
    branches = []
    for (designator, kind, value), a, b in zip(source.series, ends, ends[1:], strict=False):
        check_value(kind, value, f"source {QUANTITY[kind]}")
        branches.append(Branch(designator, kind, a, b, value))
    return (*branches, *_across(IN, source.across, "source"))


def _across(node: str, elements: tuple[Element, ...], where: str) -> tuple[Branch, ...]:
    """Parts from a node to gnd."""
    for _, kind, value in elements:
        check_value(kind, value, f"{where} {QUANTITY[kind]}")
    return tuple(Branch(designator, kind, node, GND, value) for designator, kind, value in elements)
