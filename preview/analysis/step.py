"""The response to a step of the input, exactly: how fast it rises, by how much it goes too far, when it rests.

With ``x_end = -A^-1 B`` the output after a step of 1 V is ``y = y_end - C exp(A t) x_end``. The exponential is taken
of the Schur form of A, whose diagonal it keeps to the last digit however far apart the poles are, at steps that grow
with time from octave to octave; figures are then narrowed down between two of them.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from preview.network.linear import Linear

__all__ = ["StepFigures", "step_curve", "step_figures"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_FIRST, _LAST = 1e-3, 30.0
"""First step in time constants of the fastest pole, end in time constants of the slowest."""
_STEPS, _STEPS_A_TURN = 48, 32
"""Steps an octave of time, and a turn of a pair of poles that is not at rest yet."""
_MOST_STEPS = 50_000
"""Steps of an octave beyond which a pair rings too long to be followed."""
_RESTING = 40.0
"""Time constants after which a pole is at rest."""
_STAYING, _ROUNDING = 1e-7, 1e-13
"""A pole with less decay than these shares of its own size and of the largest does not come to rest."""
_NARROWER, _ROUNDS = 64, 3
"""Into how many steps an interval is cut to find a place in it, and how often."""
_NOTHING = 1e-12
"""A gain below this share of the peak is rounding."""
_MOSTLY = 0.4
"""Share of the peak that the end value must have for figures to be of it."""


@dataclass(frozen=True, slots=True)
class StepFigures:
    """Figures of the small-signal response to a step of 1 V."""

    start_gain: float
    """Output at once [V/V]."""
    end_gain: float
    """Output at rest [V/V]."""
    peak_gain: float
    """Output where it is farthest from 0 [V/V]."""
    of: Literal["end", "peak"]
    """What percentages are of: the value at rest or, where little of it stays, the peak."""
    rise_s: float
    """From the first 10 % to the first 90 % [s]."""
    overshoot_percent: float
    """How far the peak is beyond the value at rest; nan where percentages are of the peak [%]."""
    settling_1_percent_s: float
    """When the output is within 1 % of where it comes to rest for good [s]."""
    settling_0_1_percent_s: float
    """The same within 0.1 % [s]."""


@dataclass(slots=True)
class _Walk:
    """Samples of ``d = y - y_end`` with the state behind each."""

    T: Complex
    """Schur form of A, (n, n)."""
    row: Complex
    """(n,): ``d`` is its real product with the state."""
    time_s: list[Real]
    state: list[Complex]

    def steps(self, state: Complex, step_s: float, count: int) -> Complex:
        """The state after each of so many steps, (count, n)."""
        one = scipy.linalg.expm(self.T * step_s)
        out = np.empty((count, len(state)), dtype=np.complex128)
        for i in range(count):
            state = one @ state
            out[i] = state
        return out

    def of(self, states: Complex) -> Real:
        """``d`` of states, (k,)."""
        return np.asarray((states @ self.row).real, dtype=np.float64)


def _walk(system: Linear, poles: Complex) -> tuple[_Walk, float]:
    """The samples, and the value at rest."""
    A, scaling = scipy.linalg.matrix_balance(system.A, permute=False, separate=True)
    B, C = system.B / scaling[0], system.C * scaling[0]
    T, Q = scipy.linalg.schur(A, output="complex")
    end = -np.linalg.solve(A, B)
    walk = _Walk(T, -(C @ Q), [np.zeros(1)], [(Q.conj().T @ end)[None]])
    state = walk.state[0][0]
    from_s = _FIRST / np.abs(poles).max()
    walk.time_s.append(np.array([from_s]))
    walk.state.append(walk.steps(state, from_s, 1))
    until_s = _LAST / np.abs(poles.real).min()
    while from_s < until_s:
        moving = poles[np.abs(poles.real) * from_s < _RESTING]
        turns = float(np.abs(moving.imag).max(initial=0.0)) * from_s / (2.0 * np.pi)
        count = min(max(_STEPS, math.ceil(_STEPS_A_TURN * turns)), _MOST_STEPS)
        walk.time_s.append(from_s * (1.0 + np.arange(1, count + 1) / count))
        walk.state.append(walk.steps(walk.state[-1][-1], from_s / count, count))
        from_s *= 2.0
    return walk, system.D + float(C @ end)


def _stays(poles: Complex, largest: float) -> NDArray[np.bool_]:
    return np.asarray(poles.real >= -np.maximum(_STAYING * np.abs(poles), _ROUNDING * largest))


def _moving(system: Linear, poles: Complex) -> Linear:
    """The system without what does not come to rest and is not seen at the output, such as a charge that is trapped.

    The Schur form with those last, and the Sylvester equation that takes them out of the others' way.
    """
    largest = float(np.abs(poles).max())
    T, Q, k = scipy.linalg.schur(
        system.A, sort=lambda re, im: not _stays(np.array([complex(re, im)]), largest)[0]
    )
    if k == len(T):
        return system
    B, C = Q.T @ system.B, system.C @ Q
    X = scipy.linalg.solve_sylvester(T[:k, :k], -T[k:, k:], -T[:k, k:])
    return Linear(T[:k, :k], B[:k] - X @ B[k:], C[:k], system.D)


def step_figures(system: Linear) -> StepFigures | None:
    """Figures of the step response; None where the output does not come to rest (a pole at 0 Hz)."""
    poles = system.poles_and_zeros()[0]
    if not poles.size:
        gain = float(system.response([0.0])[0].real) if len(system.B) else system.D
        return StepFigures(gain, gain, gain, "end", 0.0, 0.0, 0.0, 0.0)
    size = np.abs(poles)
    if np.any(_stays(poles, size.max())):
        return None
    walk, end = _walk(_moving(system, poles), poles)
    time_s, state = np.concatenate(walk.time_s), np.concatenate(walk.state)
    distance = walk.of(state)

    def narrowed(i: int, threshold: Callable[[Real], NDArray[np.bool_]]) -> float:
        """Time between samples i and i + 1 from which the threshold holds [s]."""
        start_s, step_s, here = time_s[i], time_s[i + 1] - time_s[i], state[i]
        for _ in range(_ROUNDS):
            step_s /= _NARROWER
            inside = walk.steps(here, step_s, _NARROWER)
            held = threshold(walk.of(inside))
            at = int(np.argmax(held)) if held.any() else _NARROWER - 1
            start_s += at * step_s
            here = inside[at - 1] if at else here
        return float(start_s + 0.5 * step_s)

    def first(level: float) -> float:
        """When the output first reaches a level of the reference [s]."""

        def reached(d: Real) -> NDArray[np.bool_]:
            return np.asarray((d + end) / reference >= level)

        i = int(np.argmax(reached(distance)))
        return 0.0 if i == 0 else narrowed(i - 1, reached)

    def settled(share: float) -> float:
        """When the output stays within a share of the reference [s]."""

        def within(d: Real) -> NDArray[np.bool_]:
            return np.asarray(np.abs(d) <= share * abs(reference))

        outside = np.flatnonzero(~within(distance))
        if outside.size and outside[-1] == len(distance) - 1:
            return math.inf
        return narrowed(int(outside[-1]), within) if outside.size else 0.0

    top = int(np.argmax(np.abs(distance + end)))
    peak = float((distance + end)[top])
    if 0 < top < len(time_s) - 1:
        finer = walk.steps(state[top - 1], (time_s[top + 1] - time_s[top - 1]) / 4096, 4096)
        values = walk.of(finer) + end
        peak = float(values[np.argmax(np.abs(values))])
    of: Literal["end", "peak"] = "end" if abs(end) >= _MOSTLY * abs(peak) else "peak"
    reference = end if of == "end" else peak
    if reference == 0.0:
        return None
    return StepFigures(
        start_gain=system.D if abs(system.D) > _NOTHING * abs(peak) else 0.0,
        end_gain=end if abs(end) > _NOTHING * abs(peak) else 0.0,
        peak_gain=peak,
        of=of,
        rise_s=first(0.9) - first(0.1),
        overshoot_percent=100.0 * max(0.0, peak / end - 1.0) if of == "end" else math.nan,
        settling_1_percent_s=settled(0.01),
        settling_0_1_percent_s=settled(0.001),
    )


def step_curve(system: Linear, until_s: float, count: int) -> tuple[Real, Real]:
    """Times from 0 [s] and the output after a step of 1 V there [V], shape (count,) each."""
    n = len(system.B)
    driven = np.zeros((n + 1, n + 1))
    driven[:n, :n], driven[:n, n] = system.A, system.B
    one = scipy.linalg.expm(driven * (until_s / (count - 1)))
    state = np.zeros(n + 1)
    state[n] = 1.0
    volts = np.empty(count)
    for i in range(count):
        volts[i] = system.C @ state[:n] + system.D
        state = one @ state
    return np.linspace(0.0, until_s, count), volts
