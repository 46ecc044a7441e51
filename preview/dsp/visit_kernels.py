"""What a running circuit notes of its op-amps, compiled: columns of the statistics, and the log of visits to limits.

A visit begins or ends only in a step that is solved for itself; many steps at a time are taken while nothing changes.
So the running kernels begin a row for each op-amp before such a step, and keep it if something changed in it.
"""

from __future__ import annotations

from typing import Any

from preview.compiled import compiled

# columns of the op-amps' running statistics
HIGH, LOW, SLEW, CURRENT, EVENTS, CLIPPED, UNSOLVED, STARVED, OUTSIDE, OUTSIDE_EVENTS, STATS = range(11)

# columns of the log: which step, channel and op-amp; what that was at before the step and after it; its voltage;
# whether it slewed; and what the step added to its statistics: visits to a rail and time there, time at its largest
# current, visits out of its input range and time there [steps]
STEP, CHANNEL, OPAMP, WAS, NOW, VOLTAGE, SLEWED, VISITS, AT_RAIL, AT_CURRENT, EXITS, AWAY, LOG = range(13)

# what an op-amp is at, added up
RAIL, CURRENT_LIMIT, OUT_OF_RANGE, SLEWS = 1, 2, 4, 8

ALMOST = 1.0 - 1e-9
"""Share of the slew rate from which on an op-amp is taken to slew, and of a step that is all of it."""


@compiled
def begin_row(row: Any, step: int, channel: int, opamp: int, was: int, stats: Any) -> None:
    """Keep what stands in an op-amp's statistics before a step; its fastest change begins anew."""
    row[STEP], row[CHANNEL], row[OPAMP], row[WAS] = step, channel, opamp, was
    row[SLEWED], row[VISITS], row[AT_RAIL] = stats[SLEW], stats[EVENTS], stats[CLIPPED]
    row[AT_CURRENT], row[EXITS], row[AWAY] = stats[STARVED], stats[OUTSIDE_EVENTS], stats[OUTSIDE]
    stats[SLEW] = 0.0


@compiled
def end_row(row: Any, now: int, voltage: float, slow: float, fast: float, stats: Any) -> bool:
    """What the step added, and what the op-amp is at now; whether anything began or ended in it.

    ``slow`` and ``fast`` are its slew rates [V/step]: whoever slews moves at just one of them.
    """
    was, fastest = int(row[WAS]), stats[SLEW]
    stats[SLEW] = max(row[SLEWED], fastest)
    slewed = (was | now) & SLEWS != 0 or slow * ALMOST <= fastest <= slow / ALMOST or fastest >= ALMOST * fast
    row[NOW], row[VOLTAGE], row[SLEWED] = now, voltage, 1.0 if slewed else 0.0
    row[VISITS], row[AT_RAIL] = stats[EVENTS] - row[VISITS], stats[CLIPPED] - row[AT_RAIL]
    row[AT_CURRENT] = stats[STARVED] - row[AT_CURRENT]
    row[EXITS], row[AWAY] = stats[OUTSIDE_EVENTS] - row[EXITS], stats[OUTSIDE] - row[AWAY]
    return (
        now != was
        or row[VISITS] > 0.0
        or row[EXITS] > 0.0
        or 0.0
        < row[AT_CURRENT]
        < ALMOST  # its visits are not counted: it came and went, or the other way round
        or (slewed and now & SLEWS == 0)
    )


@compiled
def put_row(target: Any, source: Any) -> None:
    """Copy a row of the log."""
    for i in range(source.shape[0]):
        target[i] = source[i]
