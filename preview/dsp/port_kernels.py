"""Diodes and class 2 capacitors in a part of a step, compiled.

Over a part of a step the current of a port runs along the line through its values at 1/3 and at the end: collocation
at the points of Radau IIA of two stages, order 3 and damped however stiff [HairerWanner1996]. The rest of the circuit
is exact. The unknowns are the junction voltages at both points of every port; a junction's series resistance is taken
into the circuit.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled
from preview.dsp.kernels import solve_small
from preview.dsp.laws import (
    BACK,
    BACK_CRITICAL,
    BACK_CURRENT,
    BACK_MOST,
    BACK_SLOPE,
    CRITICAL,
    FARAD,
    HALF,
    MOST,
    SATURATION,
    SERIES,
    SLOPE,
)  # fmt: skip

MAX_TURNS = 60
"""Newton steps that a part of a step may take; 2 or 3 are usual."""
TOLERANCE_V = 1e-8
"""Last change at which the voltages are taken as found; the error left is about its square over the slope voltage."""
MOST_V = 1e7
"""A junction voltage of this size is no solution."""


@compiled
def junction(law: Any, v: float) -> tuple[float, float]:
    """Current of a junction and its conductance at a voltage without the drop of its series resistance."""
    f = law[SATURATION] * np.exp(min(v / law[SLOPE], 600.0))
    share = 1.0 / (1.0 + f / law[MOST])  # the output stage of an op-amp gives no more than its limit
    current, slope = f * share - law[SATURATION], f * share * share / law[SLOPE]
    if law[BACK_SLOPE] > 0.0:
        b = law[BACK_CURRENT] * np.exp(min(-(v + law[BACK]) / law[BACK_SLOPE], 600.0))
        share = 1.0 / (1.0 + b / law[BACK_MOST])
        current -= b * share
        if law[BACK] == 0.0:
            current += law[BACK_CURRENT]
        slope += b * share * share / law[BACK_SLOPE]
    return current, slope


@compiled
def limited_move(law: Any, old: float, new: float) -> float:
    """A Newton step of a junction voltage, shortened where the exponential would run away [Nagel1975]."""
    if law[HALF] > 0.0:
        return float(new)
    vt, vz = law[SLOPE], law[BACK_SLOPE]
    # beyond its largest current a junction is flat: any move up, and down no further than where it bends
    if law[MOST] < np.inf:
        bend = vt * np.log(law[MOST] / law[SATURATION])
        if old > bend + vt:
            return float(max(new, bend))
    if law[BACK_MOST] < np.inf and vz > 0.0:
        bend = -law[BACK] - vz * np.log(law[BACK_MOST] / law[BACK_CURRENT])
        if old < bend - vz:
            return float(min(new, bend))
    if new > law[CRITICAL] and abs(new - old) > 2.0 * vt:
        if old > 0.0:
            f = 1.0 + (new - old) / vt
            return float(old + vt * np.log(f)) if f > 0.0 else float(law[CRITICAL])
        return float(vt * np.log(new / vt))
    if vz > 0.0:
        over, before = -(new + law[BACK]), -(old + law[BACK])
        if over > law[BACK_CRITICAL] and abs(new - old) > 2.0 * vz:
            if before > 0.0:
                f = 1.0 + (over - before) / vz
                moved = before + vz * np.log(f) if f > 0.0 else law[BACK_CRITICAL]
            else:
                moved = vz * np.log(over / vz)
            return float(-law[BACK] - moved)
    return float(new)


@compiled
def solve_one(
    laws: Any, end_v: float, third_v: float, part: Any, first: int, column: int, v: Any, i: Any
) -> bool:
    """``solve_ports`` for one junction, written out."""
    law = laws[0]
    series = law[SERIES]
    # voltages by currents: third by third, third by end, end by third, end by end
    aa, ab = part[column, first + 1] - series, part[column + 1, first + 1]
    ba, bb = part[column, first], part[column + 1, first] - series
    va, vb = limited_move(law, v[0, 0], v[1, 0]), limited_move(law, v[0, 0], v[2, 0])
    for _ in range(MAX_TURNS):
        ia, ga = junction(law, va)
        ib, gb = junction(law, vb)
        ra, rb = third_v + aa * ia + ab * ib - va, end_v + ba * ia + bb * ib - vb
        j00, j01, j10, j11 = 1.0 - aa * ga, -ab * gb, -ba * ga, 1.0 - bb * gb
        det = j00 * j11 - j01 * j10
        new_a = limited_move(law, va, va + (j11 * ra - j01 * rb) / det)
        new_b = limited_move(law, vb, vb + (j00 * rb - j10 * ra) / det)
        if not (np.isfinite(new_a) and np.isfinite(new_b)):
            return False
        da, db = new_a - va, new_b - vb
        va, vb = new_a, new_b
        if abs(da) < TOLERANCE_V + 1e-9 * abs(va) and abs(db) < TOLERANCE_V + 1e-9 * abs(vb):
            v[1, 0], v[2, 0] = va, vb
            i[0], i[1] = ia + ga * da, ib + gb * db
            return bool(max(abs(va), abs(vb)) < MOST_V)
    return False


@compiled
def added_charge(law: Any, v: float) -> tuple[float, float]:
    """Charge and capacitance that a class 2 dielectric adds to the linear capacitor."""
    r = v / law[HALF]
    return law[FARAD] * (law[HALF] * np.arctan(r) - v), law[FARAD] * (1.0 / (1.0 + r * r) - 1.0)


@compiled
def solve_ports(
    laws: Any, open_v: Any, part: Any, first: int, column: int, length_s: float, v: Any, i: Any, room: Any
) -> bool:
    """Port voltages at 1/3 and at the end of a part of a step.

    Parameters
    ----------
    laws : (np, LAW)
        Their laws.
    open_v : (2 np,)
        Voltages without port currents, the ends first, then those at 1/3: rows from ``first`` of ``part``.
    part : (c, r)
        Matrix of the part; port currents at 1/3, then at the end, in the columns from ``column``.
    length_s : float
        The part's time [s].
    v : (3, np)
        Junction voltages at the start, at 1/3 and at the end; the last two hold a guess and receive the solution [V].
    i : (2 np,)
        Receives the currents at 1/3, then at the end [A].
    room : (2 np + 3, 2 np)
        Room.
    """
    ports = laws.shape[0]
    if ports == 1 and laws[0, HALF] == 0.0:
        return bool(solve_one(laws, open_v[0], open_v[1], part, first, column, v, i))
    size = 2 * ports
    J, right = room[:size], room[size]
    slope = room[size + 1]
    for p in range(ports):  # Newton comes down an exponential by no more than its slope voltage a turn
        for at in (1, 2):
            v[at, p] = limited_move(laws[p], v[0, p], v[at, p])
    for _ in range(MAX_TURNS):
        for p in range(ports):
            law = laws[p]
            if law[HALF] > 0.0:
                q0, _c = added_charge(law, v[0, p])
                qa, ca = added_charge(law, v[1, p])
                qb, cb = added_charge(law, v[2, p])
                # inverse of Radau IIA's matrix (5/12, -1/12; 3/4, 1/4): the currents that move these charges
                i[p] = (1.5 * (qa - q0) + 0.5 * (qb - q0)) / length_s
                i[ports + p] = (-4.5 * (qa - q0) + 2.5 * (qb - q0)) / length_s
                slope[p], slope[ports + p] = ca / length_s, cb / length_s
            else:
                i[p], slope[p] = junction(law, v[1, p])
                i[ports + p], slope[ports + p] = junction(law, v[2, p])
        for a in range(size):
            p = a % ports
            at_end = a >= ports
            row = first + p if at_end else first + ports + p  # rows: ends first
            t = open_v[p] if at_end else open_v[ports + p]
            for b in range(size):
                t += part[column + b, row] * i[b]
            law = laws[p]
            if law[HALF] == 0.0:
                t -= law[SERIES] * i[a]
            right[a] = t - (v[2, p] if at_end else v[1, p])
            for b in range(size):
                q = b % ports
                r = part[column + b, row]
                if laws[q, HALF] > 0.0:  # both currents hang on both voltages
                    ra, rb = part[column + q, row], part[column + ports + q, row]
                    g = (0.5 * ra + 2.5 * rb) if b >= ports else (1.5 * ra - 4.5 * rb)
                    J[a, b] = -g * slope[b]
                else:
                    if a == b:
                        r -= law[SERIES]
                    J[a, b] = -r * slope[b]
            J[a, a] += 1.0
        if not solve_small(J, right, size):
            return False
        change = 0.0
        for a in range(size):
            p = a % ports
            at = 2 if a >= ports else 1
            old = v[at, p]
            new = limited_move(laws[p], old, old + right[a])
            if not np.isfinite(new):
                return False
            change = max(change, abs(new - old) - 1e-9 * abs(new), abs(new) - MOST_V)
            v[at, p] = new
        if change < TOLERANCE_V:
            for p in range(ports):
                law = laws[p]
                if law[HALF] > 0.0:
                    q0, _c = added_charge(law, v[0, p])
                    qa, ca = added_charge(law, v[1, p])
                    qb, cb = added_charge(law, v[2, p])
                    i[p] = (1.5 * (qa - q0) + 0.5 * (qb - q0)) / length_s
                    i[ports + p] = (-4.5 * (qa - q0) + 2.5 * (qb - q0)) / length_s
                else:
                    i[p], _g = junction(law, v[1, p])
                    i[ports + p], _g = junction(law, v[2, p])
            return True
    return False


@compiled
def keep_ports(laws: Any, v: Any, i: Any) -> None:
    """Where no solution is found: every port stays at the voltage and current it had."""
    ports = laws.shape[0]
    for p in range(ports):
        v[1, p] = v[2, p] = v[0, p]
        current = 0.0
        if laws[p, HALF] == 0.0:
            current, _g = junction(laws[p], v[0, p])
        i[p] = i[ports + p] = current


@compiled
def port_flows(
    laws: Any, port: Any, turn: Any, n: int, opamp: int, column: int, v: Any, flows: Any, room: Any
) -> None:
    """``flows``: how the current of each port moves at once with an op-amp's inner voltage [A/V].

    Parameters
    ----------
    port, turn : (np, c), (n, k)
        See ``macromodel.MacroEquations``; port currents in the columns from ``column``.
    v : (np,)
        Junction voltages at present [V].
    flows : (np,)
        Receives the result; class 2 capacitors take their time.
    """
    ports = laws.shape[0]
    J, right = room[:ports], room[2 * ports]
    for p in range(ports):
        flows[p] = 0.0
        if laws[p, HALF] == 0.0:
            _i, flows[p] = junction(laws[p], v[p])
    for p in range(ports):
        t = port[p, n + opamp]
        for i in range(n):
            t -= port[p, i] * turn[i, opamp]
        right[p] = t
        for q in range(ports):
            r = port[p, column + q] - (laws[p, SERIES] if p == q and laws[p, HALF] == 0.0 else 0.0)
            J[p, q] = (1.0 if p == q else 0.0) - r * flows[q]
    solved = solve_small(J, right, ports)
    for p in range(ports):
        flows[p] = flows[p] * right[p] if solved else 0.0


@compiled
def gain_of(gains: Any, walls: Any, m: int, column: int, flows: Any) -> float:
    """How far a wall's row moves at once with its op-amp, with what the ports let flow."""
    t = gains[m]
    for p in range(flows.shape[0]):
        t += walls[m, column + p] * flows[p]
    return float(t)
