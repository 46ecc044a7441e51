"""The netlist: a stage with its source, load and supply, checked, ready for the nodal equations."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace

from preview.circuit.checks import check
from preview.circuit.limits import check_value
from preview.circuit.nodes import GND, IN, LOAD_DESIGNATOR, OUT, SOURCE_DESIGNATOR, SOURCE_NODE
from preview.circuit.opamp import IDEAL, PERFECT, Limit, OpAmpModel
from preview.circuit.opamp_library import find_opamp
from preview.circuit.parts import OpAmp, PartKind, Stage, Supply
from preview.errors import CircuitError, UnknownNameError

__all__ = [
    "GND",
    "IN",
    "LOAD_DESIGNATOR",
    "OUT",
    "SOURCE_DESIGNATOR",
    "SOURCE_NODE",
    "Branch",
    "Charge",
    "FixedNode",
    "Junction",
    "Netlist",
    "OpAmpSite",
    "Port",
    "check_supply",
    "netlist",
]

HIGHEST_RAIL_V = 1000.0
"""A rail beyond this is taken for a slip [V]."""


@dataclass(frozen=True, slots=True)
class Branch:
    """A two-terminal element between two nodes."""

    designator: str
    """R1, C2 ...; the source and load resistances are called ``Rsource`` and ``Rload``."""
    kind: PartKind
    """Resistor, capacitor or inductor."""
    a: str
    """First node."""
    b: str
    """Second node."""
    value: float
    """Ohm, farad or henry."""


@dataclass(frozen=True, slots=True)
class OpAmpSite:
    """An op-amp in its place with the limits that hold for it there."""

    designator: str
    """U1, U2 ..."""
    plus: str
    """Node of the non-inverting input."""
    minus: str
    """Node of the inverting input."""
    out: str
    """Node of the output."""
    type: str
    """Its type's name."""
    high_v: float
    """Highest output voltage, the positive rail less the type's swing [V]; inf for ``perfect``."""
    low_v: float
    """Lowest output voltage, the negative rail plus the type's swing [V]; -inf for ``perfect``."""
    model: OpAmpModel = IDEAL
    """The figures of its type."""


@dataclass(frozen=True, slots=True)
class Junction:
    """Current of a diode by its voltage, series resistance included.

    Forward ``i = Is (exp((v - i Rs) / Vt) - 1)`` [Shockley1949]; with a breakdown also, against it,
    ``i = Iz exp((-v - Vz') / Vz_slope)`` through the same resistance, so that it carries ``Iz`` at ``breakdown_v``.
    """

    saturation_a: float
    """Is [A]."""
    slope_v: float
    """Vt, emission coefficient times kT/q at its temperature [V]."""
    series_ohm: float
    """Rs [ohm], above zero."""
    breakdown_v: float = math.inf
    """Reverse voltage at ``breakdown_a`` [V]; inf where it does not break down."""
    breakdown_a: float = 5e-3
    """Iz [A]."""
    breakdown_slope_v: float = 0.05
    """Vz_slope [V]."""


@dataclass(frozen=True, slots=True)
class Charge:
    """What a class 2 dielectric adds to a linear capacitor: charge ``C (V0 atan(v / V0) - v)``.

    Its small-signal capacitance is ``C / (1 + (v / V0)^2)``, half at ``half_v``.
    """

    farad: float
    """C, capacitance without a voltage [F]; the linear capacitor itself stands among the branches."""
    half_v: float
    """V0 [V]."""


@dataclass(frozen=True, slots=True)
class Port:
    """A nonlinear two-terminal element; the current flows from ``a`` to ``b``."""

    designator: str
    """D1, C3 ..."""
    a: str
    """Anode, or first node."""
    b: str
    """Cathode, or second node."""
    law: Junction | Charge
    """Its current or its charge by its voltage."""


@dataclass(frozen=True, slots=True)
class FixedNode:
    """A node held at a constant voltage against gnd."""

    designator: str
    """V1 ..."""
    node: str
    """The node."""
    volts: float
    """Its voltage [V]."""


@dataclass(frozen=True, slots=True)
class Netlist:
    """A circuit ready to be solved."""

    input_node: str
    """Node that the ideal signal source drives: ``in``, or ``source`` behind a source resistance."""
    output_node: str
    """Node that is listened to (``out``)."""
    branches: tuple[Branch, ...]
    """Every resistor, capacitor and inductor, source and load included."""
    opamps: tuple[OpAmpSite, ...]
    """Every op-amp."""
    ports: tuple[Port, ...] = ()
    """Every diode, and the nonlinear part of every class 2 capacitor."""
    fixed: tuple[FixedNode, ...] = ()
    """Every node held at a constant voltage."""

    @property
    def nodes(self) -> tuple[str, ...]:
        """Every node but gnd, in order of first mention; the input node first."""
        names: dict[str, None] = {self.input_node: None}
        for branch in self.branches:
            names[branch.a] = None
            names[branch.b] = None
        for opamp in self.opamps:
            names[opamp.plus] = None
            names[opamp.minus] = None
            names[opamp.out] = None
        for port in self.ports:
            names[port.a] = None
            names[port.b] = None
        for fixed in self.fixed:
            names[fixed.node] = None
        names.pop(GND, None)
        return tuple(names)

    @property
    def values(self) -> dict[str, float]:
        """Value of each branch by designator."""
        return {b.designator: b.value for b in self.branches}

    def with_values(self, values: Mapping[str, float]) -> Netlist:
        """The same netlist with other values; designators not named keep theirs."""
        return replace(
            self,
            branches=tuple(
                replace(b, value=values[b.designator]) if b.designator in values else b for b in self.branches
            ),
        )


def netlist(
    stage: Stage,
    *,
    supply: Supply | None = None,
    source_ohm: float = 0.0,
    load_ohm: float | None = None,
    without: Collection[Limit] = (),
) -> Netlist:
    """The checked netlist of a stage.

    Parameters
    ----------
    supply : Supply, optional
        Rails that replace the stage's own.
    source_ohm : float
        Resistance of the source [ohm]; 0 for an ideal one.
    load_ohm : float, optional
        Resistance from out to gnd [ohm]; None for no load.
    without : collection of Limit
        Limits taken away from every op-amp, to hear what they do.

    Raises
    ------
    CircuitError
        The circuit cannot be computed: see ``preview.circuit.checks``.
    """
    where = f"stage {stage.name}"
    rails = supply or stage.supply
    check_supply(rails, where)
    branches = []
    for part in stage.valued:
        check_value(part.kind, part.value, f"{where}, {part.designator}")
        branches.append(Branch(part.designator, part.kind, *part.nodes, part.value))
    if source_ohm != 0.0:
        check_value(PartKind.RESISTOR, source_ohm, "source resistance")
        branches.insert(0, Branch(SOURCE_DESIGNATOR, PartKind.RESISTOR, SOURCE_NODE, IN, source_ohm))
    if load_ohm is not None:
        check_value(PartKind.RESISTOR, load_ohm, "load resistance")
        branches.append(Branch(LOAD_DESIGNATOR, PartKind.RESISTOR, OUT, GND, load_ohm))
    circuit = Netlist(
        input_node=SOURCE_NODE if source_ohm != 0.0 else IN,
        output_node=OUT,
        branches=tuple(branches),
        opamps=tuple(_site(opamp, rails, where, without) for opamp in stage.opamps),
    )
    check(circuit, where)
    return circuit


def check_supply(supply: Supply, where: str) -> None:
    """Raise CircuitError, its message starting with ``where``, for rails that no stage can run on."""
    high_v, low_v = supply.positive_v, supply.negative_v
    found = f"{where}: rails of {high_v:g} V and {low_v:g} V"
    if not (math.isfinite(high_v) and math.isfinite(low_v)):
        raise CircuitError(f"{found}: not finite numbers", "such as +15 V and -15 V")
    if high_v <= low_v:
        raise CircuitError(
            f"{found}: the positive rail is not above the negative rail", "such as +15 V and -15 V"
        )
    if high_v < 0.0 or low_v > 0.0:
        raise CircuitError(f"{found}: both are on one side of gnd", "such as +15 V and -15 V, or 9 V and 0 V")
    if max(high_v, -low_v) > HIGHEST_RAIL_V:
        raise CircuitError(f"{found}: beyond 1 kV", "such as +15 V and -15 V")


def _site(opamp: OpAmp, rails: Supply, where: str, without: Collection[Limit]) -> OpAmpSite:
    """The op-amp with the limits its type has on these rails."""
    place = f"{where}, {opamp.designator}"
    try:
        found = find_opamp(opamp.type)
    except UnknownNameError as error:
        raise UnknownNameError(f"{place}: {error.message}", error.hint) from error
    model = found.without(without)
    high_v, low_v = math.inf, -math.inf
    if found is not PERFECT:
        high_v, low_v = rails.positive_v, rails.negative_v
    if model.real:
        _check_type_supply(model, rails, place)
        high_v, low_v = high_v - model.swing_high_v, low_v + model.swing_low_v
        if high_v <= low_v:
            raise CircuitError(
                f"{place}: {model.type} swings to {model.swing_high_v:g} V below the positive and "
                f"{model.swing_low_v:g} V above the negative rail, which leaves nothing of {_said(rails)}",
                "a larger supply, or a type that swings nearer to its rails",
            )
    return OpAmpSite(
        designator=opamp.designator,
        plus=opamp.plus,
        minus=opamp.minus,
        out=opamp.out,
        type=model.type,
        high_v=high_v,
        low_v=low_v,
        model=model,
    )


def _check_type_supply(model: OpAmpModel, rails: Supply, place: str) -> None:
    """Raise CircuitError for rails that are too near or too far apart for the type."""
    total_v = rails.positive_v - rails.negative_v
    if model.supply_min_v <= total_v <= model.supply_max_v:
        return
    field = "supply_min_v" if total_v < model.supply_min_v else "supply_max_v"
    assumed = " (assumed of its class, its file gives none)" if field in model.assumed else ""
    raise CircuitError(
        f"{place}: a supply of {_said(rails)}, {total_v:g} V in all, is outside the range of {model.type}, "
        f"{model.supply_min_v:g} V to {model.supply_max_v:g} V{assumed}",
        "another supply, or another type",
    )


def _said(rails: Supply) -> str:
    """The rails in words."""
    return f"{rails.positive_v:g} V and {rails.negative_v:g} V"
