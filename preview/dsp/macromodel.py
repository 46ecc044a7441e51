"""Op-amps as they are: the circuit's equations with each op-amp's gain-bandwidth, slew rate and output resistance.

An op-amp is an integrator ``w`` behind its input difference ``e`` and in front of its output resistance::

    w' = clip(wt (e + offset) - wp w, -slew down, slew up),   low <= w <= high
    wt = 2 pi gain-bandwidth, wp = wt / open-loop gain

so the network sees ``w`` as a voltage behind a resistor, and its input currents as currents drawn from its nodes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.opamp import OpAmpModel
from preview.network.expansion import gain_bandwidth_hz
from preview.network.statespace import Topology

__all__ = ["MacroEquations", "following_step", "macro_equations", "resting_state"]

Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class MacroEquations:
    """Continuous equations per step, for g sets of values; columns as in ``macro_kernels``, d = n + 2k + 5."""

    base: Real
    """(g, n, d): rate of the physical states, without what they take from the op-amps' rates."""
    turn: Real
    """(g, n, k): that share."""
    rate: Real
    """(g, k, d): rate of each op-amp while it follows."""
    out: Real
    """(g, d): the output node."""
    current: Real
    """(g, k, d): output current of each op-amp [A]."""


def macro_equations(
    topology: Topology, values: Real, models: Sequence[OpAmpModel], step_s: float
) -> MacroEquations:
    """Equations for sets of values.

    Parameters
    ----------
    topology : Topology
        Of the expanded netlist, see ``network.expansion``.
    values : ndarray, shape (g, branches)
        Ohm, farad and henry.
    models : sequence of OpAmpModel
        One an op-amp.
    step_s : float
        Length of a step [s].
    """
    space = topology.evaluate(values)
    sets, n, _ = space.B.shape
    k = len(models)
    d = n + 2 * k + 5
    T = step_s
    input_a = np.array(
        [
            sign
            for o in models
            for sign in (o.bias_a + o.offset_current_a / 2, o.bias_a - o.offset_current_a / 2)
        ]
    )
    offset_v = np.array([o.offset_v for o in models])
    wt = 2.0 * np.pi * np.array([gain_bandwidth_hz(o) for o in models])
    wp = np.array([w / o.open_loop_gain for w, o in zip(wt, models, strict=True)])
    at_u, at_1 = n + k, n + 2 * k + 3

    def lay(over_x: Real, over_s: Real) -> Real:
        """Rows over x and s, written over the augmented state; x = p + kappa s."""
        s_part = over_s + over_x @ space.kappa
        rows = np.zeros((sets, over_x.shape[1], d))
        rows[:, :, :n] = over_x
        rows[:, :, n : n + k] = s_part[:, :, 1 : 1 + k]
        rows[:, :, at_u] = s_part[:, :, 0]
        rows[:, :, at_1] = s_part[:, :, 1 + k :] @ input_a
        return rows

    base = T * lay(space.A, space.B)
    base[:, :, at_u + 1] -= space.kappa[:, :, 0]
    e = lay(space.C_e, space.D_e)
    e[:, :, at_1] += offset_v
    rate = T * wt[:, None] * e
    rate[:, np.arange(k), n + np.arange(k)] -= T * wp
    return MacroEquations(
        base,
        np.ascontiguousarray(space.kappa[:, :, 1 : 1 + k]),
        rate,
        np.ascontiguousarray(lay(space.C_out, space.D_out)[:, 0]),
        lay(space.C_i, space.D_i),
    )


def _generator(equations: MacroEquations) -> Real:
    """Derivative of the augmented state by itself, per step, while every op-amp follows; first set, (d, d)."""
    base, turn, rate = equations.base[0], equations.turn[0], equations.rate[0]
    n, k = turn.shape
    d = base.shape[1]
    at_u = n + k
    result = np.zeros((d, d))
    result[:n] = base - turn @ rate
    result[n : n + k] = rate
    result[at_u, at_u + 1] = result[at_u + 1, at_u + 2] = 1.0
    result[d - 1] = equations.out[0]
    return result


def following_step(equations: MacroEquations) -> Real:
    """Matrix of a step while every op-amp follows, for the first set, shape (n + 2k + 1, n + k + 3).

    Rows and columns as in ``macro_kernels.step_matrix``, up to the mean of the output; by scipy's exponential.
    """
    from scipy.linalg import expm

    n, k = equations.turn[0].shape
    phi = expm(_generator(equations))
    rows = np.concatenate([phi[: n + k], equations.rate[0] @ phi, phi[-1:]])
    u, v1, v2 = rows[:, n + k : n + k + 1], rows[:, n + k + 1 : n + k + 2], rows[:, n + k + 2 : n + k + 3]
    return np.concatenate(
        [rows[:, : n + k], u - 4.0 * v1 + 6.0 * v2, 6.0 * v1 - 12.0 * v2, -2.0 * v1 + 6.0 * v2], axis=1
    )


def resting_state(equations: MacroEquations, low: Real, high: Real) -> Real:
    """States and op-amps at rest without a signal, shape (n + k,): the DC operating point, rails respected.

    Op-amps that would rest beyond a rail are put at it, the worst first, and the others solved again.
    """
    n, k = equations.turn[0].shape
    size = n + k
    a = _generator(equations)
    matrix, constant = a[:size, :size].copy(), -a[:size, size + 3 + k].copy()
    for _ in range(k + 1):
        scale = np.maximum(np.abs(matrix).max(axis=1), 1e-300)
        rest, *_ = np.linalg.lstsq(matrix / scale[:, None], constant / scale, rcond=1e-13)
        over = np.maximum(rest[n:] - high, low - rest[n:])
        if k == 0 or over.max() <= 1e-9:
            return np.asarray(rest, dtype=np.float64)
        worst = int(np.argmax(over))
        matrix[n + worst] = 0.0
        matrix[n + worst, n + worst] = 1.0
        constant[n + worst] = high[worst] if rest[n + worst] > high[worst] else low[worst]
    return np.asarray(rest, dtype=np.float64)
