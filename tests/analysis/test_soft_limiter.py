"""The soft limiter's transfer for direct current against Shockley's equation, solved by general means."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import brentq

from preview.circuit.library import find_stage
from preview.circuit.netlist import netlist
from preview.network.operating import operating_point

K_T_OVER_Q_V = 1.380649e-23 * 298.15 / 1.602176634e-19


def out_v(input_v: float) -> float:
    """Output by hand: R2 beside R3 and two diodes head to tail, fed with the input's current [V]."""
    saturation_a, slope_v, series_ohm = 2.52e-9, 1.752 * K_T_OVER_Q_V, 0.568

    def diode_a(volts: float) -> float:
        if volts <= 0:
            return -saturation_a * (1 - np.exp(volts / slope_v))
        return brentq(
            lambda i: i - saturation_a * np.expm1((volts - i * series_ohm) / slope_v),
            0,
            volts / series_ohm,
            xtol=1e-18,
            rtol=1e-13,
        )

    def pair_a(volts: float) -> float:
        return diode_a(volts) - diode_a(-volts) + 2 * volts / 1e10

    current_a = input_v / 10e3

    def excess_a(volts: float) -> float:
        """Current left over with that voltage across the pair."""
        across_v = volts + 4.7e3 * pair_a(volts)
        return across_v / 100e3 + pair_a(volts) - current_a

    pair_v = brentq(excess_a, -2, 2, xtol=1e-15)
    return -(pair_v + 4.7e3 * pair_a(pair_v))


@pytest.mark.parametrize("input_v", [1e-3, -0.03, 0.1, 0.5, -2.0, 10.0])
def test_soft_limiter_bends_as_shockley_says(input_v: float) -> None:
    stage = find_stage("soft-limiter")
    ideal = stage.with_part(replace(stage.opamps[0], type="ideal"))
    found = operating_point(netlist(ideal), input_v).volts["out"]
    assert found == pytest.approx(out_v(input_v), rel=1e-6)


def test_single_supply_stage_rests_at_half_the_supply() -> None:
    stage = find_stage("single-supply-gain")
    ideal = stage.with_part(replace(stage.opamps[0], type="ideal"))
    at_rest = operating_point(netlist(ideal)).volts
    assert at_rest["bias"] == pytest.approx(4.5, abs=1e-9)
    assert at_rest["drive"] == pytest.approx(4.5, abs=1e-9)
    assert at_rest["out"] == pytest.approx(0.0, abs=1e-9)
