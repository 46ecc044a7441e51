"""Exact response and impedances against closed forms and sympy-free hand results."""

from __future__ import annotations

import numpy as np
import pytest

from preview.circuit.netlist import Branch, Netlist, OpAmpSite
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.transfer import group_delay, input_impedance, output_impedance, response
from tests.nets import ALL, HIGH_PASS, LADDER, LOADED_LOW_PASS, LOW_PASS, SALLEN_KEY

F = np.geomspace(1.0, 1e6, 61)
S = 2j * np.pi * F


def test_inverting_low_pass_equals_its_closed_form() -> None:
    np.testing.assert_allclose(response(LOW_PASS, F), -10.0 / (1.0 + S * 1e-4), rtol=1e-12)


def test_inverting_high_pass_equals_its_closed_form() -> None:
    np.testing.assert_allclose(response(HIGH_PASS, F), -S * 1e-3 / (1.0 + S * 1e-4), rtol=1e-12)


def test_sallen_key_equals_the_handbook_transfer() -> None:
    # unity-gain Sallen-Key: 1 / (1 + s C2 (R1 + R2) + s^2 R1 R2 C1 C2), common practice
    expected = 1.0 / (1.0 + S * 1e-9 * 20e3 + S**2 * 1e8 * 2e-18)
    np.testing.assert_allclose(response(SALLEN_KEY, F), expected, rtol=1e-11)


def test_source_and_load_enter_exactly() -> None:
    stage = -(100e3 / (1.0 + S * 1e-4)) / 10430.0
    load = 1.0 / (1.0 / 600.0 + S * 10e-9)
    np.testing.assert_allclose(response(LOADED_LOW_PASS, F), stage * load / (50.0 + load), rtol=1e-11)


def test_ladder_with_two_coils_in_series_equals_its_closed_form() -> None:
    shunt = 1.0 / (S * 100e-9 + 1e-5)
    np.testing.assert_allclose(response(LADDER, F), shunt / (1e3 + S * 0.3 + shunt), rtol=1e-9)


@pytest.mark.parametrize("name", ALL)
def test_group_delay_is_the_slope_of_the_phase(name: str) -> None:
    f = np.array([20.0, 700.0, 9000.0])
    step = 1e-4
    up, down = response(ALL[name], f * (1 + step)), response(ALL[name], f * (1 - step))
    slope = -np.angle(up / down) / (2.0 * np.pi * f * 2 * step)
    np.testing.assert_allclose(group_delay(ALL[name], f), slope, rtol=1e-4, atol=1e-12)


def test_input_impedance_of_an_inverter_is_its_input_resistor() -> None:
    np.testing.assert_allclose(input_impedance(LOW_PASS, F), 10e3, rtol=1e-12)
    np.testing.assert_allclose(input_impedance(HIGH_PASS, F), 10e3 + 1.0 / (S * 10e-9), rtol=1e-9)
    np.testing.assert_allclose(input_impedance(LOADED_LOW_PASS, F), 10e3, rtol=1e-9)


def test_output_impedance_is_zero_at_an_op_amp_and_seen_through_what_follows_it() -> None:
    np.testing.assert_allclose(output_impedance(LOW_PASS, F), 0.0, atol=1e-9)
    np.testing.assert_allclose(
        output_impedance(LOADED_LOW_PASS, F), 1.0 / (1.0 / 50.0 + S * 10e-9), rtol=1e-9
    )


def test_an_op_amp_without_feedback_has_no_single_solution() -> None:
    circuit = Netlist(
        "in",
        "out",
        (
            Branch("R1", PartKind.RESISTOR, "in", "gnd", 1e3),
            Branch("R2", PartKind.RESISTOR, "out", "gnd", 1e3),
        ),
        (OpAmpSite("U1", "gnd", "in", "out", "ideal", 15.0, -15.0),),
    )
    with pytest.raises(CircuitError, match="no single solution"):
        response(circuit, [1000.0])
