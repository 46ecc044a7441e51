"""The circuit from its signal to its output as one linear system, with poles and zeros.

``x' = A x + B u, y = C x + D u`` for a small signal, no op-amp at a limit. An op-amp with a gain-bandwidth adds the
state that ``mna`` gives it; one without is solved for, its inputs at one voltage.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import scipy.linalg
from numpy.typing import ArrayLike, NDArray

from preview.circuit.netlist import GND, Branch, Netlist
from preview.circuit.parts import PartKind
from preview.network.expansion import output_ohm
from preview.network.opamps import second_pole_hz
from preview.network.operating import small_signal
from preview.network.statespace import Topology, invert_feedback

__all__ = ["Linear", "linear"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_NOTHING = 1e-12
"""A coupling below this share of the largest it could be is rounding [ratio]."""
_SAME = 1e-4
"""A pole and a zero nearer to each other than this share of themselves take each other away [ratio]: they change
the response by no more than that."""


@dataclass(frozen=True, slots=True)
class Linear:
    """A linear system with one input and one output; n states."""

    A: Real
    """(n, n) [1/s]."""
    B: Real
    """(n,)."""
    C: Real
    """(n,)."""
    D: float
    """Output at once for 1 V of input."""

    def response(self, s_rad: ArrayLike) -> Complex:
        """Output per input at complex frequencies [rad/s], shape (f,)."""
        s = np.atleast_1d(np.asarray(s_rad, dtype=np.complex128))
        held = s[:, None, None] * np.eye(len(self.B)) - self.A
        states = np.linalg.solve(held, np.broadcast_to(self.B[:, None], (len(s), len(self.B), 1)))[..., 0]
        return np.asarray(states @ self.C + self.D, dtype=np.complex128)

    def poles_and_zeros(self) -> tuple[Complex, Complex]:
        """Natural frequencies that can be seen from input to output, and frequencies without output [rad/s].

        A pole that the output does not show, or the input does not move, has a zero on it: both are left out.
        """
        poles = np.linalg.eigvals(self.A).astype(np.complex128)
        shown = np.ones(len(poles), dtype=bool)
        zeros = []
        for zero in _zeros(self):
            distance = np.where(shown, np.abs(poles - zero), np.inf)
            near = int(np.argmin(distance)) if len(poles) else -1
            if near >= 0 and distance[near] <= _SAME * max(abs(zero), abs(poles[near])):
                shown[near] = False
            else:
                zeros.append(zero)
        return poles[shown], np.array(zeros, dtype=np.complex128)


def linear(netlist: Netlist) -> Linear:
    """The linear system of a circuit.

    Raises
    ------
    CircuitError
        It has none: the response grows without end towards high frequencies, as a bare differentiator's does.
    """
    netlist = small_signal(netlist)
    fast = [o for o in netlist.opamps if o.model.real and math.isfinite(o.model.gain_bandwidth_hz)]
    inner = _apart(netlist, {o.designator for o in fast})
    topology = Topology(inner)
    space = topology.evaluate(topology.values_of(inner)[None])
    names = [o.designator for o in netlist.opamps]
    w = [1 + names.index(o.designator) for o in fast]  # columns of the op-amps that are states
    y = [1 + i for i in range(len(names)) if 1 + i not in w]
    C_e, D_e = space.C_e[0], space.D_e[0]
    ideal, chased = [i - 1 for i in y], [i - 1 for i in w]
    # y is what brings its own inputs together: 0 = C_e x + D_e [u, w] + D_e y
    back = -invert_feedback(D_e[ideal][:, y][None])[0] if y else np.zeros((0, 0))
    from_x, from_s = back @ C_e[ideal], back @ D_e[ideal]

    def closed(by_x: Real, by_s: Real) -> tuple[Real, Real]:
        """Rows over [x, s] with y put into them: over x and w, and over u."""
        by_x, by_s = by_x + by_s[:, y] @ from_x, by_s + by_s[:, y] @ from_s
        return np.hstack([by_x, by_s[:, w]]), by_s[:, 0]

    A_x, B_x = closed(space.A[0], space.B[0])
    e_x, e_u = closed(C_e[chased], D_e[chased])
    C, D = closed(space.C_out[0], space.D_out[0])
    n, known = topology.states, topology.states + len(fast)
    twofold = [o for o in fast if math.isfinite(second_pole_hz(o.model))]
    A, B = np.zeros((known + len(twofold), known + len(twofold))), np.zeros(known + len(twofold))
    A[:n, :known], B[:n] = A_x, B_x
    for k, opamp in enumerate(fast):
        at = output = n + k
        if opamp in twofold:  # its first stage is a state of its own, which the output follows
            at = known + twofold.index(opamp)
            w2 = 2.0 * np.pi * second_pole_hz(opamp.model)
            A[output, at], A[output, output] = w2, -w2
        wt = 2.0 * np.pi * opamp.model.gain_bandwidth_hz
        A[at, :known], B[at] = wt * e_x[k], wt * e_u[k]
        A[at, at] -= wt / opamp.model.open_loop_gain
    return Linear(A, B, np.concatenate([C[0], np.zeros(len(twofold))]), float(D[0]))


def _apart(netlist: Netlist, fast: set[str]) -> Netlist:
    """The netlist with input capacitances as branches, and fast op-amps as inner voltages behind a resistance."""
    extra: list[Branch] = []
    opamps = []
    for opamp in netlist.opamps:
        name, model = opamp.designator, opamp.model
        for end, a, b, farad in (
            ("plus", opamp.plus, GND, model.input_farad),
            ("minus", opamp.minus, GND, model.input_farad),
            ("inputs", opamp.plus, opamp.minus, model.input_differential_farad),
        ):
            if farad > 0.0 and a != b:
                extra.append(Branch(f"{name}.C{end}", PartKind.CAPACITOR, a, b, farad))
        if name in fast:
            extra.append(Branch(f"{name}.Rout", PartKind.RESISTOR, f"{name}.w", opamp.out, output_ohm(model)))
            opamp = replace(opamp, out=f"{name}.w")
        opamps.append(opamp)
    return replace(netlist, branches=(*netlist.branches, *extra), opamps=tuple(opamps))


def _zeros(system: Linear) -> Complex:
    """Frequencies at which a signal in the states gives no output [rad/s].

    Where the input does not reach the output at once, the rows C, C A, C A^2 ... are followed until it does; what
    moves without touching any of them is the zero dynamics.
    """
    A, scaling = scipy.linalg.matrix_balance(system.A, permute=False, separate=True)
    scale = scaling[0]
    B, C, D = system.B / scale, system.C * scale, system.D
    n = len(B)
    reach = float(np.linalg.norm(B) * np.linalg.norm(C))
    if n == 0 or (reach == 0.0 and D == 0.0):
        return np.empty(0, dtype=np.complex128)
    size = float(np.linalg.norm(A))
    if D != 0.0 and (size == 0.0 or reach / abs(D) < size / _NOTHING):
        return np.asarray(np.linalg.eigvals(A - np.outer(B, C) / D), dtype=np.complex128)
    rows: list[Real] = []
    row = C
    for _ in range(n):
        before = float(np.linalg.norm(row))
        for _ in range(2):
            for other in rows:
                row = row - (row @ other) * other
        length = float(np.linalg.norm(row))
        if length <= _NOTHING * before or length == 0.0:
            break
        row = row / length
        rows.append(row)
        if abs(row @ B) > _NOTHING * np.linalg.norm(B):
            basis = scipy.linalg.null_space(np.array(rows))
            dynamics = A - np.outer(B, row @ A) / (row @ B)
            return np.asarray(np.linalg.eigvals(basis.T @ dynamics @ basis), dtype=np.complex128)
        row = A.T @ row
    return np.empty(0, dtype=np.complex128)
