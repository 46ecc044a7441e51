"""The running step of small signals, without the compiled kernels: what the desk computes its figures from."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.dsp.bilinear import running_step
from preview.dsp.macromodel import MacroModel, collocates
from preview.network.expansion import runs_as_they_are
from preview.network.operating import small_signal
from preview.network.statespace import Topology

__all__ = ["following_step"]

Real = NDArray[np.float64]


def following_step(netlist: Netlist, step_s: float) -> Real:
    """Matrix of a step of small signals about the rest, its output's mean as the last row, shape (N + 1, N + 3).

    Columns: states, signal at the start, its mean, at the end. Diodes have the slope that they have at rest; the dead
    zone of a class-B stage is left out, as it is in the exact response.
    """
    if not runs_as_they_are(netlist):
        topology = Topology(netlist)
        M = running_step(topology.evaluate(topology.values_of(netlist)[None]), step_s).free[0]
        size, k = topology.states + len(netlist.opamps), len(netlist.opamps)
        return np.concatenate([M[:size], M[size + k : size + k + 1]])
    from scipy.linalg import expm

    sites = tuple(replace(o, model=replace(o.model, crossover_v=0.0)) for o in netlist.opamps)
    linear = small_signal(replace(netlist, opamps=sites))
    model = MacroModel(linear, step_s)
    size = model.size
    rates = model.following(model.equations(model.values_of(linear)[None]))[:, : size + 3]
    generator = np.zeros((size + 4, size + 4))  # states, signal and its derivatives, integral of the output
    generator[:size, : size + 3], generator[size + 3, : size + 3] = rates[:size], rates[size]
    generator[size, size + 1] = generator[size + 1, size + 2] = 1.0
    step = expm(generator)
    if collocates(netlist):
        one = np.eye(size + 4)
        left = one - generator * (2.0 / 3.0) + generator @ generator / 6.0
        step = np.linalg.solve(left, one + generator / 3.0)
    rows = step[[*range(size), size + 3]]
    u, v1, v2 = rows[:, size : size + 1], rows[:, size + 1 : size + 2], rows[:, size + 2 : size + 3]
    return np.concatenate(
        [rows[:, :size], u - 4.0 * v1 + 6.0 * v2, 6.0 * v1 - 12.0 * v2, -2.0 * v1 + 6.0 * v2], axis=1
    )
