"""Exact small-signal answers of the continuous circuit: gain, impedances, DC point."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from preview.circuit.netlist import GND, IN, LOAD_DESIGNATOR, Netlist
from preview.network.mna import nodal_equations, solve

__all__ = ["dc_point", "group_delay", "input_impedance", "output_impedance", "response"]

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


def _s(frequency_hz: ArrayLike) -> Complex:
    omega = 2.0 * np.pi * np.atleast_1d(np.asarray(frequency_hz, dtype=np.float64))
    return np.asarray(1j * omega, dtype=np.complex128)


def response(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Output volts per volt of the signal's source, shape (f,), complex."""
    equations = nodal_equations(netlist)
    return np.ascontiguousarray(solve(equations, _s(frequency_hz))[:, equations.nodes[netlist.output_node]])


def group_delay(netlist: Netlist, frequency_hz: ArrayLike) -> Real:
    """Group delay ``-d phase / d omega`` from the exact derivative of the equations [s], shape (f,).

    ``dH/ds = -c M^-1 E M^-1 b`` for ``H = c M^-1 b`` and ``M = A + s E``, so that
    ``tau = -Re((dH/ds) / H)``.
    """
    equations = nodal_equations(netlist)
    s = _s(frequency_hz)
    z = solve(equations, s)
    out = equations.nodes[netlist.output_node]
    pick = np.zeros(equations.static.shape[0])
    pick[out] = 1.0
    adjoint = np.linalg.solve(
        np.swapaxes(equations.static + s[:, None, None] * equations.dynamic, 1, 2),
        np.broadcast_to(pick, z.shape)[..., None],
    )[..., 0]
    slope = -np.einsum("fi,ij,fj->f", adjoint, equations.dynamic, z)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-np.real(slope / z[:, out]), dtype=np.float64)


def input_impedance(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Impedance that the stage shows at ``in``, without the source's own resistance [ohm], shape (f,)."""
    equations = nodal_equations(netlist)
    z = solve(equations, _s(frequency_hz))
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-z[:, equations.nodes[IN]] / z[:, equations.source_current], dtype=np.complex128)


def output_impedance(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Impedance that the stage shows at ``out``, the load taken away, the source at rest [ohm], shape (f,)."""
    bare = Netlist(
        netlist.input_node,
        netlist.output_node,
        tuple(b for b in netlist.branches if b.designator != LOAD_DESIGNATOR),
        netlist.opamps,
    )
    equations = nodal_equations(bare)
    out = equations.nodes[bare.output_node]
    drive = np.zeros(equations.static.shape[0])
    drive[out] = 1.0
    return np.ascontiguousarray(solve(equations, _s(frequency_hz), drive)[:, out])


def dc_point(netlist: Netlist, input_v: float = 0.0) -> dict[str, float]:
    """Voltage of every node with a steady input [V]; CircuitError where DC has no single answer."""
    equations = nodal_equations(netlist)
    z = solve(equations, np.zeros(1, dtype=np.complex128), equations.drive * input_v)[0].real
    volts = {name: float(z[i]) for name, i in equations.nodes.items()}
    volts[GND] = 0.0
    return volts
