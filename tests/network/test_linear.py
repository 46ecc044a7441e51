"""The linear system of a circuit: the same response as the nodal equations, poles and zeros in closed form."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy.signal

from preview.circuit.library import find_stage, open_stages, stage_names, with_overrides
from preview.circuit.netlist import netlist
from preview.errors import CircuitError
from preview.network.linear import Linear, linear
from preview.network.transfer import response
from tests.nets import ALL, net

F = np.geomspace(1.0, 10e6, 36)


def sorted_hz(s_rad: np.ndarray) -> np.ndarray:
    return np.sort_complex(s_rad) / (2 * np.pi)


@pytest.mark.parametrize("name", ALL)
def test_it_has_the_response_of_the_nodal_equations(name: str) -> None:
    np.testing.assert_allclose(linear(ALL[name]).response(2j * np.pi * F), response(ALL[name], F), rtol=1e-9)


@pytest.mark.parametrize("name", stage_names())
@pytest.mark.parametrize("kind", ["ideal", "TL072", "LM358"])
def test_so_it_has_for_every_stage_with_ideal_and_real_op_amps(name: str, kind: str) -> None:
    stage = find_stage(name)
    if stage.opamps:
        stage = with_overrides(stage, {}, {None: kind})[0]
    circuit = netlist(stage, source_ohm=600.0, load_ohm=10e3)
    exact = response(circuit, F)
    difference = np.abs(linear(circuit).response(2j * np.pi * F) - exact)
    assert difference.max() <= 1e-8 * np.abs(exact).max()


def test_an_ideal_op_amp_beside_a_real_one_stays_ideal() -> None:
    stage = open_stages(["inverting-low-pass", "inverting-low-pass"])
    circuit = netlist(with_overrides(stage, {}, {"1.U1": "LM358"})[0])
    np.testing.assert_allclose(linear(circuit).response(2j * np.pi * F), response(circuit, F), rtol=1e-9)


def test_poles_and_zeros_of_a_twin_t() -> None:
    # symmetrical twin-T with nothing connected: zeros at +-j / RC, poles at -(2 +- sqrt 3) / RC (the third cancels)
    rc = 10e3 * 10e-9
    circuit = net(
        [
            ("R1", "in", "a", 10e3),
            ("R2", "a", "out", 10e3),
            ("C3", "a", "gnd", 20e-9),
            ("C1", "in", "b", 10e-9),
            ("C2", "b", "out", 10e-9),
            ("R3", "b", "gnd", 5e3),
        ],
        [],
    )
    poles, zeros = linear(circuit).poles_and_zeros()
    np.testing.assert_allclose(
        sorted_hz(poles), -np.array([2 + np.sqrt(3), 2 - np.sqrt(3)]) / rc / (2 * np.pi), rtol=1e-6
    )
    np.testing.assert_allclose(sorted_hz(zeros) * 2 * np.pi * rc, [-1j, 1j], atol=1e-6)


def test_an_all_pass_has_its_zero_mirrored() -> None:
    # Gayakwad, Op-Amps and Linear Integrated Circuits, Example 7.11: phi = -2 atan(2 pi f R C)
    circuit = net(
        [
            ("R1", "in", "m", 10e3),
            ("R2", "m", "out", 10e3),
            ("R3", "in", "p", 15.9e3),
            ("C1", "p", "gnd", 10e-9),
        ],
        [("p", "m", "out")],
    )
    poles, zeros = linear(circuit).poles_and_zeros()
    np.testing.assert_allclose(poles, [-1 / 159e-6])
    np.testing.assert_allclose(zeros, [1 / 159e-6])


def test_what_the_output_does_not_show_is_left_out() -> None:
    # the R-C at the follower's output is fed by it and seen by nobody
    circuit = net(
        [
            ("R1", "in", "a", 10e3),
            ("C1", "a", "gnd", 1e-9),
            ("R2", "out", "b", 1e3),
            ("C2", "b", "gnd", 1e-6),
        ],
        [("a", "out", "out")],
    )
    poles, zeros = linear(circuit).poles_and_zeros()
    np.testing.assert_allclose(poles, [-1e5])
    assert not zeros.size


@pytest.mark.parametrize("order", [1, 2, 3, 4, 6, 8])
def test_poles_and_zeros_are_those_of_a_general_library(order: int) -> None:
    for kind in ("low", "high"):
        z, p, k = scipy.signal.cheby2(order, 40.0, 1e4, kind, analog=True, output="zpk")
        A, B, C, D = scipy.signal.zpk2ss(z, p, k)
        poles, zeros = Linear(A, B[:, 0], C[0], float(D[0, 0])).poles_and_zeros()
        np.testing.assert_allclose(np.sort_complex(poles), np.sort_complex(p), rtol=1e-5)
        assert len(zeros) == len(z)
        scale = np.abs(p).max()
        np.testing.assert_allclose(np.sort(np.abs(zeros)), np.sort(np.abs(z)), rtol=1e-5, atol=1e-5 * scale)


@pytest.mark.parametrize("order", [2, 4, 8])
def test_an_all_pole_low_pass_has_no_zero(order: int) -> None:
    b, a = scipy.signal.butter(order, 2e4, analog=True)
    A, B, C, D = scipy.signal.tf2ss(b, a)
    assert not Linear(A, B[:, 0], C[0], float(D[0, 0])).poles_and_zeros()[1].size


def test_a_circuit_of_resistors_alone_has_neither() -> None:
    system = linear(net([("R1", "in", "out", 1e3), ("R2", "out", "gnd", 3e3)], []))
    assert math.isclose(system.D, 0.75)
    assert [len(found) for found in system.poles_and_zeros()] == [0, 0]


def test_a_gain_that_rises_without_end_is_no_such_system() -> None:
    with pytest.raises(CircuitError, match="does not reach its own inputs at once"):
        linear(net([("C1", "in", "s", 10e-9), ("R1", "s", "out", 10e3)], [("gnd", "s", "out")]))
