"""How far any signal of a given peak can drive each op-amp: the worst case, whatever the signal is.

An output that hangs linearly on the input by the impulse response h never passes ``peak * integral |h|``, and comes as
near to that as one likes with the signal that follows the sign of h backwards in time. The integral of ``|h|`` is all
the ups and downs of the step response, which is what is computed here: exactly along a grid that every natural
frequency of the circuit sees fine enough, from the state space in continuous time.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from preview.circuit.netlist import Netlist
from preview.errors import CircuitError
from preview.network.expansion import expanded, expanded_topology, gain_bandwidth_hz, has_real_opamps
from preview.network.stability import check_stable
from preview.network.statespace import Topology, invert_feedback

__all__ = ["WorstCase", "worst_cases"]

Real = NDArray[np.float64]

GONE = 21.0
"""Time constants after which a mode is over: e to the minus 21 is 8e-10."""

PER_RADIAN = 25.0
"""Points of the grid a radian, or a time constant, of the fastest mode that is still there."""

SEGMENT = 128
"""Points between two choices of the step."""


@dataclass(frozen=True, slots=True)
class WorstCase:
    """What the worst of all signals does to one op-amp."""

    designator: str
    """U1, U2 ..."""
    gain: float
    """Largest output over the input's peak: the integral of the magnitude of the impulse response [V/V]."""
    rest_v: float
    """Output without a signal [V]."""
    high_v: float
    """Highest output [V]."""
    low_v: float
    """Lowest output [V]."""

    def bound_v(self, peak_v: float) -> float:
        """Largest magnitude that an input of that peak can ask of the output [V]."""
        return abs(self.rest_v) + self.gain * peak_v

    @property
    def clean_input_v(self) -> float:
        """Peak of the input up to which no signal brings the output to a rail [V]; inf where none ever does."""
        room_v = min(self.high_v - self.rest_v, self.rest_v - self.low_v)
        return max(room_v, 0.0) / self.gain if self.gain > 0.0 else math.inf


def worst_cases(netlist: Netlist) -> tuple[WorstCase, ...]:
    """The worst case of each op-amp's output, every op-amp following.

    Returns nothing for a circuit with diodes or dielectrics that saturate: it is not linear before it limits.

    Raises
    ------
    CircuitError
        The circuit is not stable.
    """
    if netlist.ports or not netlist.opamps:
        return ()
    check_stable(netlist)
    A, b, C, d, rest = _to_outputs(netlist)
    gains = _ups_and_downs(A, b, C) + np.abs(d)
    return tuple(
        WorstCase(o.designator, float(gain), float(at), o.high_v, o.low_v)
        for o, gain, at in zip(netlist.opamps, gains, rest, strict=True)
    )


def _to_outputs(netlist: Netlist) -> tuple[Real, Real, Real, Real, Real]:
    """(A, b, C, d) from the signal to every op-amp's own output, and these at rest; k outputs."""
    k = len(netlist.opamps)
    if not has_real_opamps(netlist):
        topology = Topology(netlist)
        space = topology.evaluate(topology.values_of(netlist)[None])
        y = -invert_feedback(space.D_e[:, :, 1:])
        y_x, y_u = (y @ space.C_e)[0], (y @ space.D_e[:, :, :1])[0, :, 0]
        A, B, _, _ = space.closed()
        return A[0], B[0, :, 0], y_x, y_u, np.zeros(k)
    topology, models = expanded_topology(netlist), [o.model for o in netlist.opamps]
    space = topology.evaluate(topology.values_of(expanded(netlist))[None])
    n = space.A.shape[1]
    wt = 2.0 * np.pi * np.array([gain_bandwidth_hz(m) for m in models])
    wp = wt / np.array([m.open_loop_gain for m in models])
    over_x = np.concatenate([space.A[0], wt[:, None] * space.C_e[0]])
    over_s = np.concatenate([space.B[0], wt[:, None] * space.D_e[0]])
    A = np.concatenate([over_x, over_s[:, 1 : 1 + k]], axis=1)
    A[n:, n:] -= np.diag(wp)
    currents = [(m.bias_a + half, m.bias_a - half) for m in models for half in (m.offset_current_a / 2,)]
    constant = over_s[:, 1 + k :] @ np.array(currents).ravel()
    constant[n:] += wt * np.array([m.offset_v for m in models])
    scale = np.maximum(np.abs(A).max(axis=1), 1e-300)
    rest, *_ = np.linalg.lstsq(A / scale[:, None], -constant / scale, rcond=1e-13)
    # the states are x = p + kappa s: they jump with the signal, so what the signal does at once is in b alone
    return A, over_s[:, 0], np.eye(n + k)[n:], np.zeros(k), rest[n:]


def _ups_and_downs(A: Real, b: Real, C: Real) -> Real:
    """Integral over all time of ``|C exp(A t) b|``, shape (outputs,)."""
    size = len(A)
    total = np.zeros(len(C))
    if not size or not C.any():
        return total
    rates = np.linalg.eigvals(A)
    last = float(np.abs(rates).max()) * 1e-14
    moving = rates[np.abs(rates) > last]
    if moving.size == 0 or float(moving.real.max()) >= 0.0:
        raise CircuitError("the circuit does not come to rest", "there is no worst case to compute")
    ends = GONE / -moving.real
    at, now = 0.0, b.copy()
    while at < ends.max():
        step = 1.0 / (PER_RADIAN * float(np.abs(moving[ends > at]).max()))
        # [x, X]: x' = A x, X' = x, so that C X is the step response
        grown = expm(np.block([[A, np.zeros((size, size))], [np.eye(size), np.zeros((size, size))]]) * step)
        once, over = grown[:size, :size], grown[size:, :size]
        path = np.empty((SEGMENT + 1, size))
        path[0] = now
        for i in range(SEGMENT):
            path[i + 1] = once @ path[i]
        total += _moves(path @ C.T, path[:-1] @ over.T @ C.T, step)
        at, now = at + SEGMENT * step, path[-1]
    return total


def _moves(rate: Real, move: Real, step: float) -> Real:
    """Sum of ``|h|`` over each step from h at its ends and its integral; where h changes sign by its parabola."""
    start, end = rate[:-1], rate[1:]
    plain = np.abs(move)
    turns = start * end < 0.0
    bend = 3.0 * (start + end) - 6.0 * move / step  # h(t) = start + (end - start - bend) t + bend t^2
    slope = end - start - bend
    with np.errstate(divide="ignore", invalid="ignore"):
        root = np.sqrt(np.maximum(slope * slope - 4.0 * bend * start, 0.0))
        half = -0.5 * (slope + np.where(slope >= 0.0, root, -root))
        one, other = half / bend, start / half
        zero = np.where((one > 0.0) & (one < 1.0), one, other)
    zero = np.clip(np.nan_to_num(zero, nan=0.5), 0.0, 1.0)
    first = step * zero * (start + zero * (slope / 2.0 + zero * bend / 3.0))
    return np.asarray(np.where(turns, np.abs(first) + np.abs(move - first), plain).sum(axis=0))
