"""Modified nodal equations of a whole circuit [HoRuehliBrennan1975].

The unknowns are every node voltage, every inductor current, the current of the signal's voltage source, of
every fixed node and of every op-amp's output. An op-amp that does not limit is a nullor: its inputs are at one
voltage and its output gives whatever current that takes; one with a gain-bandwidth of its own has a gain of
``1 / (s / wt + 1 / A0)`` behind its output resistance, with a second pole where it has a phase margin of less
than 90 degrees. Nonlinear ports are not stamped: see ``operating.small_signal``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import GND, Netlist
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.expansion import output_ohm
from preview.network.opamps import second_pole_hz

__all__ = ["NodalEquations", "adjoint", "nodal_equations", "solve"]

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NodalEquations:
    """``(static + s dynamic) z = drive u + constant``, with ``z`` node voltages, then currents."""

    static: Real
    """Conductances and incidences, shape (n, n)."""
    dynamic: Real
    """Capacitances and inductances, shape (n, n)."""
    drive: Real
    """Right-hand side for 1 V of signal, shape (n,)."""
    constant: Real
    """Right-hand side of the fixed nodes, which is there at 0 Hz only, shape (n,)."""
    nodes: dict[str, int]
    """Row of each node's voltage."""
    source_current: int
    """Row of the current that the signal's source takes in [A]."""
    opamp_currents: dict[str, int]
    """Row of the current that each op-amp takes in at its output [A]; that row's equation is its gain's."""

    def incidence(self, a: str, b: str) -> Real:
        """Row that gives the voltage from a to b, shape (n,)."""
        row = np.zeros(self.static.shape[0])
        for node, sign in ((a, 1.0), (b, -1.0)):
            if node != GND:
                row[self.nodes[node]] += sign
        return row


def nodal_equations(netlist: Netlist) -> NodalEquations:
    """Stamp every part of a netlist but its nonlinear ports into the modified nodal equations."""
    nodes = {name: i for i, name in enumerate(netlist.nodes)}
    inductors = [b for b in netlist.branches if b.kind is PartKind.INDUCTOR]
    first_inductor = len(nodes)
    source_current = first_inductor + len(inductors)
    first_fixed = source_current + 1
    first_opamp = first_fixed + len(netlist.fixed)
    with_second_pole = [o for o in netlist.opamps if math.isfinite(second_pole_hz(o.model))]
    first_stage = first_opamp + len(netlist.opamps)
    size = first_stage + len(with_second_pole)
    equations = NodalEquations(
        static=np.zeros((size, size)),
        dynamic=np.zeros((size, size)),
        drive=np.zeros(size),
        constant=np.zeros(size),
        nodes=nodes,
        source_current=source_current,
        opamp_currents={o.designator: first_opamp + k for k, o in enumerate(netlist.opamps)},
    )
    static, dynamic, incidence = equations.static, equations.dynamic, equations.incidence
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
    held = [netlist.input_node, *(f.node for f in netlist.fixed)]
    for row, node in enumerate(held, source_current):
        static[nodes[node], row] = static[row, nodes[node]] = 1.0
    equations.drive[source_current] = 1.0
    equations.constant[first_fixed:first_opamp] = [f.volts for f in netlist.fixed]
    for k, opamp in enumerate(netlist.opamps):
        model, row = opamp.model, first_opamp + k
        difference = incidence(opamp.plus, opamp.minus)
        for a, b, farad in (
            (opamp.plus, GND, model.input_farad),
            (opamp.minus, GND, model.input_farad),
            (opamp.plus, opamp.minus, model.input_differential_farad),
        ):
            across = incidence(a, b)
            dynamic += np.outer(across, across) * farad
        static[row] += difference
        static[nodes[opamp.out], row] = 1.0
        if not model.real:
            continue
        # (s / wt + 1 / A0) y = e, with w = v(out) - R i behind the output resistance R
        inner = incidence(opamp.out, GND)
        inner[row] = -output_ohm(model)
        first = inner
        if opamp in with_second_pole:  # (1 + s / w2) w = y
            stage = first_stage + with_second_pole.index(opamp)
            first = np.zeros(size)
            first[stage] = 1.0
            static[stage] = inner - first
            dynamic[stage] = inner / (2.0 * np.pi * second_pole_hz(model))
        static[row] -= first / model.open_loop_gain
        dynamic[row] -= first / (2.0 * np.pi * model.gain_bandwidth_hz)
    return equations


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


def adjoint(equations: NodalEquations, s_rad: Complex, pick: Real) -> Complex:
    """What each right-hand side adds to one combination of the unknowns, by the transposed equations.

    One solution gives the way to the output from everywhere at once [DirectorRohrer1969]: a current into a node by
    the node's entry, a voltage in an op-amp's input by the entry of its gain's equation.

    Parameters
    ----------
    s_rad : ndarray, shape (f,)
        Complex frequencies [rad/s].
    pick : ndarray, shape (n,)
        The combination, such as a one at the output node.

    Returns
    -------
    ndarray, shape (f, n), complex
        Units of the combination per unit of each right-hand side.
    """
    turned = replace(equations, static=equations.static.T, dynamic=equations.dynamic.T)
    return solve(turned, s_rad, pick)
