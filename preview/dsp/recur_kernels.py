"""The recurrence of more than three states, written out so that they stay in registers, compiled."""

from __future__ import annotations

from typing import Any

from preview.compiled import compiled


@compiled
def dot_4(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times four numbers."""
    return (m[r, 0] * x[0] + m[r, 1] * x[1]) + (m[r, 2] * x[2] + m[r, 3] * x[3])


@compiled
def recur_4(m: Any, drive: Any, track: Any, count: int) -> None:
    """Four states."""
    x = (track[0, 0], track[1, 0], track[2, 0], track[3, 0])
    for i in range(count):
        x = (
            drive[0, i] + dot_4(m, 0, x),
            drive[1, i] + dot_4(m, 1, x),
            drive[2, i] + dot_4(m, 2, x),
            drive[3, i] + dot_4(m, 3, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]


@compiled
def dot_5(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times five numbers."""
    return dot_4(m, r, x) + m[r, 4] * x[4]


@compiled
def recur_5(m: Any, drive: Any, track: Any, count: int) -> None:
    """Five states."""
    x = (track[0, 0], track[1, 0], track[2, 0], track[3, 0], track[4, 0])
    for i in range(count):
        x = (
            drive[0, i] + dot_5(m, 0, x),
            drive[1, i] + dot_5(m, 1, x),
            drive[2, i] + dot_5(m, 2, x),
            drive[3, i] + dot_5(m, 3, x),
            drive[4, i] + dot_5(m, 4, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1] = x[4]


@compiled
def dot_6(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times six numbers."""
    return dot_4(m, r, x) + (m[r, 4] * x[4] + m[r, 5] * x[5])


@compiled
def recur_6(m: Any, drive: Any, track: Any, count: int) -> None:
    """Six states."""
    x = (track[0, 0], track[1, 0], track[2, 0], track[3, 0], track[4, 0], track[5, 0])
    for i in range(count):
        x = (
            drive[0, i] + dot_6(m, 0, x),
            drive[1, i] + dot_6(m, 1, x),
            drive[2, i] + dot_6(m, 2, x),
            drive[3, i] + dot_6(m, 3, x),
            drive[4, i] + dot_6(m, 4, x),
            drive[5, i] + dot_6(m, 5, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1] = x[4], x[5]


@compiled
def dot_7(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times seven numbers."""
    return dot_4(m, r, x) + ((m[r, 4] * x[4] + m[r, 5] * x[5]) + m[r, 6] * x[6])


@compiled
def recur_7(m: Any, drive: Any, track: Any, count: int) -> None:
    """Seven states."""
    x = (track[0, 0], track[1, 0], track[2, 0], track[3, 0], track[4, 0], track[5, 0], track[6, 0])
    for i in range(count):
        x = (
            drive[0, i] + dot_7(m, 0, x),
            drive[1, i] + dot_7(m, 1, x),
            drive[2, i] + dot_7(m, 2, x),
            drive[3, i] + dot_7(m, 3, x),
            drive[4, i] + dot_7(m, 4, x),
            drive[5, i] + dot_7(m, 5, x),
            drive[6, i] + dot_7(m, 6, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1] = x[4], x[5], x[6]


@compiled
def dot_8(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times eight numbers."""
    return dot_4(m, r, x) + ((m[r, 4] * x[4] + m[r, 5] * x[5]) + (m[r, 6] * x[6] + m[r, 7] * x[7]))


@compiled
def recur_8(m: Any, drive: Any, track: Any, count: int) -> None:
    """Eight states."""
    x = (
        track[0, 0],
        track[1, 0],
        track[2, 0],
        track[3, 0],
        track[4, 0],
        track[5, 0],
        track[6, 0],
        track[7, 0],
    )
    for i in range(count):
        x = (
            drive[0, i] + dot_8(m, 0, x),
            drive[1, i] + dot_8(m, 1, x),
            drive[2, i] + dot_8(m, 2, x),
            drive[3, i] + dot_8(m, 3, x),
            drive[4, i] + dot_8(m, 4, x),
            drive[5, i] + dot_8(m, 5, x),
            drive[6, i] + dot_8(m, 6, x),
            drive[7, i] + dot_8(m, 7, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1], track[7, i + 1] = x[4], x[5], x[6], x[7]


@compiled
def dot_9(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times nine numbers."""
    return dot_8(m, r, x) + m[r, 8] * x[8]


@compiled
def recur_9(m: Any, drive: Any, track: Any, count: int) -> None:
    """Nine states."""
    x = (
        track[0, 0],
        track[1, 0],
        track[2, 0],
        track[3, 0],
        track[4, 0],
        track[5, 0],
        track[6, 0],
        track[7, 0],
        track[8, 0],
    )
    for i in range(count):
        x = (
            drive[0, i] + dot_9(m, 0, x),
            drive[1, i] + dot_9(m, 1, x),
            drive[2, i] + dot_9(m, 2, x),
            drive[3, i] + dot_9(m, 3, x),
            drive[4, i] + dot_9(m, 4, x),
            drive[5, i] + dot_9(m, 5, x),
            drive[6, i] + dot_9(m, 6, x),
            drive[7, i] + dot_9(m, 7, x),
            drive[8, i] + dot_9(m, 8, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1], track[7, i + 1] = x[4], x[5], x[6], x[7]
        track[8, i + 1] = x[8]


@compiled
def dot_10(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times ten numbers."""
    return dot_8(m, r, x) + (m[r, 8] * x[8] + m[r, 9] * x[9])


@compiled
def recur_10(m: Any, drive: Any, track: Any, count: int) -> None:
    """Ten states."""
    x = (
        track[0, 0],
        track[1, 0],
        track[2, 0],
        track[3, 0],
        track[4, 0],
        track[5, 0],
        track[6, 0],
        track[7, 0],
        track[8, 0],
        track[9, 0],
    )
    for i in range(count):
        x = (
            drive[0, i] + dot_10(m, 0, x),
            drive[1, i] + dot_10(m, 1, x),
            drive[2, i] + dot_10(m, 2, x),
            drive[3, i] + dot_10(m, 3, x),
            drive[4, i] + dot_10(m, 4, x),
            drive[5, i] + dot_10(m, 5, x),
            drive[6, i] + dot_10(m, 6, x),
            drive[7, i] + dot_10(m, 7, x),
            drive[8, i] + dot_10(m, 8, x),
            drive[9, i] + dot_10(m, 9, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1], track[7, i + 1] = x[4], x[5], x[6], x[7]
        track[8, i + 1], track[9, i + 1] = x[8], x[9]


@compiled
def dot_11(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times eleven numbers."""
    return dot_8(m, r, x) + ((m[r, 8] * x[8] + m[r, 9] * x[9]) + m[r, 10] * x[10])


@compiled
def recur_11(m: Any, drive: Any, track: Any, count: int) -> None:
    """Eleven states."""
    x = (
        track[0, 0],
        track[1, 0],
        track[2, 0],
        track[3, 0],
        track[4, 0],
        track[5, 0],
        track[6, 0],
        track[7, 0],
        track[8, 0],
        track[9, 0],
        track[10, 0],
    )
    for i in range(count):
        x = (
            drive[0, i] + dot_11(m, 0, x),
            drive[1, i] + dot_11(m, 1, x),
            drive[2, i] + dot_11(m, 2, x),
            drive[3, i] + dot_11(m, 3, x),
            drive[4, i] + dot_11(m, 4, x),
            drive[5, i] + dot_11(m, 5, x),
            drive[6, i] + dot_11(m, 6, x),
            drive[7, i] + dot_11(m, 7, x),
            drive[8, i] + dot_11(m, 8, x),
            drive[9, i] + dot_11(m, 9, x),
            drive[10, i] + dot_11(m, 10, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1], track[7, i + 1] = x[4], x[5], x[6], x[7]
        track[8, i + 1], track[9, i + 1], track[10, i + 1] = x[8], x[9], x[10]


@compiled
def dot_12(m: Any, r: int, x: Any) -> Any:
    """Row ``r`` of a matrix times twelve numbers."""
    return dot_8(m, r, x) + ((m[r, 8] * x[8] + m[r, 9] * x[9]) + (m[r, 10] * x[10] + m[r, 11] * x[11]))


@compiled
def recur_12(m: Any, drive: Any, track: Any, count: int) -> None:
    """Twelve states."""
    x = (
        track[0, 0],
        track[1, 0],
        track[2, 0],
        track[3, 0],
        track[4, 0],
        track[5, 0],
        track[6, 0],
        track[7, 0],
        track[8, 0],
        track[9, 0],
        track[10, 0],
        track[11, 0],
    )
    for i in range(count):
        x = (
            drive[0, i] + dot_12(m, 0, x),
            drive[1, i] + dot_12(m, 1, x),
            drive[2, i] + dot_12(m, 2, x),
            drive[3, i] + dot_12(m, 3, x),
            drive[4, i] + dot_12(m, 4, x),
            drive[5, i] + dot_12(m, 5, x),
            drive[6, i] + dot_12(m, 6, x),
            drive[7, i] + dot_12(m, 7, x),
            drive[8, i] + dot_12(m, 8, x),
            drive[9, i] + dot_12(m, 9, x),
            drive[10, i] + dot_12(m, 10, x),
            drive[11, i] + dot_12(m, 11, x),
        )
        track[0, i + 1], track[1, i + 1], track[2, i + 1], track[3, i + 1] = x[0], x[1], x[2], x[3]
        track[4, i + 1], track[5, i + 1], track[6, i + 1], track[7, i + 1] = x[4], x[5], x[6], x[7]
        track[8, i + 1], track[9, i + 1], track[10, i + 1], track[11, i + 1] = x[8], x[9], x[10], x[11]


@compiled
def recur_wide(M: Any, drive: Any, track: Any, size: int, count: int, m: Any) -> None:
    """``track[:, i + 1] = M track[:, i] + drive[:, i]``; ``m`` (size, size) is room."""
    for r in range(size):
        for j in range(size):
            m[r, j] = M[r, j]
    if size == 4:
        recur_4(m, drive, track, count)
    elif size == 5:
        recur_5(m, drive, track, count)
    elif size == 6:
        recur_6(m, drive, track, count)
    elif size == 7:
        recur_7(m, drive, track, count)
    elif size == 8:
        recur_8(m, drive, track, count)
    elif size == 9:
        recur_9(m, drive, track, count)
    elif size == 10:
        recur_10(m, drive, track, count)
    elif size == 11:
        recur_11(m, drive, track, count)
    elif size == 12:
        recur_12(m, drive, track, count)
    else:
        for i in range(count):
            for r in range(size):
                t = drive[r, i]
                for j in range(size):
                    t += m[r, j] * track[j, i]
                track[r, i + 1] = t
