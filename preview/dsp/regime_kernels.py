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
from preview.dsp.laws import LEAST_GAIN

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
def resolvent(a: Any, scale: float, left: Any, right: Any) -> None:
    """``right = (1 - a scale / z)^-1`` with ``z = 2 + i sqrt 2``; real parts first, both (2, d, d)."""
    size = a.shape[0]
    for i in range(size):
        for j in range(size):
            one = 1.0 if i == j else 0.0
            left[0, i, j], left[1, i, j] = one - a[i, j] * scale / 3.0, a[i, j] * scale * np.sqrt(2.0) / 6.0
            right[0, i, j], right[1, i, j] = one, 0.0
    for col in range(size):
        best, most = col, -1.0
        for row in range(col, size):
            square = left[0, row, col] ** 2 + left[1, row, col] ** 2
            if square > most:
                best, most = row, square
        if best != col:
            for j in range(size):
                for m in (left, right):
                    for c in range(2):
                        m[c, col, j], m[c, best, j] = m[c, best, j], m[c, col, j]
        re, im = left[0, col, col] / most, -left[1, col, col] / most
        for m in (left, right):
            for j in range(size):
                x, y = m[0, col, j], m[1, col, j]
                m[0, col, j], m[1, col, j] = x * re - y * im, x * im + y * re
        for row in range(size):
            re, im = left[0, row, col], left[1, row, col]
            if row == col or (re == 0.0 and im == 0.0):
                continue
            for m in (left, right):
                for j in range(size):
                    x, y = m[0, col, j], m[1, col, j]
                    m[0, row, j] -= x * re - y * im
                    m[1, row, j] -= x * im + y * re


@compiled
def collocation(a: Any, length: float, at_end: Any, at_third: Any, left: Any, right: Any) -> None:
    """What collocation at the points of Radau IIA makes of ``exp(a length)`` and ``exp(a length / 3)``.

    The Padé approximants ``(1 + m/3) / (1 - 2m/3 + m²/6)`` and ``(1 - m/3) / (...)`` in partial fractions.
    """
    resolvent(a, length, left, right)
    size = a.shape[0]
    for i in range(size):
        for j in range(size):
            at_third[i, j] = right[0, i, j]
            at_end[i, j] = right[0, i, j] - np.sqrt(8.0) * right[1, i, j]


@compiled
def motion(
    base: Any,
    turn: Any,
    rate: Any,
    walls: Any,
    sides: Any,
    kinds: Any,
    ranges: Any,
    up: Any,
    down: Any,
    moves: Any,
    jumps: Any,
    held: Any,
    right: Any,
) -> bool:
    """Rate of change of every op-amp in a regime, as rows over an instant; False where walls contradict each other.

    An op-amp at a wall whose row does not hang on it stands still, and is put back onto it after each part of a step.

    Parameters
    ----------
    base, turn, rate, walls, sides : (n, c), (n, k), (3, k, c), (G, c), (2, G)
        See ``macromodel.MacroEquations``; least and greatest value of each wall.
    kinds, ranges : (k,) int64
        What each op-amp does, where its + input is.
    up, down : (k,)
        Fastest changes [V/step].
    moves, jumps : (k, c), (k, c)
        Receive the rows; how far each op-amp is from where all walls in force are kept, as a row over an instant.
    held, right : (k, k), (k,)
        Room.
    """
    k, columns = moves.shape
    n = base.shape[0]
    size = n + k
    at_u, at_1 = size, size + 3
    ports = (columns - size - 4) // 2
    at_walls = 0
    jumps[:, :] = 0.0
    for o in range(k):
        kind = kinds[o]
        if kind >= AT_WALL and abs(own_gain(walls[(kind - AT_WALL) // 2], turn, n, o)) > LEAST_GAIN:
            at_walls += 1
        for j in range(columns):
            moves[o, j] = rate[ranges[o], o, j] if kind == FOLLOWS else 0.0
        if kind == SLEWS_UP:
            moves[o, at_1] = up[o]
        elif kind == SLEWS_DOWN:
            moves[o, at_1] = -down[o]
    if at_walls == 0:
        return True
    fine = True
    for j in range(columns):
        # first: on the wall its row stays as it is, p' = base - turn w' in d(row)/dt = 0; then: onto the wall
        for onto in range(2):
            for o in range(k):
                for b in range(k):
                    held[o, b] = 1.0 if o == b else 0.0
                right[o] = moves[o, j] if onto == 0 else 0.0
                kind = kinds[o]
                if kind < AT_WALL:
                    continue
                wall, low = divmod(kind - AT_WALL, 2)
                row = walls[wall]
                if abs(own_gain(row, turn, n, o)) <= LEAST_GAIN:
                    continue
                if onto == 0:
                    t = 0.0
                    for i in range(n):
                        t += row[i] * base[i, j]
                    if at_u < j <= at_u + 2:
                        t += row[j - 1]
                    if j >= size + 4 + ports:
                        t += row[j - ports]
                else:
                    t = row[j] - (sides[0 if low else 1, wall] if j == at_1 else 0.0)
                right[o] = -t
                for b in range(k):
                    held[o, b] = own_gain(row, turn, n, b)
            fine = solve_small(held, right, k) and fine
            for o in range(k):
                if onto:
                    jumps[o, j] = right[o]
                elif kinds[o] >= AT_WALL:
                    moves[o, j] = right[o]
                fine = fine and abs(right[o]) < 1e30
    if not fine:  # walls that contradict each other: they stay where they are
        jumps[:, :] = 0.0
        for o in range(k):
            if kinds[o] >= AT_WALL:
                moves[o, :] = 0.0
    return fine


@compiled
def own_gain(row: Any, turn: Any, n: int, opamp: int) -> float:
    """How far a row moves with an op-amp's inner voltage."""
    t = row[n + opamp]
    for i in range(n):
        t -= row[i] * turn[i, opamp]
    return float(t)


@compiled
def put_onto_walls(turn: Any, jumps: Any, work: Any, phi: Any) -> None:
    """``phi`` times what brings an instant onto the walls in force, whatever its port currents."""
    k, columns = jumps.shape
    n = turn.shape[0]
    for r in range(phi.shape[0]):
        for o in range(k):
            f = phi[r, n + o]
            for i in range(n):
                f -= phi[r, i] * turn[i, o]
            work[o] = f
        for o in range(k):
            f = work[o]
            if f != 0.0:
                for j in range(columns):
                    phi[r, j] += f * jumps[o, j]


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
    sides: Any,
    kinds: Any,
    ranges: Any,
    up: Any,
    down: Any,
    collocates: bool,
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
    sides : (2, G)
        Least and greatest value of each wall.
    collocates : bool
        All is taken by collocation as the port currents are, in place of the exponential.
    parts : (LEVELS + 1, c, r)
        Receives them, see ``part_matrix``. The checks of each op-amp: by how much it is asked to change faster than it
        does, or, where it moves freely, how fast; then the walls; then the + inputs.
    work, checks, lines, held, right
        Room: (9, c + 1, c + 1), (k + G + plus inputs, c), (2 + 2 k, c), (k, k), (k,).
    """
    n, k = turn.shape
    ports = port.shape[0]
    columns = base.shape[1]
    moves, jumps = lines[2 : 2 + k], lines[2 + k :]
    fine = motion(base, turn, rate, walls, sides, kinds, ranges, up, down, moves, jumps, held, right)
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
    A, phi, third, kept, kept_third = work[3], work[0], work[4], work[5], work[6]
    generator(base, turn, moves, out, A)
    # rates as they are on the walls: what stays as it is would be a double zero, which rounding makes grow
    put_onto_walls(turn, jumps, right, A)
    least = 1.0 if whole_only else 1.0 / 2**LEVELS
    if not collocates:
        exponential(A, least, kept, work[1], work[2])
        if ports:
            exponential(A, least / 3.0, kept_third, work[1], work[2])
    level = 0 if whole_only else LEVELS
    while True:
        length = 1.0 / 2**level
        if collocates:
            collocation(A, length, phi, third, work[5:7], work[7:9])
        else:
            put(phi, kept)
            put(third, kept_third)
        if ports:  # where a line through their currents begins is not where they were
            put_onto_walls(turn, jumps, right, phi)
            put_onto_walls(turn, jumps, right, third)
        part_matrix(phi, third, checks, port, n, k, length, lines[0], lines[1], parts[level])
        if level == 0:
            break
        if not collocates:
            multiply(kept, kept, work[1])
            put(kept, work[1])
            if ports:
                multiply(kept_third, kept_third, work[1])
                put(kept_third, work[1])
        level -= 1
    return fine
