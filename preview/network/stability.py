"""Does a circuit stay where it is put? Signs of feedback and poles of the closed loop."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.errors import CircuitError
from preview.network.expansion import expanded, gain_bandwidth_hz, has_real_opamps
from preview.network.opamps import second_pole_hz
from preview.network.statespace import Topology

__all__ = ["check_stable", "closed_loop_poles"]

TRIAL_GAIN_BANDWIDTH_RAD = 2.0 * np.pi * 100e6
"""Gain-bandwidth that every op-amp is given to try the sign of its feedback [rad/s]."""


def closed_loop_poles(netlist: Netlist) -> NDArray[np.complex128]:
    """Natural frequencies of the circuit while no op-amp limits [rad/s]."""
    topology = Topology(netlist)
    space = topology.evaluate(topology.values_of(netlist)[None])
    return np.asarray(np.linalg.eigvals(space.closed()[0][0]), dtype=np.complex128)


def _check_real(netlist: Netlist) -> None:
    """Poles with every op-amp's own gain-bandwidth."""
    inner = expanded(netlist)
    topology = Topology(inner)
    space = topology.evaluate(topology.values_of(inner)[None])
    k = len(netlist.opamps)
    A, B, C_e, D_e = space.A[0], space.B[0, :, 1 : k + 1], space.C_e[0], space.D_e[0, :, 1 : k + 1]
    wt = 2.0 * np.pi * np.array([gain_bandwidth_hz(o.model) for o in netlist.opamps])[:, None]
    wp = np.diag([w[0] / o.model.open_loop_gain for w, o in zip(wt, netlist.opamps, strict=True)])
    loop = np.block([[A, B], [wt * C_e, wt * D_e - wp]])
    lagged = [i for i, o in enumerate(netlist.opamps) if math.isfinite(second_pole_hz(o.model))]
    n, size = len(A), len(A) + k
    whole = np.zeros((size + len(lagged),) * 2)
    whole[:size, :size] = loop
    for j, i in enumerate(lagged):  # the lag stands between the input difference and the integrator
        w2 = 2.0 * np.pi * second_pole_hz(netlist.opamps[i].model)
        e = np.concatenate([C_e[i], D_e[i]])
        whole[n + i, :size] -= wt[i] * e
        whole[n + i, size + j] = wt[i, 0]
        whole[size + j, :size] = w2 * e
        whole[size + j, size + j] = -w2
    _refuse_growth(np.asarray(np.linalg.eigvals(whole), dtype=np.complex128))


def _refuse_growth(poles: NDArray[np.complex128]) -> None:
    growing = poles[poles.real > 1e-9 * np.abs(poles).max(initial=0.0)]
    if growing.size:
        pole = growing[np.argmax(growing.real)]
        hz = abs(pole.imag) / (2 * np.pi)
        oscillates = abs(pole.imag) > 1e-6 * abs(pole)
        how = f"oscillates at {hz:.4g} Hz" if oscillates else "runs to a rail and stays there"
        raise CircuitError(
            f"the circuit is unstable: left alone it {how}",
            "less positive feedback, a lower gain in the loop, or an op-amp that suits the load",
        )


def check_stable(netlist: Netlist) -> None:
    """Refuse a circuit that runs away.

    An ideal op-amp's equations do not know which input is which. So each op-amp is first taken as an integrator
    of its input difference: with its feedback the wrong way round that loop grows at about the gain-bandwidth.
    Then the poles of the ideal circuit itself must lie in the left half plane.

    Raises
    ------
    CircuitError
        Positive feedback, or a pole that grows.
    """
    if has_real_opamps(netlist):
        _check_real(netlist)
        return
    topology = Topology(netlist)
    space = topology.evaluate(topology.values_of(netlist)[None])
    A, B, C_e, D_e = space.A[0], space.B[0], space.C_e[0], space.D_e[0]
    wt = TRIAL_GAIN_BANDWIDTH_RAD
    loop = np.block([[A, B[:, 1 : 1 + len(C_e)]], [wt * C_e, wt * D_e[:, 1 : 1 + len(C_e)]]])
    if loop.size:
        worst = float(np.linalg.eigvals(loop).real.max())
        if worst > 1e-4 * wt:
            names = ", ".join(o.designator for o in netlist.opamps)
            raise CircuitError(
                f"positive feedback: with {names} as connected the output runs to a rail and stays there",
                "swap the + and - inputs, or lead more of the output back to the - input",
            )
    try:
        closed = space.closed()[0][0]
    except CircuitError:
        return  # an improper response, such as a bare differentiator's, has no such state space
    _refuse_growth(np.linalg.eigvals(closed))
