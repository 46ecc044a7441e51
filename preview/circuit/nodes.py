"""The node names that mean something."""

from __future__ import annotations

__all__ = ["GND", "IN", "LOAD_DESIGNATOR", "OUT", "SOURCE_DESIGNATOR", "SOURCE_NODE"]

GND = "gnd"
"""The reference of every voltage."""
IN = "in"
"""The stage's signal input."""
OUT = "out"
"""The stage's signal output."""
SOURCE_NODE = "source"
"""The ideal source's node behind a source resistance; no stage file may use it."""
SOURCE_DESIGNATOR = "Rsource"
"""The source resistance, from ``source`` to ``in``."""
LOAD_DESIGNATOR = "Rload"
"""The load resistance, from ``out`` to ``gnd``."""
