"""The node names that mean something."""

from __future__ import annotations

__all__ = [
    "GND",
    "IN",
    "LOAD_PARTS",
    "NEGATIVE_RAIL",
    "OUT",
    "POSITIVE_RAIL",
    "SOURCE_NODE",
    "SOURCE_PARTS",
]

GND = "gnd"
"""The reference of every voltage."""
IN = "in"
"""The stage's signal input."""
OUT = "out"
"""The stage's signal output."""
SOURCE_NODE = "source"
"""The ideal source's node behind what is in series with it; no stage file may use it."""
POSITIVE_RAIL = "supply+"
"""The positive rail in force; any part may be connected to it."""
NEGATIVE_RAIL = "supply-"
"""The negative rail in force; on a single supply it is at gnd's voltage."""
SOURCE_PARTS = ("Rsource", "Lsource", "Csource", "Cwinding", "Ccable", "Rleakage")
"""Designators of what drives the stage: in series from ``source`` to ``in``, then from ``in`` to ``gnd``."""
LOAD_PARTS = ("Rload", "Cload")
"""Designators of what follows the stage, from the output that is listened to, to ``gnd``."""
