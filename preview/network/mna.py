"""Modified nodal equations of a whole circuit [HoRuehliBrennan1975].

The unknowns are every node voltage, every inductor current, the current of the signal's voltage source and
the output current of every op-amp. An op-amp that does not limit is a nullor: its inputs are at one voltage
and its output gives whatever current that takes; one with a gain-bandwidth of its own has a gain of
``1 / (s / wt + 1 / A0)`` behind its output resistance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import GND, Netlist
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.expansion import output_ohm

__all__ = ["NodalEquations", "nodal_equations", "solve"]

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NodalEquations:
    """``(static + s dynamic) z = drive u``, with ``z`` the unknowns in the order of ``index``."""

    static: Real
    """Conductances and incidences, shape (n, n)."""
    dynamic: Real
    """Capacitances and inductances, shape (n, n)."""
    drive: Real
    """Right-hand side for 1 V of signal, shape (n,)."""
    nodes: dict[str, int]
    """Row of each node's voltage."""
    source_current: int
    """Row of the current that the signal's source takes in [A]."""
    opamp_currents: dict[str, int]
    """Row of the current that each op-amp takes in at its output [A]."""


def nodal_equations(netlist: Netlist) -> NodalEquations:
    """Stamp every part of a netlist into the modified nodal equations."""
    nodes = {name: i for i, name in enumerate(netlist.nodes)}
    inductors = [b for b in netlist.branches if b.kind is PartKind.INDUCTOR]
    first_inductor = len(nodes)
    source_current = first_inductor + len(inductors)
    size = source_current + 1 + len(netlist.opamps)
    static = np.zeros((size, size))
    dynamic = np.zeros((size, size))
    drive = np.zeros(size)

    def incidence(a: str, b: str) -> Real:
        row = np.zeros(size)
        if a != GND:
            row[nodes[a]] += 1.0
        if b != GND:
            row[nodes[b]] -= 1.0
        return row

    for branch in netlist.branches:
        across = incidence(branch.a, branch.b)
        if branch.kind is PartKind.RESISTOR:
            static += np.outer(across, across) / branch.value
        elif branch.kind is PartKind.CAPACITOR:
            dynamic += np.outer(across, across) * branch.value
    for k, branch in enumerate(inductors):
        row = first_inductor + k
        across = incidence(branch.a, branch.b)
        static[:, row] += across
        static[row] += across
        dynamic[row, row] = -branch.value
    static[nodes[netlist.input_node], source_current] = 1.0
    static[source_current, nodes[netlist.input_node]] = 1.0
    drive[source_current] = 1.0
    opamp_currents = {}
    for k, opamp in enumerate(netlist.opamps):
        row = source_current + 1 + k
        opamp_currents[opamp.designator] = row
        static[row] += incidence(opamp.plus, opamp.minus)
        static[nodes[opamp.out], row] = 1.0
        if opamp.model.real:  # (s / wt + 1 / A0) w = e, with w = v(out) - R i behind the output resistance R
            inner = incidence(opamp.out, GND)
            inner[row] = -output_ohm(opamp.model)
            static[row] -= inner / opamp.model.open_loop_gain
            dynamic[row] -= inner / (2.0 * np.pi * opamp.model.gain_bandwidth_hz)
    return NodalEquations(static, dynamic, drive, nodes, source_current, opamp_currents)


def solve(equations: NodalEquations, s_rad: Complex, drive: Real | None = None) -> Complex:
    """Every unknown at each complex frequency.

    Parameters
    ----------
    s_rad : ndarray, shape (f,)
        Complex frequencies [rad/s].
    drive : ndarray, shape (n,), optional
        Another right-hand side than 1 V of signal.

    Returns
    -------
    ndarray, shape (f, n), complex
        Volts and amperes per unit of the drive.

    Raises
    ------
    CircuitError
        The equations have no single solution at some frequency.
    """
    right = equations.drive if drive is None else drive
    matrix = equations.static + s_rad[:, None, None] * equations.dynamic
    try:
        solved = np.linalg.solve(matrix, np.broadcast_to(right, matrix.shape[:2])[..., None])[..., 0]
    except np.linalg.LinAlgError as error:
        raise CircuitError(
            "the circuit has no single solution: its nodal equations are singular",
            "look for an op-amp without feedback or a node that nothing holds",
        ) from error
    solution = np.asarray(solved, dtype=np.complex128)
    if not np.all(np.isfinite(solution)):
        raise CircuitError("the circuit has no finite solution", "look for an op-amp without feedback")
    return solution
