"""Whether a netlist can be computed: what can be told from its wiring alone, before any number is solved."""

from __future__ import annotations

from collections.abc import Iterator

from preview.circuit.elements import Netlist, OpAmpSite
from preview.circuit.nodes import GND, IN, LOAD_PARTS, OUT, SOURCE_PARTS
from preview.circuit.parts import PartKind
from preview.circuit.paths import (
    RAILS,
    driven,
    floating,
    holder,
    holders,
    influenced,
    listed,
    uses,
)
from preview.errors import CircuitError

__all__ = ["check", "problems"]

Problem = tuple[str, str]
"""What is wrong, and the cure."""


def check(circuit: Netlist, where: str) -> None:
    """Raise CircuitError for the first thing that makes the circuit impossible to compute.

    Parameters
    ----------
    circuit : Netlist
        The circuit with its source and load.
    where : str
        What the message starts with: the stage's name or file.
    """
    for message, cure in problems(circuit):
        raise CircuitError(f"{where}: {message}", cure)


def problems(circuit: Netlist) -> Iterator[Problem]:
    """Everything wrong with the wiring, plainest faults first; later ones may follow from earlier ones."""
    yield from _ends(circuit)
    yield from _shorted_parts(circuit)
    yield from _output_conflicts(circuit)
    yield from _dangling(circuit)
    yield from _no_dc_path(circuit)
    yield from _inductor_shorts(circuit)
    yield from _feedback(circuit)
    yield from _no_signal_path(circuit)


def _ends(circuit: Netlist) -> Iterator[Problem]:
    outside = {*SOURCE_PARTS, *LOAD_PARTS}
    own = {node: None for node, users in uses(circuit).items() if not outside.issuperset(users)}
    for node, words in ((IN, "the signal goes in at"), (OUT, "the signal is taken from")):
        if node not in own:
            cure = f"{words} the node named {node}; nodes are {', '.join(own) or 'none'}"
            yield f"no part is connected to {node}", cure


def _shorted_parts(circuit: Netlist) -> Iterator[Problem]:
    for branch in circuit.branches:
        if branch.a == branch.b:
            yield (
                f"both ends of {branch.owner} are on node {branch.a}",
                "give it two different nodes or take it out",
            )
    for opamp in circuit.opamps:
        if opamp.plus == opamp.minus:
            yield (
                f"both inputs of {opamp.designator} are on node {opamp.plus}",
                "give plus and minus different nodes",
            )


def _output_conflicts(circuit: Netlist) -> Iterator[Problem]:
    """Two things that each set the voltage of one node."""
    yield from _voltage_loops(circuit)
    held = holders(circuit)
    owner: dict[str, str] = {}
    for opamp in circuit.opamps:
        name, node = opamp.designator, opamp.out
        if node == GND:
            yield f"the output of {name} is on gnd", "gnd is fixed at 0 V: give the output a node of its own"
        elif node == circuit.input_node:
            yield (
                f"the output of {name} is on node {node}, which the signal source drives",
                "give the output a node of its own, or the source a resistance",
            )
        elif node in held:
            yield (
                f"the output of {name} is on node {node}, which {holder(held[node])} holds",
                "give the output a node of its own",
            )
        elif node in owner:
            yield (
                f"the outputs of {owner[node]} and {name} are both on node {node}",
                "two outputs on one node fight: put a resistor between them or use one",
            )
        owner.setdefault(node, name)


def _voltage_loops(circuit: Netlist) -> Iterator[Problem]:
    held = {GND: "gnd", circuit.input_node: "the signal source"}
    for fixed in circuit.fixed:
        if fixed.node in held:
            yield (
                f"{holder(fixed.designator)} and {holder(held[fixed.node])} both hold node {fixed.node}: "
                f"a loop of voltage sources",
                "take one away, or put a resistor between them",
            )
        held[fixed.node] = fixed.designator


def _dangling(circuit: Netlist) -> Iterator[Problem]:
    for node, users in uses(circuit).items():
        if len(users) == 1 and node not in (IN, OUT, GND, *RAILS, circuit.input_node, circuit.output_node):
            (user,) = users
            yield (
                f"node {node} is dangling: only {user} is connected to it",
                "connect a second part to it, or check how its name is spelled",
            )


def _no_dc_path(circuit: Netlist) -> Iterator[Problem]:
    users_of = uses(circuit)
    if loose := floating(circuit):
        users = dict.fromkeys(user for node in loose for user in users_of[node])
        nodes = "node" if len(loose) == 1 else "nodes"
        verb = "is" if len(loose) == 1 else "are"
        yield (
            f"{nodes} {listed(loose)} {verb} floating: no direct current can flow through {listed(users)}",
            f"give it a path, such as a resistor of 1 MΩ from {loose[0]} to gnd",
        )


def _inductor_shorts(circuit: Netlist) -> Iterator[Problem]:
    """Loops of nothing but inductors and fixed voltages: their direct current is unlimited or not defined."""
    group = {node: node for node in (*circuit.nodes, GND)}

    def root(node: str) -> str:
        while group[node] != node:
            node = group[node]
        return node

    fixed = driven(circuit)
    for node in fixed:
        group[node] = GND
    for branch in circuit.branches:
        if branch.kind is not PartKind.INDUCTOR:
            continue
        a, b = root(branch.a), root(branch.b)
        if a != b:
            group[a] = b
        elif a == root(GND):
            yield (
                f"{branch.designator} shorts the source, an op-amp output or gnd, or a fixed voltage, "
                f"for direct current",
                "put its winding resistance in series, as a resistor",
            )
        else:
            yield (
                f"{branch.designator} closes a loop of inductors only, whose direct current is not defined",
                "put its winding resistance in series, as a resistor",
            )


def _feedback(circuit: Netlist) -> Iterator[Problem]:
    for opamp in circuit.opamps:
        through_parts = influenced(circuit, opamp.out, through_opamps=False)
        anywhere = influenced(circuit, opamp.out, through_opamps=True)
        if opamp.minus in anywhere:
            continue
        if opamp.plus in through_parts:
            yield (
                f"{opamp.designator} has positive feedback only: its output {opamp.out} comes back to its "
                f"+ input and not to its - input",
                "swap plus and minus, or add feedback to minus",
            )
        elif opamp.plus not in anywhere:
            yield (
                f"{opamp.designator} has no feedback: nothing leads from its output {opamp.out} to its "
                f"- input{_held(circuit, opamp)}",
                "join its output to its - input by a part; comparators cannot be computed",
            )


def _held(circuit: Netlist, opamp: OpAmpSite) -> str:
    """Why no feedback can reach the - input, where it is held."""
    name = holders(circuit).get(opamp.minus)
    if name is None:
        return ""
    return ", which is on gnd" if name == "gnd" else f", which is held by {holder(name)}"


def _no_signal_path(circuit: Netlist) -> Iterator[Problem]:
    if circuit.output_node not in influenced(circuit, circuit.input_node, through_opamps=True):
        yield (
            f"nothing leads from in to {circuit.output_node}",
            "check the node names along the signal's way",
        )
