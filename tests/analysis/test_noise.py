"""The noise budget of a stage."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.analysis.noise import noise_budget
from preview.circuit.netlist import Netlist
from preview.circuit.opamp_library import find_opamp
from preview.network.noise import OutputNoise
from preview.values.levels import dbu_from_vrms
from tests.nets import LOW_PASS, net, with_models

CIRCUIT = with_models(LOW_PASS, find_opamp("TL072"))


def test_shares_are_sorted_and_make_the_whole() -> None:
    budget = noise_budget(CIRCUIT, [1e3])
    shares = budget.shares
    assert [s.vrms for s in shares] == sorted((s.vrms for s in shares), reverse=True)
    assert sum(s.power_ratio for s in shares) == pytest.approx(1.0)
    assert math.sqrt(sum(s.vrms**2 for s in shares)) == pytest.approx(budget.total.output_vrms)
    assert (shares[0].designator, shares[0].kind) == ("U1", "voltage")


def test_the_object_has_units_in_its_keys_and_the_exact_figures() -> None:
    f = np.array([20.0, 1e3])
    budget = noise_budget(CIRCUIT, f)
    body = budget.as_object()
    exact = OutputNoise(CIRCUIT)
    assert body["noise_total_vrms"] == exact.total().output_vrms
    assert body["noise_total_dbu"] == dbu_from_vrms(exact.total().output_vrms)
    assert body["noise_band_hz"] == [20.0, 20e3]
    assert body["noise_temperature_k"] == 300.0
    np.testing.assert_array_equal(budget.columns["noise_v_rthz"], exact.spectrum(f).output_v_rthz)
    np.testing.assert_array_equal(budget.columns["noise_input_v_rthz"], exact.spectrum(f).input_v_rthz)


def test_the_band_of_the_total_can_be_another() -> None:
    assert noise_budget(CIRCUIT, [1e3], band_hz=(1.0, 1e6)).total.band_hz == (1.0, 1e6)


def many_resistors(count: int) -> Netlist:
    parts = [(f"R{i}", "out", "gnd", 1e3) for i in range(count)]
    return net([*parts, ("Rin", "in", "out", 1e3)], [])


def test_the_lines_name_the_largest_and_sum_up_the_rest() -> None:
    lines = noise_budget(many_resistors(20), [1e3]).as_lines()
    assert lines[0].startswith("noise 20 Hz to 20 kHz: ")
    assert "dBu" in lines[0]
    assert len(lines) == 1 + 12 + 1
    assert "9 more" in lines[-1]
    assert "42.9 %" in lines[-1]  # 9 of 21


def test_what_is_next_to_nothing_has_no_line_of_its_own() -> None:
    lines = noise_budget(CIRCUIT, [1e3]).as_lines()
    assert any("U1 voltage" in line for line in lines)
    assert not any("current" in line for line in lines)
    assert "1 more" in lines[-1]


def test_a_silent_stage_has_a_budget() -> None:
    budget = noise_budget(net([("R1", "out", "gnd", 1e4)], [("in", "out", "out")]), [1e3])
    assert budget.total.output_vrms == 0.0
    assert all(share.power_ratio == 0.0 for share in budget.shares)
    assert budget.as_lines()[0].startswith("noise 20 Hz to 20 kHz: 0 V rms, -inf dBu")
