"""What op-amps, fixed nodes and their capacitances add to the nodal equations."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from preview.circuit.netlist import FixedNode
from preview.circuit.opamp import OpAmpModel
from preview.network.mna import adjoint, nodal_equations, solve
from preview.network.opamps import second_pole_hz
from preview.network.transfer import input_impedance, output_impedance, response
from tests.nets import LADDER, LOW_PASS, SALLEN_KEY, TWO_SECTIONS, net, with_models

F = np.geomspace(1.0, 1e8, 81)
S = 2j * np.pi * F
FOLLOWER = net([("R1", "in", "p", 100e3), ("R2", "out", "gnd", 10e3)], [("p", "out", "out")])
INVERTER = net([("R1", "in", "m", 10e3), ("R2", "m", "out", 100e3)], [("gnd", "m", "out")])


@pytest.mark.parametrize("margin_deg", [10.0, 45.0, 60.0, 89.0])
def test_second_pole_leaves_the_margin_where_the_gain_is_one(margin_deg: float) -> None:
    model = OpAmpModel("test", gain_bandwidth_hz=3e6, phase_margin_deg=margin_deg)
    f2 = second_pole_hz(model)
    f = np.geomspace(1e4, 1e7, 200001)
    gain = 3e6 / (1j * f) / (1.0 + 1j * f / f2)
    crossover = int(np.argmin(np.abs(np.abs(gain) - 1.0)))
    assert 180.0 + np.angle(gain[crossover], deg=True) == pytest.approx(margin_deg, abs=0.01)


def test_no_second_pole_without_a_margin_below_90_degrees_or_without_a_speed() -> None:
    assert second_pole_hz(OpAmpModel("test", gain_bandwidth_hz=1e6)) == math.inf
    assert second_pole_hz(OpAmpModel("test", phase_margin_deg=45.0)) == math.inf


def test_two_poles_and_open_loop_gain_enter_exactly() -> None:
    model = OpAmpModel("test", gain_bandwidth_hz=2e6, open_loop_gain=1e4, phase_margin_deg=50.0)
    gain = 1.0 / (1e-4 + 1j * F / 2e6) / (1.0 + 1j * F / second_pole_hz(model))
    expected = -10.0 / (1.0 + 11.0 / gain)
    # 10 milliohm of output resistance: up to 9.1e-8 comes straight through 110 kohm
    np.testing.assert_allclose(response(with_models(INVERTER, model), F), expected, rtol=2e-7, atol=1e-7)


def test_input_capacitance_of_the_plus_input_is_a_pole_with_the_source() -> None:
    model = OpAmpModel("test", input_farad=10e-12, input_differential_farad=5e-12)
    # without a limit of speed the inputs are at one voltage: what lies between them carries nothing
    np.testing.assert_allclose(
        response(with_models(FOLLOWER, model), F), 1.0 / (1.0 + S * 100e3 * 10e-12), rtol=1e-6
    )


def test_input_capacitances_at_the_minus_input_raise_the_noise_gain() -> None:
    model = OpAmpModel("test", gain_bandwidth_hz=5e6, input_farad=8e-12, input_differential_farad=4e-12)
    noise_gain = 11.0 + S * 100e3 * 12e-12
    expected = -10.0 / (1.0 + noise_gain * 1j * F / 5e6)
    np.testing.assert_allclose(response(with_models(INVERTER, model), F), expected, rtol=2e-7, atol=1e-7)


@pytest.mark.parametrize(
    "circuit", [LOW_PASS, SALLEN_KEY, TWO_SECTIONS], ids=["low-pass", "sallen-key", "two"]
)
def test_without_its_limit_of_speed_a_type_is_an_ideal_op_amp(circuit) -> None:
    model = OpAmpModel(
        "test",
        gain_bandwidth_hz=1e6,
        open_loop_gain=1e5,
        output_resistance_ohm=100.0,
        phase_margin_deg=60.0,
        input_farad=5e-12,
    )
    fast = with_models(circuit, model.without(["speed"]))
    f = F[F < 1e6]
    np.testing.assert_allclose(response(fast, f), response(circuit, f), rtol=1e-9)
    np.testing.assert_allclose(input_impedance(fast, f), input_impedance(circuit, f), rtol=1e-9)
    np.testing.assert_allclose(np.abs(output_impedance(fast, f)), 0.0, atol=1e-9)
    assert np.abs(response(with_models(circuit, model), f) - response(circuit, f)).max() > 1e-3


def test_a_fixed_node_is_held_at_0_hz_and_is_gnd_for_a_signal() -> None:
    circuit = replace(
        net([("R1", "in", "out", 1e3), ("R2", "out", "vcc", 1e3)], []), fixed=(FixedNode("V1", "vcc", 9.0),)
    )
    equations = nodal_equations(circuit)
    at = equations.nodes
    still = solve(equations, np.zeros(1, dtype=complex), equations.drive * 2.0 + equations.constant)[0].real
    assert still[at["vcc"]] == pytest.approx(9.0)
    assert still[at["out"]] == pytest.approx(5.5)
    signal = solve(equations, np.array([2j * np.pi * 1e3]))[0]
    assert signal[at["vcc"]] == 0.0
    assert signal[at["out"]] == pytest.approx(0.5)


def test_the_adjoint_is_the_way_to_the_output_from_everywhere() -> None:
    model = OpAmpModel("test", gain_bandwidth_hz=1e6, output_resistance_ohm=50.0, phase_margin_deg=60.0)
    for circuit in (with_models(TWO_SECTIONS, model), LADDER):
        equations = nodal_equations(circuit)
        s = np.array([2j * np.pi * 3456.0])
        pick = equations.incidence("out", "gnd")
        ways = adjoint(equations, s, pick)[0]
        for row in range(len(pick)):
            driven = solve(equations, s, np.eye(len(pick))[row])[0]
            assert ways[row] == pytest.approx(driven @ pick, rel=1e-9, abs=1e-15)
