"""What of a netlist is connected to what, and what sets the voltage of a node."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable

from preview.circuit.elements import Branch, Netlist
from preview.circuit.nodes import GND, NEGATIVE_RAIL, POSITIVE_RAIL
from preview.circuit.parts import PartKind

__all__ = [
    "RAILS",
    "closure",
    "driven",
    "floating",
    "holder",
    "holders",
    "influenced",
    "listed",
    "neighbours",
    "uses",
]

RAILS = (POSITIVE_RAIL, NEGATIVE_RAIL)


def listed(names: Iterable[str]) -> str:
    """Names in a row: ``R1``, ``R1 and C1``, ``R1, R2 and C1``."""
    *most, last = names
    return f"{', '.join(most)} and {last}" if most else last


def uses(circuit: Netlist) -> dict[str, dict[str, None]]:
    """What is connected to each node, each part once: ``R1``, ``the + input of U1`` ..."""
    uses: dict[str, dict[str, None]] = defaultdict(dict)
    for branch in circuit.branches:
        uses[branch.a][branch.owner] = uses[branch.b][branch.owner] = None
    for opamp in circuit.opamps:
        uses[opamp.plus][f"the + input of {opamp.designator}"] = None
        uses[opamp.minus][f"the - input of {opamp.designator}"] = None
        uses[opamp.out][f"the output of {opamp.designator}"] = None
    for fixed in circuit.fixed:
        if fixed.node not in RAILS:
            uses[fixed.node][fixed.designator] = None
    return uses


def holders(circuit: Netlist) -> dict[str, str]:
    """Nodes that gnd, the ideal source and fixed voltages hold, and what holds each, in words."""
    held = {GND: "gnd", circuit.input_node: "the signal source"}
    return held | {fixed.node: fixed.designator for fixed in circuit.fixed}


def floating(circuit: Netlist) -> list[str]:
    """Nodes that no direct current can reach."""
    conducting = (branch for branch in circuit.branches if branch.kind is not PartKind.CAPACITOR)
    reached = closure(driven(circuit), neighbours(conducting))
    return [node for node in circuit.nodes if node not in reached]


def driven(circuit: Netlist) -> set[str]:
    """Nodes whose voltage is set whatever current flows: those that are held, and every op-amp output."""
    return {*holders(circuit), *(opamp.out for opamp in circuit.opamps)}


def closure(start: Iterable[str], neighbours: dict[str, set[str]]) -> set[str]:
    """Every node that can be reached from the start."""
    reached = set(start)
    waiting = list(reached)
    while waiting:
        for node in neighbours.get(waiting.pop(), ()):
            if node not in reached:
                reached.add(node)
                waiting.append(node)
    return reached


def influenced(
    circuit: Netlist, start: str, *, through_opamps: bool, branches: Iterable[Branch] | None = None
) -> set[str]:
    """Nodes that follow the start node: through parts to free nodes and, if asked, on through op-amps.

    ``branches`` are the parts to go through; all where they are not given.
    """
    fixed = driven(circuit)
    follows: dict[str, set[str]] = defaultdict(set)
    for branch in circuit.branches if branches is None else branches:
        if branch.b not in fixed:
            follows[branch.a].add(branch.b)
        if branch.a not in fixed:
            follows[branch.b].add(branch.a)
    if through_opamps:
        for opamp in circuit.opamps:
            follows[opamp.plus].add(opamp.out)
            follows[opamp.minus].add(opamp.out)
    return closure([start], follows)


def holder(name: str) -> str:
    """What holds a node, as a message names it."""
    return f"the rail {name}" if name in RAILS else name


def neighbours(branches: Iterable[Branch]) -> dict[str, set[str]]:
    """Every node with those that a branch joins it to."""
    found: dict[str, set[str]] = defaultdict(set)
    for branch in branches:
        found[branch.a].add(branch.b)
        found[branch.b].add(branch.a)
    return found
