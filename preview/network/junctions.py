"""A diode's current by its voltage, both ways, and what it looks like to a small signal.

The law (``circuit.netlist.Junction``) gives the current by the voltage of the junction alone, behind its series
resistance. With one exponential that is solved in closed form by the Wright omega function
``omega + ln omega = x`` [CorlessJeffrey2002]; the other exponential is then so small that a few Newton steps
take it along.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Junction

__all__ = ["Bias", "bias", "volts_along"]

Real = NDArray[np.float64]

_POLISH = 6
"""Newton steps after the closed form."""


@dataclass(frozen=True, slots=True)
class Bias:
    """A diode at some voltage."""

    current_a: float
    """Through it, from anode to cathode [A]."""
    conductance_s: float
    """Slope of its current by the voltage across all of it [S]."""
    junction_s: float
    """Slope by the voltage of the junction alone, without its series resistance [S]."""
    crossing_a: float
    """Sum of the currents that cross the junction either way, whose shot noise adds [A]."""


def bias(law: Junction, volts: float) -> Bias:
    """Current and slopes at a voltage across junction and series resistance [V]."""
    from scipy.special import wrightomega

    slope_v, ohm = law.slope_v, law.series_ohm
    saturation_v = law.saturation_a * ohm
    if volts >= 0.0 or math.isinf(law.breakdown_v):
        reached_v = volts + saturation_v
        x = reached_v / slope_v + math.log(saturation_v / slope_v)
        junction_v = reached_v - slope_v * float(wrightomega(x))
    else:
        x = (-volts - _knee_v(law)) / law.breakdown_slope_v
        x += math.log(law.breakdown_a * ohm / law.breakdown_slope_v)
        junction_v = volts + law.breakdown_slope_v * float(wrightomega(x))
    for _ in range(_POLISH):
        forward_a, broken_a = _either_way(law, junction_v)
        current_a = forward_a - law.saturation_a - broken_a
        junction_s = forward_a / slope_v + broken_a / law.breakdown_slope_v
        junction_v -= (junction_v + ohm * current_a - volts) / (1.0 + ohm * junction_s)
    forward_a, broken_a = _either_way(law, junction_v)
    junction_s = forward_a / slope_v + broken_a / law.breakdown_slope_v
    return Bias(
        current_a=forward_a - law.saturation_a - broken_a,
        conductance_s=junction_s / (1.0 + ohm * junction_s),
        junction_s=junction_s,
        crossing_a=forward_a + law.saturation_a + broken_a,
    )


def _knee_v(law: Junction) -> float:
    """Reverse voltage of the junction alone at ``breakdown_a`` [V]."""
    return law.breakdown_v - law.breakdown_a * law.series_ohm


def _either_way(law: Junction, junction_v: float) -> tuple[float, float]:
    """Forward current (without its saturation part) and breakdown current at a junction voltage [A]."""
    forward_a = law.saturation_a * math.exp(min(junction_v / law.slope_v, 700.0))
    if math.isinf(law.breakdown_v):
        return forward_a, 0.0
    beyond = (-junction_v - _knee_v(law)) / law.breakdown_slope_v
    return forward_a, law.breakdown_a * math.exp(min(beyond, 700.0))


def volts_along(law: Junction, from_v: float, to_v: float) -> float:
    """Where to go from one voltage when a straight line through it pointed to another [V].

    Along an exponential the current that the line foretold is a better guide than its voltage: where that is
    less far, the voltage is returned at which the diode carries it (but at least one ``slope_v`` further). On the
    way out of conduction it stops at 0 V.
    """
    here = bias(law, from_v)
    foretold_a = here.current_a + here.conductance_s * (to_v - from_v)
    if to_v > from_v:
        if from_v < 0.0 < to_v and here.current_a < -2.0 * law.saturation_a:
            return 0.0
        if to_v > 0.0:
            carried_a = max(foretold_a, law.saturation_a)
            carrying_v = law.slope_v * math.log1p(carried_a / law.saturation_a) + law.series_ohm * carried_a
            return min(to_v, max(carrying_v, from_v + law.slope_v))
        return to_v
    if to_v < 0.0 < from_v and here.current_a > 2.0 * law.saturation_a:
        return 0.0
    if to_v < 0.0 and math.isfinite(law.breakdown_v):
        carried_a = max(-foretold_a, law.saturation_a)
        beyond_v = law.breakdown_slope_v * math.log(carried_a / law.breakdown_a)
        carrying_v = -(_knee_v(law) + beyond_v + law.series_ohm * carried_a)
        return max(to_v, min(carrying_v, from_v - law.breakdown_slope_v))
    return to_v
