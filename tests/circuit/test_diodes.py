"""Junctions: Shockley's equation, and what the temperature does."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from scipy import constants
from scipy.optimize import brentq

from preview.circuit.diodes import DIODE_TYPES, Junction, junction, thermal_v


def forward_v(law: Junction, current_a: float) -> float:
    """Shockley's equation solved for the voltage, plus the drop across the series resistance."""
    return law.slope_v * math.log1p(current_a / law.saturation_a) + law.series_ohm * current_a


def test_thermal_voltage_at_25_degrees():
    """25.69 mV, the figure of every semiconductor text, and k T / q with scipy's constants."""
    assert 1e3 * thermal_v(25.0) == pytest.approx(25.69, abs=0.005)
    assert thermal_v(25.0) == pytest.approx(constants.k * 298.15 / constants.e, rel=1e-12)


@pytest.mark.parametrize(
    ("name", "volts"),
    [
        ("signal", 0.581),
        ("rectifier", 0.569),
        ("schottky", 0.308),
        ("germanium", 0.263),
        ("zener", 0.640),
        ("red-led", 1.660),
        ("yellow-led", 1.761),
        ("green-led", 1.812),
        ("blue-led", 2.666),
        ("white-led", 2.666),
    ],
)
def test_forward_voltage_at_1_ma(name: str, volts: float) -> None:
    """Typical figures of the trade, from memory; the equation is solved here by bisection on the current."""
    law = junction(DIODE_TYPES[name], 25.0)

    def excess_a(v: float) -> float:
        return law.saturation_a * math.expm1((v - 1e-3 * law.series_ohm) / law.slope_v) - 1e-3

    found_v = brentq(excess_a, 0.0, 5.0, xtol=1e-12)
    assert found_v == pytest.approx(volts, abs=0.0005)
    assert found_v == pytest.approx(forward_v(law, 1e-3), rel=1e-9)


def test_every_kind_says_its_forward_voltage() -> None:
    for model in DIODE_TYPES.values():
        if " V " in model.about:
            said = float(model.about.partition(" V ")[0].split()[-1])
            assert said == pytest.approx(forward_v(junction(model, 25.0), 1e-3), abs=0.005)


@pytest.mark.parametrize("name", ["signal", "rectifier", "zener"])
def test_silicon_loses_about_2_mv_a_kelvin(name: str) -> None:
    """The rule of every semiconductor text: -2 mV/K near room temperature; -1.5 to -2.5 is taken for about."""
    model = DIODE_TYPES[name]
    drop = forward_v(junction(model, 35.0), 1e-3) - forward_v(junction(model, 25.0), 1e-3)
    assert -2.5e-3 < drop / 10.0 < -1.5e-3


def test_temperature_coefficient_is_the_closed_form() -> None:
    """dV/dT = (V - Vg - p Vt) / T at a constant current far above Is (Sze, 2nd ed.; from memory), without Rs."""
    model = replace(DIODE_TYPES["signal"], series_ohm=0.0)
    volts = forward_v(junction(model, 25.0), 1e-3)
    slope = (forward_v(junction(model, 25.5), 1e-3) - forward_v(junction(model, 24.5), 1e-3)) / 1.0
    assert slope == pytest.approx(
        (volts - model.gap_v - model.saturation_power * thermal_v(25.0)) / 298.15, rel=1e-3
    )


def test_a_diode_without_series_resistance_has_a_milliohm() -> None:
    assert junction(replace(DIODE_TYPES["signal"], series_ohm=0.0), 25.0).series_ohm == 1e-3


def test_breakdown_figures_are_handed_on() -> None:
    model = replace(DIODE_TYPES["zener"], breakdown_v=5.1, breakdown_a=1e-3, breakdown_slope_v=0.2)
    law = junction(model, 60.0)
    assert (law.breakdown_v, law.breakdown_a, law.breakdown_slope_v) == (5.1, 1e-3, 0.2)
    assert math.isinf(junction(DIODE_TYPES["signal"], 25.0).breakdown_v)
