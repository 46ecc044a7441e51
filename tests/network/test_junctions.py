"""The law of a diode solved in closed form, against bracketed roots."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import brentq

from preview.circuit.netlist import Junction
from preview.network.junctions import bias, volts_along

SIGNAL = Junction(saturation_a=2.52e-9, slope_v=1.752 * 0.025852, series_ohm=0.568)
ZENER = Junction(saturation_a=1e-14, slope_v=0.026, series_ohm=4.0, breakdown_v=5.1)
LED = Junction(saturation_a=1e-20, slope_v=0.05, series_ohm=3.0)


def law_a(law: Junction, junction_v: float) -> float:
    """The law as its definition has it, of the junction alone."""
    current_a = law.saturation_a * (math.exp(junction_v / law.slope_v) - 1.0)
    if math.isfinite(law.breakdown_v):
        knee_v = law.breakdown_v - law.breakdown_a * law.series_ohm
        current_a -= law.breakdown_a * math.exp((-junction_v - knee_v) / law.breakdown_slope_v)
    return current_a


def bracketed_a(law: Junction, volts: float) -> float:
    """The current at a voltage by bisection on the junction's voltage."""

    def off(junction_v: float) -> float:
        return junction_v + law.series_ohm * law_a(law, junction_v) - volts

    low = max(min(volts, 0.0) - 1.0, -law.breakdown_v - 3.0)
    junction_v = brentq(off, low, min(max(volts, 0.0), 100 * law.slope_v) + 1e-3, xtol=1e-16, rtol=1e-15)
    return law_a(law, junction_v)


@pytest.mark.parametrize("law", [SIGNAL, ZENER, LED], ids=["signal", "zener", "led"])
@pytest.mark.parametrize("volts", [-200.0, -5.6, -5.1, -1.0, -1e-3, 1e-6, 0.1, 0.6, 0.9, 2.5, 20.0])
def test_current_is_the_root_of_the_law(law: Junction, volts: float) -> None:
    assert bias(law, volts).current_a == pytest.approx(bracketed_a(law, volts), rel=1e-9, abs=1e-30)


def test_random_laws_and_voltages() -> None:
    rng = np.random.default_rng(1)
    for _ in range(500):
        law = Junction(
            saturation_a=10.0 ** rng.uniform(-20, -6),
            slope_v=rng.uniform(0.02, 0.08),
            series_ohm=10.0 ** rng.uniform(-3, 4),
            breakdown_v=rng.choice([math.inf, rng.uniform(2.0, 100.0)]),
            breakdown_slope_v=rng.uniform(0.01, 0.1),
            breakdown_a=1e-4,
        )
        volts = rng.choice([-1.0, 1.0]) * 10.0 ** rng.uniform(-4, 2.5)
        assert bias(law, volts).current_a == pytest.approx(bracketed_a(law, volts), rel=1e-7, abs=1e-28)


def test_no_voltage_no_current() -> None:
    for law in (SIGNAL, LED):
        assert bias(law, 0.0).current_a == pytest.approx(0.0, abs=1e-14 * law.saturation_a)


def test_a_zener_carries_its_test_current_at_its_voltage() -> None:
    for breakdown_v in (2.4, 5.1, 12.0, 100.0):
        law = replace(ZENER, breakdown_v=breakdown_v)
        assert bias(law, -breakdown_v).current_a == pytest.approx(-5e-3, rel=1e-9)


@pytest.mark.parametrize("law", [SIGNAL, ZENER, LED], ids=["signal", "zener", "led"])
@pytest.mark.parametrize("volts", [-5.2, 0.0, 0.5, 0.8, 3.0])
def test_conductance_is_the_slope_of_the_current(law: Junction, volts: float) -> None:
    step = 1e-5
    slope_s = (bias(law, volts + step).current_a - bias(law, volts - step).current_a) / (2 * step)
    at = bias(law, volts)
    assert at.conductance_s == pytest.approx(slope_s, rel=1e-5, abs=1e-19)
    # junction and series resistance in series
    assert at.conductance_s * (1.0 + at.junction_s * law.series_ohm) == pytest.approx(
        at.junction_s, rel=1e-12
    )


@pytest.mark.parametrize("law", [SIGNAL, ZENER, LED], ids=["signal", "zener", "led"])
def test_a_step_is_taken_by_the_current_it_foretold_and_never_past_the_voltage(law: Junction) -> None:
    rng = np.random.default_rng(2)
    for from_v, to_v in rng.uniform(-8.0, 2.0, (300, 2)):
        reached_v = volts_along(law, from_v, to_v)
        assert min(from_v, to_v) <= reached_v <= max(from_v, to_v)
        at, here = bias(law, reached_v), bias(law, from_v)
        foretold_a = here.current_a + here.conductance_s * (to_v - from_v)
        if 0.0 < from_v + law.slope_v < reached_v < to_v:
            assert at.current_a <= max(foretold_a, law.saturation_a) * (1 + 1e-6)
        assert reached_v != from_v or from_v == to_v
