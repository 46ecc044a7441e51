"""Where a circuit rests without a signal: the DC operating point with every limit and every diode."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.dsp import laws as laws_of
from preview.dsp import port_kernels
from preview.dsp.macromodel import Limits, MacroEquations
from preview.dsp.regime_kernels import ABOVE, AT_HIGH, AT_LOW, AT_WALL, BELOW, FOLLOWS, IN_RANGE
from preview.errors import CircuitError

__all__ = ["Rest", "resting_state"]

Real = NDArray[np.float64]
Whole = NDArray[np.int64]

MAX_TURNS = 200
"""Newton steps of the diodes for one share of the supply."""
SHARES = (0.001, 0.003, 0.01, 0.03, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0)
"""Shares in which the constant voltages are brought up where all at once do not settle."""


@dataclass(frozen=True, slots=True)
class Rest:
    """A circuit at rest."""

    states: Real
    """(N,): the network's states and the op-amps' inner voltages."""
    kinds: Whole
    """(k,): what each op-amp does, see ``regime_kernels``."""
    ranges: Whole
    """(k,): where its + input is."""
    junctions: Real
    """(np,): junction voltages [V]."""
    currents: Real
    """(np,): port currents [A]."""
    heights: Real
    """(k + G,): inner voltage of each op-amp, then the row of each wall."""


def resting_state(equations: MacroEquations, limits: Limits, owner: Whole, ranges: tuple[Real, Real]) -> Rest:
    """The rest of the first set of values; ``ranges`` are the least and greatest + input voltages, (k,) each.

    Op-amps that would rest beyond a limit are put at it, the one furthest beyond first, and all is solved again.

    Raises
    ------
    CircuitError
        The diodes find no rest.
    """
    base, walls, plus, port = equations.base[0], equations.walls[0], equations.plus[0], equations.port[0]
    rate, laws = equations.rate[0], limits.laws[0]
    n, k = equations.turn[0].shape
    size, ports, columns = n + k, len(laws), base.shape[1]
    at_1, at_i = size + 3, size + 4
    kinds, places = np.full(k, FOLLOWS, dtype=np.int64), np.full(k, IN_RANGE, dtype=np.int64)
    v_j = np.zeros(ports)
    rest = None
    for _ in range(8 * (k + 1)):
        rows = np.zeros((size, columns))
        rows[:n] = base
        for o in range(k):
            kind = int(kinds[o])
            rows[n + o] = rate[places[o], o]
            if kind in (AT_HIGH, AT_LOW):
                rows[n + o] = 0.0
                rows[n + o, n + o] = 1.0
                rows[n + o, at_1] = -limits.rails[0, 1 if kind == AT_HIGH else 0, o]
            elif kind >= AT_WALL:
                m, low = divmod(kind - AT_WALL, 2)
                rows[n + o] = walls[m]
                rows[n + o, at_1] -= limits.walls[0, 0 if low else 1, m]
        states, v_j, currents = _solve(rows, port, laws, size, v_j)
        instant = np.zeros(columns)
        instant[:size], instant[at_1], instant[at_i : at_i + ports] = states, 1.0, currents
        heights = np.concatenate([states[n:], walls @ instant])
        rest = Rest(states, kinds.copy(), places.copy(), v_j, currents, heights)
        if not _moved(rest, rate, plus, limits, owner, ranges, instant, kinds, places):
            break
    assert rest is not None
    return rest


def _moved(
    rest: Rest,
    rate: Real,
    plus: Real,
    limits: Limits,
    owner: Whole,
    ranges: tuple[Real, Real],
    instant: Real,
    kinds: Whole,
    places: Whole,
) -> bool:
    """Put one op-amp into another regime where its present one does not hold; False where all hold."""
    k = len(kinds)
    for o in range(len(plus)):
        v = float(plus[o] @ instant)
        where = ABOVE if v > ranges[1][o] + 1e-9 else (BELOW if v < ranges[0][o] - 1e-9 else IN_RANGE)
        if where != places[o]:
            places[o] = where
            return True
    for o in range(k):
        push = float(rate[places[o], o] @ instant)
        kind = int(kinds[o])
        if kind == FOLLOWS:
            continue
        inward = (
            push < 0.0 if kind == AT_HIGH or (kind >= AT_WALL and (kind - AT_WALL) % 2 == 0) else push > 0.0
        )
        if inward:
            kinds[o] = FOLLOWS
            return True
    worst, at, new = 1e-9, -1, FOLLOWS
    bounds = [
        (o, rest.heights[o], limits.rails[0, 0, o], limits.rails[0, 1, o], AT_LOW, AT_HIGH, 1.0)
        for o in range(k)
    ]
    bounds += [
        (
            int(o),
            rest.heights[k + m],
            limits.walls[0, 0, m],
            limits.walls[0, 1, m],
            AT_WALL + 2 * m + 1,
            AT_WALL + 2 * m,
            g,
        )
        for m, (o, g) in enumerate(zip(owner, np.abs(limits.gains[0]), strict=True))
    ]
    for o, v, low, high, kind_low, kind_high, gain in bounds:
        for over, kind in ((v - high, kind_high), (low - v, kind_low)):
            if kinds[o] != kind and over / max(gain, 1e-12) > worst:  # as a move of the op-amp
                worst, at, new = over / max(gain, 1e-12), o, kind
    if at < 0:
        return False
    kinds[at] = new
    return True


def _solve(rows: Real, port: Real, laws: Real, size: int, start: Real) -> tuple[Real, Real, Real]:
    """States, junction voltages and port currents that bring all rows to zero."""
    found = _newton(rows, port, laws, size, start, 1.0)
    if found is None:
        v = np.zeros(len(laws))
        for share in SHARES:
            found = _newton(rows, port, laws, size, v, share)
            if found is None:
                raise CircuitError(
                    "the diodes of the circuit find no rest: their currents do not settle",
                    "look for a diode straight across a supply, or give it a resistor in series",
                )
            v = found[1]
    assert found is not None
    return found


def _newton(
    rows: Real, port: Real, laws: Real, size: int, start: Real, share: float
) -> tuple[Real, Real, Real] | None:
    """The same with a share of the constant voltages; None where the junctions do not settle."""
    ports = len(laws)
    at_1, at_i = size + 3, size + 4
    scale = np.maximum(np.abs(rows[:, :size]).max(axis=1, initial=0.0), 1e-300)[:, None]
    top = rows / scale
    charged = laws[:, laws_of.HALF] > 0.0
    series = np.diag(np.where(charged, 0.0, laws[:, laws_of.SERIES]))
    flows, drops = top[:, at_i : at_i + ports], port[:, at_i : at_i + ports] - series
    v, current, slope = start.copy(), np.zeros(ports), np.zeros(ports)
    for _ in range(MAX_TURNS):
        for p in range(ports):
            if not charged[p]:
                current[p], slope[p] = port_kernels.junction(laws[p], v[p])
        # unknown: the states, and how far each junction voltage moves
        matrix = np.block([[top[:, :size], flows * slope], [port[:, :size], drops * slope - np.eye(ports)]])
        right = -np.concatenate(
            [share * top[:, at_1] + flows @ current, share * port[:, at_1] + drops @ current - v]
        )
        solved, *_ = np.linalg.lstsq(matrix, right, rcond=1e-14)
        if not np.all(np.isfinite(solved)):
            return None
        change = 0.0
        for p in range(ports):
            new = v[p] + solved[size + p]
            if not charged[p]:
                new = port_kernels.limited_move(laws[p], v[p], new)
            change = max(change, abs(new - v[p]) - 1e-12 * abs(new))
            v[p] = new
        if change <= 1e-11:
            return solved[:size], v, current
    return None
