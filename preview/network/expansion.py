"""Op-amps taken apart: an inner voltage behind an output resistance, and the currents of the inputs."""

from __future__ import annotations

import math
from dataclasses import replace

from preview.circuit.netlist import Branch, Netlist
from preview.circuit.opamp import OpAmpModel
from preview.circuit.parts import PartKind
from preview.network.statespace import Topology

__all__ = ["expanded", "expanded_topology", "gain_bandwidth_hz", "has_real_opamps", "output_ohm"]

LEAST_OUTPUT_OHM = 0.01
"""Output resistance that an op-amp without one is given beside real ones [ohm]."""
IDEAL_GAIN_BANDWIDTH_HZ = 1e9
"""Gain-bandwidth that an ideal op-amp is given beside real ones [Hz]."""


def has_real_opamps(netlist: Netlist) -> bool:
    """Whether any op-amp has a speed of its own."""
    return any(o.model.real for o in netlist.opamps)


def output_ohm(model: OpAmpModel) -> float:
    """Output resistance that is computed with [ohm]."""
    return max(model.output_resistance_ohm, LEAST_OUTPUT_OHM)


def gain_bandwidth_hz(model: OpAmpModel) -> float:
    """Gain-bandwidth that is computed with [Hz]."""
    return model.gain_bandwidth_hz if math.isfinite(model.gain_bandwidth_hz) else IDEAL_GAIN_BANDWIDTH_HZ


def expanded(netlist: Netlist) -> Netlist:
    """The netlist with each op-amp's output resistance as a branch and its inner voltage as a node."""
    inside = tuple(
        Branch(f"{o.designator}.Rout", PartKind.RESISTOR, f"{o.designator}.w", o.out, output_ohm(o.model))
        for o in netlist.opamps
    )
    return replace(
        netlist,
        branches=(*netlist.branches, *inside),
        opamps=tuple(replace(o, out=f"{o.designator}.w") for o in netlist.opamps),
    )


def expanded_topology(netlist: Netlist) -> Topology:
    """Topology of the expanded netlist; the current of every op-amp input is a further input."""
    inner = expanded(netlist)
    return Topology(inner, drawn=[node for o in inner.opamps for node in (o.plus, o.minus)])
