"""Exact small-signal answers of the continuous circuit: gain, group delay, impedances.

A circuit with diodes, nonlinear capacitors or fixed nodes is looked at around its operating point without a signal.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from preview.circuit.netlist import Netlist
from preview.circuit.nodes import IN, LOAD_PARTS, SOURCE_PARTS
from preview.network.mna import NodalEquations, adjoint, nodal_equations, solve
from preview.network.operating import small_signal

__all__ = ["group_delay", "input_impedance", "output_impedance", "response"]

Complex = NDArray[np.complex128]
Real = NDArray[np.float64]


def _s(frequency_hz: ArrayLike) -> Complex:
    omega = 2.0 * np.pi * np.atleast_1d(np.asarray(frequency_hz, dtype=np.float64))
    return np.asarray(1j * omega, dtype=np.complex128)


def _equations(netlist: Netlist) -> NodalEquations:
    return nodal_equations(small_signal(netlist))


def response(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Output volts per volt of the signal's source, shape (f,), complex."""
    equations = _equations(netlist)
    return np.ascontiguousarray(solve(equations, _s(frequency_hz))[:, equations.nodes[netlist.output_node]])


def group_delay(netlist: Netlist, frequency_hz: ArrayLike) -> Real:
    """Group delay ``-d phase / d omega`` from the exact derivative of the equations [s], shape (f,).

    ``dH/ds = -c M^-1 E M^-1 b`` for ``H = c M^-1 b`` and ``M = A + s E``, so that
    ``tau = -Re((dH/ds) / H)``.
    """
    equations = _equations(netlist)
    s = _s(frequency_hz)
    z = solve(equations, s)
    out = equations.nodes[netlist.output_node]
    pick = np.zeros(equations.static.shape[0])
    pick[out] = 1.0
    slope = -np.einsum("fi,ij,fj->f", adjoint(equations, s, pick), equations.dynamic, z)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-np.real(slope / z[:, out]), dtype=np.float64)


def _without(netlist: Netlist, designators: tuple[str, ...]) -> Netlist:
    return replace(netlist, branches=tuple(b for b in netlist.branches if b.designator not in designators))


def input_impedance(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Impedance that the stage shows at ``in``, source and cable taken away [ohm], shape (f,)."""
    driven = small_signal(netlist)  # the source is part of where the circuit rests
    equations = nodal_equations(replace(_without(driven, SOURCE_PARTS), input_node=IN))
    z = solve(equations, _s(frequency_hz))
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(-z[:, equations.nodes[IN]] / z[:, equations.source_current], dtype=np.complex128)


def output_impedance(netlist: Netlist, frequency_hz: ArrayLike) -> Complex:
    """Impedance that the stage shows at ``out``, the load taken away, the source at rest [ohm], shape (f,)."""
    loaded = small_signal(netlist)  # the load is part of where the circuit rests
    bare = _without(loaded, LOAD_PARTS)
    equations = nodal_equations(bare)
    out = equations.nodes[bare.output_node]
    drive = np.zeros(equations.static.shape[0])
    drive[out] = 1.0
    return np.ascontiguousarray(solve(equations, _s(frequency_hz), drive)[:, out])
