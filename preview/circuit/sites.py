"""Rails, and op-amps in their places on them."""

from __future__ import annotations

import math
from collections.abc import Collection

from preview.circuit.elements import OpAmpSite
from preview.circuit.opamp import PERFECT, Limit, OpAmpModel
from preview.circuit.opamp_library import find_opamp
from preview.circuit.parts import OpAmp, Supply
from preview.errors import CircuitError, UnknownNameError

__all__ = ["check_supply", "opamp_site"]

HIGHEST_RAIL_V = 1000.0
"""A rail beyond this is taken for a slip [V]."""


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


def opamp_site(opamp: OpAmp, rails: Supply, where: str, without: Collection[Limit] = ()) -> OpAmpSite:
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
        input_high_v=rails.positive_v - model.input_high_v,
        input_low_v=rails.negative_v + model.input_low_v,
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
