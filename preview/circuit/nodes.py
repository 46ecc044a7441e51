"""The node names that mean something."""

from __future__ import annotations

__all__ = [
    "GND",
    "IN",
    "LOAD_DESIGNATOR",
    "NEGATIVE_RAIL",
    "OUT",
    "POSITIVE_RAIL",
    "SOURCE_DESIGNATOR",
    "SOURCE_NODE",
]

GND = "gnd"
"""The reference of every voltage."""
IN = "in"
"""The stage's signal input."""
OUT = "out"
"""The stage's signal output."""
SOURCE_NODE = "source"
"""The ideal source's node behind a source resistance; no stage file may use it."""
POSITIVE_RAIL = "supply+"
"""The positive rail in force; any part may be connected to it."""
NEGATIVE_RAIL = "supply-"
"""The negative rail in force; on a single supply it is at gnd's voltage."""
SOURCE_DESIGNATOR = "Rsource"
"""The source resistance, from ``source`` to ``in``."""
LOAD_DESIGNATOR = "Rload"
"""The load resistance, from the output that is listened to, to ``gnd``."""
