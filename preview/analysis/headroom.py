"""How far any signal of a given peak can drive each op-amp: the worst case, whatever the signal is.

An output that hangs linearly on the input by the impulse response h never passes ``peak * integral |h|``, and comes as
near to that as one likes with the signal that follows the sign of h backwards in time. The integral of ``|h|`` is all
the ups and downs of the step response, which is what is computed here: exactly along a grid that every natural
frequency of the circuit sees fine enough, from the state space in continuous time.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from preview.circuit.netlist import GND, Netlist, OpAmpSite
from preview.errors import CircuitError
from preview.network.expansion import output_ohm
from preview.network.linear import Linear, linear
from preview.network.operating import OperatingPoint, operating_point
from preview.network.stability import check_stable

__all__ = ["WorstCase", "worst_cases"]

Real = NDArray[np.float64]
_Kind = Literal["rail", "output current", "input range"]

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
    clean_input_v: float
    """Peak of the input up to which no signal brings it to a limit but its slew rate [V]; inf where none ever does."""
    limit: _Kind | Literal[""]
    """What it comes to first; empty for nothing."""

    def bound_v(self, peak_v: float) -> float:
        """Largest magnitude that an input of that peak can ask of the output [V]."""
        return abs(self.rest_v) + self.gain * peak_v


@dataclass(frozen=True, slots=True)
class _Limit:
    """One quantity that hangs linearly on the state, and the room above it."""

    kind: _Kind
    c: Real
    """Over the states."""
    d: float
    """At once, for 1 V of input."""
    room: float
    """From rest to the limit."""


def worst_cases(netlist: Netlist) -> tuple[WorstCase, ...]:
    """The worst case of each op-amp's output, every op-amp following.

    Returns nothing for a circuit with diodes, dielectrics that saturate or an output stage with crossover: it is not
    linear before it limits.

    Raises
    ------
    CircuitError
        The circuit is not stable.
    """
    bends = netlist.ports or any(o.model.crossover_v > 0.0 for o in netlist.opamps)
    if bends or not netlist.opamps:
        return ()
    check_stable(netlist)
    rest = operating_point(netlist)
    return tuple(_worst_case(netlist, rest, opamp) for opamp in netlist.opamps)


def _worst_case(netlist: Netlist, rest: OperatingPoint, opamp: OpAmpSite) -> WorstCase:
    pin = linear(replace(netlist, output_node=opamp.out))
    rest_v = rest.volts[opamp.out]
    limits = [*_swing(netlist, rest, opamp, pin), *_input_range(netlist, rest, opamp)]
    rows = np.array([pin.C, *(limit.c for limit in limits)])
    moves = _ups_and_downs(pin.A, pin.B, rows) + np.abs([pin.D, *(limit.d for limit in limits)])
    clean_v = math.inf
    kind: _Kind | Literal[""] = ""
    for limit, gain in zip(limits, moves[1:].tolist(), strict=True):
        if gain > 0.0 and max(limit.room, 0.0) / gain < clean_v:
            clean_v, kind = max(limit.room, 0.0) / gain, limit.kind
    return WorstCase(opamp.designator, float(moves[0]), rest_v, clean_v, kind)


def _swing(netlist: Netlist, rest: OperatingPoint, opamp: OpAmpSite, pin: Linear) -> Iterator[_Limit]:
    """The ends of the swing, which may hang on the load, and of the output current."""
    model, rest_v = opamp.model, rest.volts[opamp.out]
    if not (model.real and math.isfinite(model.gain_bandwidth_hz)):  # ideal: nothing behind its output
        yield _Limit("rail", pin.C, pin.D, opamp.high_v - rest_v)
        yield _Limit("rail", -pin.C, -pin.D, rest_v - opamp.low_v)
        return
    inner = linear(replace(netlist, output_node=f"{opamp.designator}.w"))
    ohm = output_ohm(model)
    c, d = (inner.C - pin.C) / ohm, (inner.D - pin.D) / ohm  # its output current
    rest_a = rest.opamp_a[opamp.designator]
    for sign, rail_v, points, most_a in (
        (1.0, opamp.high_v + model.swing_high_v, model.swing_high_points, model.current_source_a),
        (-1.0, -opamp.low_v + model.swing_low_v, model.swing_low_points, model.current_sink_a),
    ):
        lightest = model.swing_high_v if sign > 0.0 else model.swing_low_v
        for per_a, drop_v in _pieces(points) or [(0.0, lightest)]:
            room = rail_v - drop_v - sign * (rest_v + per_a * rest_a)
            yield _Limit("rail", sign * (pin.C + per_a * c), sign * (pin.D + per_a * d), room)
        if math.isfinite(most_a):
            yield _Limit("output current", sign * c, sign * d, most_a - sign * rest_a)


def _pieces(points: tuple[tuple[float, float], ...]) -> list[tuple[float, float]]:
    """Slope, and drop without a current, of each piece of a swing that hangs on the load."""
    pieces = [(0.0, points[0][1])] if points else []
    for (a0, v0), (a1, v1) in pairwise(points):
        pieces.append(((v1 - v0) / (a1 - a0), v0 - (v1 - v0) / (a1 - a0) * a0))
    return pieces


def _input_range(netlist: Netlist, rest: OperatingPoint, opamp: OpAmpSite) -> Iterator[_Limit]:
    """The ends of the common-mode range."""
    if opamp.plus == GND:
        return
    plus, rest_v = linear(replace(netlist, output_node=opamp.plus)), rest.volts[opamp.plus]
    if math.isfinite(opamp.input_high_v):
        yield _Limit("input range", plus.C, plus.D, opamp.input_high_v - rest_v)
    if math.isfinite(opamp.input_low_v):
        yield _Limit("input range", -plus.C, -plus.D, rest_v - opamp.input_low_v)


def _ups_and_downs(A: Real, b: Real, C: Real) -> Real:
    """Integral over all time of ``|C exp(A t) b|``, shape (rows of C,)."""
    size = len(A)
    total = np.zeros(len(C))
    if not size or not C.any() or not b.any():
        return total
    rates = np.linalg.eigvals(A)
    moving = rates[np.abs(rates) > float(np.abs(rates).max()) * 1e-14]
    if moving.size == 0 or float(moving.real.max()) >= 0.0:
        raise CircuitError("the circuit does not come to rest", "there is no worst case to compute")
    ends = GONE / -moving.real
    at, now, step = 0.0, b.copy(), 0.0
    path = np.empty((SEGMENT + 1, size))
    while at < ends.max():
        fitting = 1.0 / (PER_RADIAN * float(np.abs(moving[ends > at]).max()))
        if fitting != step:
            step = fitting
            # [x, X]: x' = A x, X' = x, so that C X is the step response
            both = np.block([[A, np.zeros((size, size))], [np.eye(size), np.zeros((size, size))]])
            grown = expm(both * step)
            once, over = grown[:size, :size], grown[size:, :size]
        path[0] = now
        for i in range(SEGMENT):
            path[i + 1] = once @ path[i]
        total += _moves(path @ C.T, path[:-1] @ (C @ over).T, step)
        at, now = at + SEGMENT * step, path[-1].copy()
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
