"""What can be computed but is hardly meant: told from the wiring, the rails and the op-amp types alone."""

from __future__ import annotations

import math
from collections.abc import Iterator

from preview.circuit.controls import OPEN_OHM
from preview.circuit.diodes import Junction
from preview.circuit.elements import Branch, Netlist, OpAmpSite
from preview.circuit.nodes import GND, IN
from preview.circuit.parts import PartKind
from preview.circuit.paths import closure, driven, holder, holders, influenced, listed, neighbours, uses

__all__ = ["warnings"]

SHORT_OHM = 1.0
"""A resistance below this between two voltages that are set is called a short circuit [ohm]."""
MOST_A = 0.1
"""A steady current beyond this straight through a diode is called too much [A]."""


def warnings(circuit: Netlist) -> Iterator[tuple[str, str]]:
    """Each thing that is hardly meant, and its cure."""
    yield from _short_circuits(circuit)
    yield from _diodes_across_voltages(circuit)
    yield from _blocked_feedback(circuit)
    yield from _resting_on_leakage(circuit)
    yield from _source_on_leakage(circuit)
    for opamp in circuit.opamps:
        yield from _resting_point(circuit, opamp)


def _whats(circuit: Netlist) -> dict[str, str]:
    """Every node whose voltage is set, in words."""
    outputs = {opamp.out: f"the output of {opamp.designator}" for opamp in circuit.opamps}
    return {node: holder(name) for node, name in holders(circuit).items()} | outputs


def _short_circuits(circuit: Netlist) -> Iterator[tuple[str, str]]:
    whats = _whats(circuit)
    small = [b for b in circuit.branches if b.kind is PartKind.RESISTOR and b.value < SHORT_OHM]
    joined = neighbours(small)
    seen: set[str] = set()
    for node in whats:
        group = closure([node], joined)
        ends = [what for name, what in whats.items() if name in group]
        if len(ends) > 1 and node not in seen:
            parts = dict.fromkeys(b.owner for b in small if b.a in group)
            yield (
                f"{listed(parts)} {'shorts' if len(parts) == 1 else 'short'} {listed(ends)}",
                "open it, or put the resistance of the load in its place",
            )
        seen |= group


def _diodes_across_voltages(circuit: Netlist) -> Iterator[tuple[str, str]]:
    volts = {GND: 0.0} | {fixed.node: fixed.volts for fixed in circuit.fixed}
    for port in circuit.ports:
        law = port.law
        if not (isinstance(law, Junction) and port.a in volts and port.b in volts):
            continue
        across_v = volts[port.a] - volts[port.b]
        forward_v = law.slope_v * math.log1p(MOST_A / law.saturation_a) + law.series_ohm * MOST_A
        if across_v > forward_v or -across_v > law.breakdown_v:
            yield (
                f"{port.designator} lies straight across {abs(across_v):g} V in its conducting direction",
                "turn it round, or put a resistor in series",
            )


def _at_times(circuit: Netlist) -> set[str]:
    """Designators of diodes and open switches: parts that conduct at times only."""
    diodes = {port.designator for port in circuit.ports if isinstance(port.law, Junction)}
    switches = {b.part for b in circuit.branches if b.part and b.value >= OPEN_OHM}
    return diodes | switches


def _steady(circuit: Netlist) -> list[Branch]:
    """Branches that conduct at all times."""
    at_times = _at_times(circuit)
    return [b for b in circuit.branches if b.part not in at_times]


def _blocked_feedback(circuit: Netlist) -> Iterator[tuple[str, str]]:
    at_times = _at_times(circuit)
    steady = _steady(circuit)
    for opamp in circuit.opamps:
        follows = influenced(circuit, opamp.out, through_opamps=True)
        always = influenced(circuit, opamp.out, through_opamps=True, branches=steady)
        if opamp.minus not in follows - always:
            continue
        around = dict.fromkeys(
            b.owner for b in circuit.branches if b.part in at_times and {b.a, b.b} <= follows
        )
        yield (
            f"the feedback of {opamp.designator} goes through {listed(around)} alone: while it blocks, the output "
            f"runs to a rail",
            f"add a resistor from {opamp.out} to {opamp.minus}, unless that is meant",
        )


def _resting_on_leakage(circuit: Netlist) -> Iterator[tuple[str, str]]:
    conducting = (b for b in _steady(circuit) if b.kind is not PartKind.CAPACITOR)
    reached = closure(driven(circuit), neighbours(conducting))
    loose = [node for node in circuit.nodes if node not in reached]
    if loose:
        users = dict.fromkeys(
            user for node in loose for user in uses(circuit)[node] if user in _at_times(circuit)
        )
        yield (
            f"direct current reaches node {listed(loose)} through {listed(users)} alone: while it blocks, leakage "
            f"sets the voltage",
            f"give it a path, such as a resistor of 1 MΩ from {loose[0]} to gnd",
        )


def _source_on_leakage(circuit: Netlist) -> Iterator[tuple[str, str]]:
    if any(branch.designator == "Rleakage" for branch in circuit.branches):
        yield (
            f"node {IN} lies between capacitors: taken to leak to {GND} through 1 TΩ",
            f"put in the resistor that the board has there, such as 10 MΩ from {IN} to {GND}",
        )


def _resting_point(circuit: Netlist, opamp: OpAmpSite) -> Iterator[tuple[str, str]]:
    """A + input that direct current leads to one known voltage only, against the limits on these rails."""
    conducting = (b for b in _steady(circuit) if b.kind is not PartKind.CAPACITOR)
    reached = _until_driven(circuit, opamp.plus, neighbours(conducting))
    volts = {GND: 0.0, circuit.input_node: 0.0} | {fixed.node: fixed.volts for fixed in circuit.fixed}
    resting = {volts.get(node) for node in reached & driven(circuit)}
    if len(resting) != 1 or (at_v := resting.pop()) is None:
        return
    name = opamp.designator
    if not opamp.input_low_v <= at_v <= opamp.input_high_v:
        yield (
            f"the + input of {name} rests at {at_v:g} V, outside the {opamp.input_low_v:g} V to "
            f"{opamp.input_high_v:g} V that {opamp.type} takes on these rails",
            "bias it between the rails, or take a type whose inputs work there",
        )
    elif not opamp.low_v < at_v < opamp.high_v:
        yield (
            f"{name} rests at {at_v:g} V, and its output reaches {opamp.low_v:g} V to {opamp.high_v:g} V: at least "
            f"half of a signal is cut off",
            "bias it between the rails, such as at half the supply, or use two rails",
        )


def _until_driven(circuit: Netlist, start: str, joined: dict[str, set[str]]) -> set[str]:
    """Nodes that direct current reaches from the start without going on beyond a voltage that is set."""
    stops = driven(circuit)
    return closure([start], {node: others for node, others in joined.items() if node not in stops})
