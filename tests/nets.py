"""Circuits that several tests use, written as short netlists."""

from __future__ import annotations

from dataclasses import replace

from preview.circuit.netlist import Branch, Netlist, OpAmpSite
from preview.circuit.opamp import OpAmpModel
from preview.circuit.parts import PartKind

KINDS = {"R": PartKind.RESISTOR, "C": PartKind.CAPACITOR, "L": PartKind.INDUCTOR}
RAIL_V = 13.5

Row = tuple[str, str, str, float]


def net(
    parts: list[Row], opamps: list[tuple[str, str, str]], *, rail_v: float = RAIL_V, source: str = "in"
) -> Netlist:
    """A netlist from (designator, node, node, value) rows and (plus, minus, out) rows."""
    return Netlist(
        source,
        "out",
        tuple(Branch(name, KINDS[name[0]], a, b, value) for name, a, b, value in parts),
        tuple(
            OpAmpSite(f"U{i + 1}", plus, minus, out, "ideal", rail_v, -rail_v)
            for i, (plus, minus, out) in enumerate(opamps)
        ),
    )


def with_models(circuit: Netlist, *models: OpAmpModel) -> Netlist:
    """The circuit with another model in each op-amp's place; one model alone is for all."""
    each = models * len(circuit.opamps) if len(models) == 1 else models
    sites = zip(circuit.opamps, each, strict=True)
    return replace(circuit, opamps=tuple(replace(site, model=model) for site, model in sites))


LOW_PASS = net(
    [("R1", "in", "sum", 10e3), ("R2", "sum", "out", 100e3), ("C1", "sum", "out", 1e-9)],
    [("gnd", "sum", "out")],
)
"""Inverting, gain 10, corner 1591.5 Hz."""

HIGH_PASS = net(
    [("R1", "in", "a", 10e3), ("C1", "a", "sum", 10e-9), ("R2", "sum", "out", 100e3)], [("gnd", "sum", "out")]
)
"""Inverting, gain 10, corner 1591.5 Hz."""

SALLEN_KEY = net(
    [("R1", "in", "a", 10e3), ("R2", "a", "b", 10e3), ("C1", "a", "out", 2e-9), ("C2", "b", "gnd", 1e-9)],
    [("b", "out", "out")],
)
"""Unity-gain second-order low-pass, 11.25 kHz, Q 0.707."""

TWO_SECTIONS = net(
    [
        ("R1", "in", "s1", 10e3),
        ("R2", "s1", "o1", 47e3),
        ("C1", "s1", "o1", 1e-9),
        ("R3", "o1", "b", 1e3),
        ("C2", "b", "s2", 100e-9),
        ("R4", "s2", "out", 4.7e3),
        ("R5", "out", "gnd", 600.0),
    ],
    [("gnd", "s1", "o1"), ("gnd", "s2", "out")],
)
"""Inverting low-pass into inverting high-pass, with a load."""

LADDER = net(
    [
        ("R1", "in", "a", 1e3),
        ("L1", "a", "b", 0.1),
        ("L2", "b", "tap", 0.2),
        ("C1", "tap", "gnd", 100e-9),
        ("R2", "tap", "gnd", 100e3),
        ("C3", "out", "gnd", 10e-9),
        ("C4", "in", "x", 1e-9),
        ("C5", "x", "gnd", 3e-9),
        ("R3", "x", "gnd", 1e6),
    ],
    [("tap", "out", "out")],
)
"""Every trap of state-space extraction: a node of inductors alone, capacitors across the source and the output."""

LOADED_LOW_PASS = net(
    [
        ("Rsource", "source", "in", 430.0),
        ("R1", "in", "sum", 10e3),
        ("R2", "sum", "o", 100e3),
        ("C1", "sum", "o", 1e-9),
        ("R3", "o", "out", 50.0),
        ("C2", "out", "gnd", 10e-9),
        ("Rload", "out", "gnd", 600.0),
    ],
    [("gnd", "sum", "o")],
    source="source",
)
"""Low-pass driven from 430 ohm, isolated by 50 ohm from a capacitive load."""

ALL = {
    "low-pass": LOW_PASS,
    "high-pass": HIGH_PASS,
    "sallen-key": SALLEN_KEY,
    "two-sections": TWO_SECTIONS,
    "ladder": LADDER,
    "loaded-low-pass": LOADED_LOW_PASS,
}
