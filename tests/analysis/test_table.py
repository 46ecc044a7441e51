"""The response table: where the circuit rests, and further columns."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from preview.analysis.response import analyse, heard
from preview.analysis.table import second_order_sections, tabulate
from preview.circuit.netlist import FixedNode, Junction, Netlist, Port
from preview.circuit.opamp import PERFECT, OpAmpModel
from preview.network.operating import operating_point
from preview.values.quality import Quality
from tests.nets import LOW_PASS, net, with_models

SIGNAL = Junction(saturation_a=2.52e-9, slope_v=0.0453, series_ohm=0.568)


def soft_limiter() -> Netlist:
    """Inverting gain of 10 with two diodes across the feedback, on a bias of 4.5 V."""
    parts = [
        ("C1", "in", "a", 1e-6),
        ("R1", "a", "m", 10e3),
        ("R2", "m", "o", 100e3),
        ("R3", "o", "out", 1e3),
        ("R4", "out", "gnd", 100e3),
    ]
    circuit = net(parts, [("bias", "m", "o")])
    return replace(
        circuit,
        ports=(Port("D1", "m", "o", SIGNAL), Port("D2", "o", "m", SIGNAL)),
        fixed=(FixedNode("V1", "bias", 4.5),),
    )


def test_a_small_signal_passes_a_soft_limiter_by_the_slope_of_its_diodes() -> None:
    r_d = SIGNAL.series_ohm + SIGNAL.slope_v / SIGNAL.saturation_a
    feedback_ohm = 1.0 / (1e-5 + 2.0 / r_d)
    table = tabulate(soft_limiter(), [1e3])
    expected = feedback_ohm / abs(10e3 + 1.0 / (2j * np.pi * 1e3 * 1e-6)) * 100.0 / 101.0
    assert table.columns["gain_db"][0] == pytest.approx(20.0 * math.log10(expected), abs=1e-6)
    assert table.dc_output_v == pytest.approx(4.5 * 100.0 / 101.0)
    assert analyse(soft_limiter(), [1e3]).corners_hz == pytest.approx([1 / (2 * np.pi * 0.01)], rel=1e-4)


def test_the_running_computation_of_small_signals_is_that_of_the_circuit_around_its_rest() -> None:
    exact = analyse(soft_limiter(), [20.0, 1e3, 15e3]).gain
    found = heard(soft_limiter(), 48e3, Quality.STANDARD, [20.0, 1e3, 15e3])
    np.testing.assert_allclose(np.abs(found), np.abs(exact), rtol=1e-3)
    assert len(second_order_sections(soft_limiter(), 48e3)) == 1


def test_offset_and_bias_at_the_output() -> None:
    model = OpAmpModel("test", offset_v=2e-3, bias_a=50e-9)
    table = tabulate(with_models(LOW_PASS, model), [1e3])
    assert table.dc_output_v == pytest.approx(11 * 2e-3 + 50e-9 * 100e3, rel=1e-5)
    assert table.as_object()["dc_output_v"] == table.dc_output_v
    assert table.as_object()["dc_limiting"] == {}
    assert table.as_lines()[1] == "without a signal 27.0 mV at the output"


def test_an_output_that_rests_at_its_limit_is_named() -> None:
    table = tabulate(with_models(LOW_PASS, OpAmpModel("test", offset_v=-2.0)), [1e3])
    assert table.dc_limiting == {"U1": "low"}
    assert (
        table.as_lines()[1] == "without a signal -13.5 V at the output; U1 rests at its lowest output voltage"
    )


def test_what_comes_to_no_rest_is_said() -> None:
    circuit = net([("R1", "in", "m", 1e4), ("C1", "m", "out", 1e-9)], [("gnd", "m", "out")], rail_v=math.inf)
    drifting = with_models(circuit, replace(PERFECT, bias_a=1e-9))
    table = tabulate(drifting, [1e3])
    assert math.isnan(table.dc_output_v)
    assert table.as_lines()[1] == "without a signal the output comes to no rest"


def test_further_columns_stand_behind_the_others() -> None:
    table = tabulate(LOW_PASS, [1e3, 2e3]).with_columns({"noise_v_rthz": np.array([1e-8, 2e-8])})
    assert table.as_csv().splitlines()[0].endswith("output_impedance_deg,noise_v_rthz")
    assert table.as_lines()[2].split()[-1] == "noise"
    assert table.as_lines()[4].endswith("20.0 nV/√Hz")


def test_the_point_of_rest_is_that_of_the_network() -> None:
    assert tabulate(soft_limiter(), [1e3]).dc_output_v == operating_point(soft_limiter()).volts["out"]
