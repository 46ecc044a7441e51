"""The matrices of one regime, compiled: what every op-amp does while the circuit is linear.

Shapes: n network states, k op-amps, N = n + k states in all, np ports, G walls, c = N + 4 + 2 np columns of a row over
an instant: ``[states, u, u', u'', 1, port currents, their slopes]``, time in steps. A row of a matrix over a part of a
step has N + 4 + 2 np columns too: ``[states, u at the start, its mean, its end, 1, port currents at 1/3, at the end]``.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from preview.compiled import compiled
from preview.dsp.kernels import solve_small

LEVELS = 5
"""Halvings of a step in which the regime changes."""

# what an op-amp does; at the high side of wall m: AT_WALL + 2 m, at its low side: AT_WALL + 2 m + 1
FOLLOWS, SLEWS_UP, SLEWS_DOWN, AT_HIGH, AT_LOW, AT_WALL = 0, 1, 2, 3, 4, 5
# where its + input is
IN_RANGE, ABOVE, BELOW = 0, 1, 2


@compiled
def put(target: Any, source: Any) -> None:
    """Copy a matrix."""
    for r in range(source.shape[0]):
        for c in range(source.shape[1]):
            target[r, c] = source[r, c]


@compiled
def multiply(a: Any, b: Any, result: Any) -> None:
    """``result = a b`` for square matrices, in one fixed order."""
    size = a.shape[0]
    for i in range(size):
        for j in range(size):
            result[i, j] = 0.0
        for m in range(size):
            f = a[i, m]
            if f != 0.0:
                for j in range(size):
                    result[i, j] += f * b[m, j]


@compiled
def exponential(a: Any, scale: float, result: Any, power: Any, other: Any) -> None:
    """``result = exp(a scale)`` by Taylor's series of a scaled matrix, squared back."""
    size = a.shape[0]
    norm = 0.0
    for i in range(size):
        t = 0.0
        for j in range(size):
            t += abs(a[i, j])
        norm = max(norm, t)
    norm *= scale
    halvings = 0
    while norm > 0.5 and halvings < 1000:  # what is not finite stays so
        norm *= 0.5
        halvings += 1
    f = scale / 2.0**halvings
    for i in range(size):
        for j in range(size):
            one = 1.0 if i == j else 0.0
            result[i, j] = one + a[i, j] * f
            power[i, j] = a[i, j] * f
    for order in range(2, 15):
        multiply(power, a, other)
        for i in range(size):
            for j in range(size):
                power[i, j] = other[i, j] * f / order
                result[i, j] += power[i, j]
    for _ in range(halvings):
        multiply(result, result, other)
        put(result, other)


@compiled
def moves_along(kind: int, k: int, ports: int) -> bool:
    """Whether an op-amp keeps moving at its wall.

    At its largest current it stands still where there are ports, for how far that current moves with it hangs on
    their slopes; it is put back onto the wall after each part of a step.
    """
    return kind >= AT_WALL and (ports == 0 or (kind - AT_WALL) // 2 >= k)


@compiled
def motion(
    base: Any,
    turn: Any,
    rate: Any,
    walls: Any,
    kinds: Any,
    ranges: Any,
    up: Any,
    down: Any,
    moves: Any,
    held: Any,
    right: Any,
) -> bool:
    """Rate of change of every op-amp in a regime, as rows over an instant; False where walls contradict each other.

    Parameters
    ----------
    base, turn, rate, walls : (n, c), (n, k), (3, k, c), (G, c)
        See ``macromodel.MacroEquations``.
    kinds, ranges : (k,) int64
        What each op-amp does, where its + input is.
    up, down : (k,)
        Fastest changes [V/step].
    moves : (k, c)
        Receives the rows.
    held, right : (k, k), (k,)
        Room.
    """
    k, columns = moves.shape
    n = base.shape[0]
    size = n + k
    at_u, at_1 = size, size + 3
    ports = (columns - size - 4) // 2
    at_walls = 0
    for o in range(k):
        kind = kinds[o]
        if moves_along(kind, k, ports):
            at_walls += 1
        for j in range(columns):
            moves[o, j] = rate[ranges[o], o, j] if kind == FOLLOWS else 0.0
        if kind == SLEWS_UP:
            moves[o, at_1] = up[o]
        elif kind == SLEWS_DOWN:
            moves[o, at_1] = -down[o]
    if at_walls == 0:
        return True
    # along a wall its row stays as it is: p' = base - turn w' in d(row)/dt = 0, all walls in force together
    for j in range(columns):
        for o in range(k):
            for b in range(k):
                held[o, b] = 1.0 if o == b else 0.0
            right[o] = moves[o, j]
            kind = kinds[o]
            if not moves_along(kind, k, ports):
                continue
            row = walls[(kind - AT_WALL) // 2]
            t = 0.0
            for i in range(n):
                t += row[i] * base[i, j]
            if at_u < j <= at_u + 2:
                t += row[j - 1]
            if j >= size + 4 + ports:
                t += row[j - ports]
            right[o] = -t
            for b in range(k):
                g = row[n + b]
                for i in range(n):
                    g -= row[i] * turn[i, b]
                held[o, b] = g
        if not solve_small(held, right, k):
            for o in range(k):
                right[o] = np.inf
        for o in range(k):
            if moves_along(kinds[o], k, ports):
                moves[o, j] = right[o]
    fine = True
    for o in range(k):
        for j in range(columns):
            if not abs(moves[o, j]) < 1e30:  # walls that contradict each other: it stays where it is
                for b in range(columns):
                    moves[o, b] = 0.0
                fine = False
    return fine


@compiled
def generator(base: Any, turn: Any, moves: Any, out: Any, result: Any) -> None:
    """Derivative by itself of an instant and, last, the integral of the output, per step; (c + 1, c + 1)."""
    k, columns = moves.shape
    n = base.shape[0]
    size = n + k
    ports = (columns - size - 4) // 2
    result[:, :] = 0.0
    for j in range(columns):
        for i in range(n):
            t = base[i, j]
            for o in range(k):
                t -= turn[i, o] * moves[o, j]
            result[i, j] = t
        for o in range(k):
            result[n + o, j] = moves[o, j]
        result[columns, j] = out[j]
    result[size, size + 1] = 1.0
    result[size + 1, size + 2] = 1.0
    for p in range(ports):
        result[size + 4 + p, size + 4 + ports + p] = 1.0


@compiled
def written_over_ends(line: Any, size: int, ports: int, length: float, result: Any) -> None:
    """A row over the instant at the start of a part of a step, written over that part's signal and port currents."""
    for j in range(size):
        result[j] = line[j]
    u, v1, v2 = line[size], line[size + 1] / length, line[size + 2] / (length * length)
    result[size] = u - 4.0 * v1 + 6.0 * v2
    result[size + 1] = 6.0 * v1 - 12.0 * v2
    result[size + 2] = -2.0 * v1 + 6.0 * v2
    result[size + 3] = line[size + 3]
    for p in range(ports):  # a line through the currents at 1/3 and at the end
        value, slope = line[size + 4 + p], line[size + 4 + ports + p] * (1.5 / length)
        result[size + 4 + p] = 1.5 * value - slope
        result[size + 4 + ports + p] = slope - 0.5 * value


@compiled
def part_matrix(
    phi: Any,
    third: Any,
    checks: Any,
    port: Any,
    n: int,
    k: int,
    length: float,
    line: Any,
    written: Any,
    result: Any,
) -> None:
    """Matrix of a part of a step, columns first: (c, r), r = N + checks + 1 + 2 np.

    Rows: states at the end, the checks at the end, mean of the output over the part, port voltages at the end, at 1/3.
    """
    size = n + k
    columns = phi.shape[0] - 1
    ports = port.shape[0]
    count = checks.shape[0]
    rows = size + count + 1 + 2 * ports
    for r in range(rows):
        if r < size:
            for j in range(columns):
                line[j] = phi[r, j]
        elif r == size + count:
            for j in range(columns):
                line[j] = phi[columns, j] / length
        else:
            for j in range(columns):
                line[j] = 0.0
            for m in range(columns):
                if r < size + count:
                    f = checks[r - size, m]
                    if f != 0.0:
                        for j in range(columns):
                            line[j] += f * phi[m, j]
                elif r < size + count + 1 + ports:
                    f = port[r - size - count - 1, m]
                    if f != 0.0:
                        for j in range(columns):
                            line[j] += f * phi[m, j]
                else:
                    f = port[r - size - count - 1 - ports, m]
                    if f != 0.0:
                        for j in range(columns):
                            line[j] += f * third[m, j]
        written_over_ends(line, size, ports, length, written)
        for j in range(columns):
            result[j, r] = written[j]


@compiled
def fill_parts(
    base: Any,
    turn: Any,
    rate: Any,
    out: Any,
    walls: Any,
    plus: Any,
    port: Any,
    kinds: Any,
    ranges: Any,
    up: Any,
    down: Any,
    whole_only: bool,
    parts: Any,
    work: Any,
    checks: Any,
    lines: Any,
    held: Any,
    right: Any,
) -> Any:
    """Matrices of a regime: of a whole step, and unless ``whole_only`` of its half, quarter ... as well.

    Parameters
    ----------
    parts : (LEVELS + 1, c, r)
        Receives them, see ``part_matrix``. The checks of each op-amp: by how much it is asked to change faster than it
        does, or, where it moves freely, how fast; then the walls; then the + inputs.
    work, checks, lines, held, right
        Room: (7, c + 1, c + 1), (k + G + plus inputs, c), (2 + k, c), (k, k), (k,).
    """
    n, k = turn.shape
    ports = port.shape[0]
    columns = base.shape[1]
    moves = lines[2:]
    fine = motion(base, turn, rate, walls, kinds, ranges, up, down, moves, held, right)
    for o in range(k):
        at_limit = kinds[o] >= AT_HIGH
        for j in range(columns):
            checks[o, j] = rate[ranges[o], o, j] - (moves[o, j] if at_limit else 0.0)
    for m in range(walls.shape[0]):
        for j in range(columns):
            checks[k + m, j] = walls[m, j]
    for o in range(plus.shape[0]):
        for j in range(columns):
            checks[k + walls.shape[0] + o, j] = plus[o, j]
    A, phi, third = work[3], work[0], work[4]
    generator(base, turn, moves, out, A)
    least = 1.0 if whole_only else 1.0 / 2**LEVELS
    exponential(A, least, phi, work[1], work[2])
    if ports:
        exponential(A, least / 3.0, third, work[1], work[2])
    level = 0 if whole_only else LEVELS
    while True:
        part_matrix(phi, third, checks, port, n, k, 1.0 / 2**level, lines[0], lines[1], parts[level])
        if level == 0:
            break
        multiply(phi, phi, work[1])
        put(phi, work[1])
        if ports:
            multiply(third, third, work[1])
            put(third, work[1])
        level -= 1
    return fine
