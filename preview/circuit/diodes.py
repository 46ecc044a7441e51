"""Diodes: the kinds there are, and the junction that one is at its temperature."""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["DIODE_TYPES", "ROOM_DEGC", "DiodeModel", "Junction", "junction", "thermal_v"]

ROOM_DEGC = 25.0
"""Temperature that the figures hold at, and that a stage has which states none [degrees Celsius]."""
LEAST_SERIES_OHM = 1e-3
"""Series resistance that a diode without one is computed with [ohm]."""

_BOLTZMANN_V_PER_K = 1.380649e-23 / 1.602176634e-19
_ZERO_DEGC_K = 273.15


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
class DiodeModel:
    """The figures of a diode at 25 degrees Celsius."""

    about: str
    """What it is, in a few words."""
    saturation_a: float
    """Saturation current [A]."""
    emission: float
    """Emission coefficient: 1 for diffusion, 2 for recombination alone."""
    series_ohm: float
    """Series resistance [ohm]."""
    capacitance_farad: float
    """Capacitance of the junction at 0 V, taken as constant [F]; 0 for none."""
    gap_v: float
    """Band gap over the charge of the electron, or the barrier's height; it makes the temperature's effect [V]."""
    saturation_power: float = 3.0
    """Power of the temperature in the saturation current, before the emission coefficient."""
    breakdown_v: float = math.inf
    """Reverse voltage at ``breakdown_a`` [V]; inf where it does not break down."""
    breakdown_a: float = 5e-3
    """Current that the breakdown voltage is stated at [A]."""
    breakdown_slope_v: float = 0.05
    """Rise of the breakdown voltage for e times the current [V]: differential resistance times current."""


_LED = 40e-12

DIODE_TYPES: dict[str, DiodeModel] = {
    "signal": DiodeModel("silicon switching diode, 0.58 V at 1 mA", 2.52e-9, 1.752, 0.568, 4e-12, 1.11),
    "rectifier": DiodeModel("silicon rectifier of 1 A, 0.57 V at 1 mA", 14.1e-9, 1.984, 0.034, 26e-12, 1.11),
    "schottky": DiodeModel("small Schottky diode, 0.31 V at 1 mA", 10e-9, 1.03, 3.0, 10e-12, 0.69, 2.0),
    "germanium": DiodeModel("germanium point contact, 0.26 V at 1 mA", 2e-6, 1.6, 7.0, 1e-12, 0.67),
    "zener": DiodeModel("silicon zener, 0.64 V forward at 1 mA", 1e-12, 1.2, 1.0, 100e-12, 1.11),
    "red-led": DiodeModel("red LED, 1.66 V at 1 mA", 1.1e-17, 2.0, 8.0, _LED, 1.9),
    "yellow-led": DiodeModel("yellow LED, 1.76 V at 1 mA", 1.6e-18, 2.0, 10.0, _LED, 2.1),
    "green-led": DiodeModel("green LED of gallium phosphide, 1.81 V at 1 mA", 6.1e-19, 2.0, 12.0, _LED, 2.26),
    "blue-led": DiodeModel("blue LED, 2.67 V at 1 mA", 4.3e-24, 2.2, 15.0, _LED, 2.75),
    "white-led": DiodeModel("white LED, a blue one under phosphor", 4.3e-24, 2.2, 15.0, _LED, 2.75),
}
"""Every kind that a stage file can name. The figures are typical, common practice, and from memory; a stage file
can put others in their place."""


def thermal_v(temperature_degc: float) -> float:
    """kT/q [V]."""
    return _BOLTZMANN_V_PER_K * (temperature_degc + _ZERO_DEGC_K)


def junction(model: DiodeModel, temperature_degc: float) -> Junction:
    """The junction of a diode at its temperature.

    The saturation current goes with ``(T / T0)^(p / n) exp(Vg / n (1 / Vt0 - 1 / Vt))`` [Sze1981], which takes
    about 2 mV a kelvin off the forward voltage of silicon. The breakdown voltage is taken as constant.
    """
    n = model.emission
    hot_v, room_v = thermal_v(temperature_degc), thermal_v(ROOM_DEGC)
    growth = (hot_v / room_v) ** (model.saturation_power / n)
    growth *= math.exp(model.gap_v / n * (1.0 / room_v - 1.0 / hot_v))
    return Junction(
        saturation_a=model.saturation_a * growth,
        slope_v=n * hot_v,
        series_ohm=max(model.series_ohm, LEAST_SERIES_OHM),
        breakdown_v=model.breakdown_v,
        breakdown_a=model.breakdown_a,
        breakdown_slope_v=model.breakdown_slope_v,
    )
