"""The bilinear transform: from the circuit's differential equations to difference equations.

Three things are made here.

``discretise`` is the transform itself, ``s -> (2/T)(z - 1)/(z + 1)``, on a state space, with an optional
prewarp. ``sections`` turns the small-signal response into IIR second-order sections for use elsewhere.

``running_step`` makes the matrices of the running computation. The bilinear transform is the trapezoidal
rule, ``integral x = T (x0 + x1)/2``; its frequency warping is that rule's error, whose leading term is known
(Euler-Maclaurin): ``-(T^2/12)(x1' - x0')``. The running step takes that term along, with ``x'`` from the
circuit's own equations. Warping falls from ``(wT)^2/12`` to ``(wT)^4/720`` [AbramowitzStegun1964,
23.1.30], the rule stays A-stable (the amplification of a mode is the diagonal Pade approximant (2, 2) of the
exponential [HairerWanner1996]), and inputs and op-amp outputs enter as their true means over the step.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.errors import CircuitError
from preview.network.statespace import StateSpace, invert_feedback

__all__ = ["RunningStep", "discretise", "poles_and_zeros", "running_step", "sections"]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def _rate(sample_rate_hz: float, prewarp_hz: float | None) -> float:
    """The ``2/T`` of the transform [1/s], bent so that ``prewarp_hz`` comes out exactly."""
    if prewarp_hz is None:
        return 2.0 * sample_rate_hz
    if not 0.0 < prewarp_hz < sample_rate_hz / 2.0:
        raise ValueError(f"prewarp_hz = {prewarp_hz}: must lie between 0 and {sample_rate_hz / 2.0} Hz")
    omega = 2.0 * np.pi * prewarp_hz
    return float(omega / np.tan(omega / (2.0 * sample_rate_hz)))


def discretise(
    A: Real, B: Real, C: Real, D: Real, sample_rate_hz: float, *, prewarp_hz: float | None = None
) -> tuple[Real, Real, Real, Real]:
    """Bilinear transform of a state space.

    Parameters
    ----------
    A, B, C, D : ndarray, shapes (n, n), (n, m), (p, n), (p, m)
        Continuous system, ``x' = A x + B u``, ``y = C x + D u``.
    sample_rate_hz : float
        Sample rate [Hz].
    prewarp_hz : float, optional
        Frequency at which the discrete response equals the continuous one [Hz].

    Returns
    -------
    tuple of ndarray
        Discrete A, B, C, D of the same shapes.

    References
    ----------
    [Tustin1947]
    """
    k = _rate(sample_rate_hz, prewarp_hz)
    left = np.linalg.inv(np.eye(A.shape[0]) - A / k)
    Ad = left @ (np.eye(A.shape[0]) + A / k)
    Bd = 2.0 / k * left @ B
    return Ad, Bd, C @ left, D + C @ left @ B / k


def poles_and_zeros(A: Real, B: Real, C: Real, D: Real) -> tuple[Complex, Complex, float]:
    """Poles [rad/s], zeros [rad/s] and leading gain of a single-input, single-output system, none cancelling.

    The leading gain is that of ``gain prod(s - zero) / prod(s - pole)``.
    """
    from scipy.linalg import eigvals  # a fifth of a second that the engine's start need not spend

    n = A.shape[0]
    if n == 0:
        return np.zeros(0, complex), np.zeros(0, complex), float(D[0, 0])
    poles = np.linalg.eigvals(A)
    scale = float(np.exp(np.mean(np.log(np.maximum(np.abs(poles), 1e-3)))))
    b_norm, c_norm = np.abs(B).max() or 1.0, np.abs(C).max() or 1.0
    pencil = np.block([[A / scale, B / b_norm], [C / c_norm, D * scale / (b_norm * c_norm)]])
    mass = np.zeros_like(pencil)
    mass[:n, :n] = np.eye(n)
    alpha, beta = eigvals(pencil, mass, homogeneous_eigvals=True)
    finite = np.abs(beta) > 1e-9 * np.abs(alpha)
    zeros = list(alpha[finite] / beta[finite] * scale)
    kept: list[complex] = []
    span = np.abs(poles).max()
    for pole in poles:
        near = [i for i, z in enumerate(zeros) if abs(z - pole) <= 1e-7 * abs(pole) + 1e-12 * span]
        if near:
            zeros.pop(near[0])
        else:
            kept.append(pole)
    p, z = np.array(kept, complex), np.array(zeros, complex)
    s = 1j * scale * 1.2345
    value = (C @ np.linalg.solve(s * np.eye(n) - A, B.astype(complex)) + D)[0, 0]
    gain = value * np.prod((s - p) / scale) / np.prod((s - z) / scale) * scale ** (len(p) - len(z))
    return p, z, float(gain.real)


def _pair(roots: Complex) -> list[Real]:
    """Coefficients ``[1, a1, a2]`` of conjugate or neighbouring real roots, outermost first; last may be single."""
    real = sorted((r.real for r in roots if abs(r.imag) <= 1e-9 * max(abs(r), 1e-300)), key=abs, reverse=True)
    upper = sorted((r for r in roots if r.imag > 1e-9 * abs(r)), key=abs, reverse=True)
    pairs = [np.array([1.0, -2.0 * r.real, abs(r) ** 2]) for r in upper]
    for first, second in zip(real[::2], real[1::2], strict=False):
        pairs.append(np.array([1.0, -(first + second), first * second]))
    if len(real) % 2:
        pairs.append(np.array([1.0, -real[-1], 0.0]))
    return pairs


def sections(
    A: Real, B: Real, C: Real, D: Real, sample_rate_hz: float, *, prewarp_hz: float | None = None
) -> Real:
    """IIR second-order sections of a single-input, single-output system by the bilinear transform.

    Returns
    -------
    ndarray, shape (sections, 6)
        Rows ``b0 b1 b2 a0 a1 a2`` with ``a0 = 1``; the gain is in the first row.

    Raises
    ------
    CircuitError
        The response grows without bound with frequency, so it has no such sections.

    References
    ----------
    [Tustin1947], [OppenheimSchafer2010, 7.2]
    """
    poles, zeros, gain = poles_and_zeros(A, B, C, D)
    if len(zeros) > len(poles):
        raise CircuitError("the response grows without bound with frequency", "no IIR sections exist for it")
    k = _rate(sample_rate_hz, prewarp_hz)
    missing = len(poles) - len(zeros)
    gain_z = float((gain * np.prod((k - zeros) / k) / np.prod((k - poles) / k)).real) / k**missing
    p = (k + poles) / (k - poles)
    z = np.concatenate([(k + zeros) / (k - zeros), -np.ones(missing)])
    below, above = _pair(p), _pair(z)
    count = max(len(below), len(above), 1)
    unit = np.array([1.0, 0.0, 0.0])
    rows = np.zeros((count, 6))
    for i in range(count):
        rows[i, :3] = above[i] if i < len(above) else unit
        rows[i, 3:] = below[i] if i < len(below) else unit
    rows[0, :3] *= gain_z
    return rows


@dataclass(frozen=True, slots=True)
class RunningStep:
    """Matrices of one step, for g sets of values, n states and k op-amps.

    Rows of both: next physical states (n), what each op-amp is asked for at the end of the step (k) and on
    average over it (k), mean of the output node (1), mean output current of each op-amp (k).
    Columns of both: physical states (n) and op-amp outputs (k) at the start, signal at the start, its mean over
    the step, signal at the end.
    """

    free: Real
    """(g, n + 3k + 1, n + k + 3): while no op-amp limits."""
    bound: Real
    """(g, n + 3k + 1, n + 3k + 3): op-amp outputs given. Further columns: their means over the step (k) and
    their values at its end (k)."""


def running_step(space: StateSpace, step_s: float) -> RunningStep:
    """Matrices of the running computation for a step of ``step_s`` seconds.

    Raises
    ------
    CircuitError
        An op-amp without immediate negative feedback.
    """
    A, B, kappa = space.A, space.B, space.kappa
    sets, n, m = B.shape
    k, T = m - 1, step_s
    eye = np.eye(n)
    square = A @ A * (T * T / 12.0)
    left = np.linalg.inv(eye - A * (T / 2.0) + square)
    P = left @ (eye + A * (T / 2.0) + square)
    Qm = left @ B * T
    Qd = left @ A @ B * (-T * T / 12.0)

    def columns(p0: Real, s0: Real, mean: Real, s1: Real) -> Real:
        return np.concatenate([p0, s0, mean, s1], axis=2)

    none_n, none_m = np.zeros((sets, n, n)), np.zeros((sets, n, m))
    x0 = columns(none_n + eye, kappa, none_m, none_m)
    x1 = columns(P, P @ kappa - Qd, Qm, Qd)
    turn = columns(none_n, -B, none_m, B)
    mean_x = (x0 + x1) / 2.0 - (T / 12.0) * (A @ (x1 - x0) + turn)

    def of_s(rows: Real, place: int) -> Real:
        """Rows over s at the start (0), on average (1) or at the end (2), over all columns."""
        full = np.zeros((sets, rows.shape[1], n + 3 * m))
        full[:, :, n + place * m : n + (place + 1) * m] = rows
        return full

    p1 = x1 - of_s(kappa, 2)
    e1 = space.C_e @ x1 + of_s(space.D_e, 2)
    mean_e = space.C_e @ mean_x + of_s(space.D_e, 1)
    mean_out = space.C_out @ mean_x + of_s(space.D_out, 1)
    charge = space.C_q @ (x1 - x0) + of_s(space.D_q, 2) - of_s(space.D_q, 0)
    mean_i = space.C_i @ mean_x + of_s(space.D_i, 1) + charge / T

    own = np.einsum("gkk->gk", space.D_e[:, :, 1:])[:, :, None]
    if np.any(own >= -1e-9):
        raise CircuitError(
            "an op-amp has no immediate negative feedback",
            "its output must reach its minus input through a resistor, or a capacitor that nothing holds",
        )
    ask_1 = of_s(np.broadcast_to(np.eye(m)[1:], (sets, k, m)), 2) - e1 / own
    ask_mean = of_s(np.broadcast_to(np.eye(m)[1:], (sets, k, m)), 1) - mean_e / own
    bound = np.concatenate([p1, ask_1, ask_mean, mean_out, mean_i], axis=1)

    # free: the outputs on average and at the end from e = 0 at both
    y_start, y_mean, y_end = (np.arange(n + j * m + 1, n + (j + 1) * m) for j in range(3))
    given = np.concatenate([np.arange(n), y_start, [n, n + m, n + 2 * m]]).astype(int)
    later = np.concatenate([y_mean, y_end]).astype(int)
    both = np.concatenate([mean_e, e1], axis=1)
    y_later = -invert_feedback(both[:, :, later]) @ both[:, :, given]
    free = bound[:, :, given] + bound[:, :, later] @ y_later
    order = np.concatenate([given, later])
    return RunningStep(np.ascontiguousarray(free), np.ascontiguousarray(bound[:, :, order]))
