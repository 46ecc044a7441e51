"""Where the figures of a port's law stand in its row; apart from the kernels, so that nothing is compiled for it."""

from __future__ import annotations

# columns of a port's law. A junction conducts forward as SATURATION and SLOPE say; the other way, where BACK_SLOPE
# is above zero, from BACK on: a breakdown, or the second of two diodes back to back (BACK 0). CRITICAL: where steps
# of Newton are shortened. A class 2 capacitor has a HALF voltage.
(
    SATURATION,
    SLOPE,
    SERIES,
    BACK,
    BACK_CURRENT,
    BACK_SLOPE,
    HALF,
    FARAD,
    CRITICAL,
    BACK_CRITICAL,
    MOST,
    BACK_MOST,
    LAW,
) = range(13)

LEAST_GAIN = 1e-12
"""How little a wall's row may move with its op-amp for the op-amp to move along it [V/V, A/V]."""
