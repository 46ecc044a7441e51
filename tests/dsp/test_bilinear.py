"""Bilinear transform against scipy.signal, and the running step against the exact circuit."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal

from preview.dsp.bilinear import discretise, poles_and_zeros, running_step, sections
from preview.errors import CircuitError
from preview.network.statespace import StateSpace, Topology
from preview.network.transfer import response
from tests.nets import ALL, LOW_PASS, SALLEN_KEY, net


def space_of(name: str) -> StateSpace:
    topology = Topology(ALL[name])
    return topology.evaluate(topology.values_of(ALL[name])[None])


def closed(name: str) -> tuple[np.ndarray, ...]:
    return tuple(m[0] for m in space_of(name).closed())


@pytest.mark.parametrize("name", ALL)
def test_state_space_equals_scipys_bilinear(name: str) -> None:
    ours = discretise(*closed(name), 48_000.0)
    theirs = signal.cont2discrete(closed(name), 1 / 48_000.0, "bilinear")
    for a, b in zip(ours, theirs[:4], strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("name", ALL)
def test_sections_have_the_response_of_scipys_bilinear(name: str) -> None:
    A, B, C, D = signal.cont2discrete(closed(name), 1 / 48_000.0, "bilinear")[:4]
    f = np.geomspace(20.0, 23e3, 50)
    z = np.exp(2j * np.pi * f / 48_000.0)
    expected = np.array([(C @ np.linalg.solve(x * np.eye(len(A)) - A, B) + D)[0, 0] for x in z])
    _, h = signal.sosfreqz(sections(*closed(name), 48_000.0), worN=f, fs=48_000.0)
    np.testing.assert_allclose(h, expected, rtol=2e-7)


def test_butterworth_sections_equal_scipys_design() -> None:
    # the Sallen-Key of the tests is a second-order Butterworth at 1 / (2 pi sqrt(R1 R2 C1 C2))
    corner = 1.0 / (2.0 * np.pi * np.sqrt(1e8 * 2e-18))
    theirs = signal.butter(2, corner, fs=48_000.0, output="sos")
    ours = sections(*closed("sallen-key"), 48_000.0, prewarp_hz=corner)
    np.testing.assert_allclose(ours, theirs, rtol=1e-9)


def test_prewarp_makes_one_frequency_exact() -> None:
    at = 9000.0
    exact = response(SALLEN_KEY, [at])[0]
    _, bent = signal.sosfreqz(
        sections(*closed("sallen-key"), 48_000.0, prewarp_hz=at), worN=[at], fs=48_000.0
    )
    _, plain = signal.sosfreqz(sections(*closed("sallen-key"), 48_000.0), worN=[at], fs=48_000.0)
    assert abs(bent[0] / exact - 1.0) < 1e-10
    assert abs(plain[0] / exact - 1.0) > 0.01


@pytest.mark.parametrize("at", [0.0, -1.0, 24_000.0, 30_000.0])
def test_prewarp_outside_the_band_is_refused(at: float) -> None:
    with pytest.raises(ValueError, match="prewarp_hz"):
        discretise(*closed("low-pass"), 48_000.0, prewarp_hz=at)


def test_states_that_do_not_reach_the_output_make_no_sections() -> None:
    # the ladder's C4, C5 branch hangs across the source: 4 states, but the response is of second order
    poles, zeros, _ = poles_and_zeros(*closed("ladder"))
    assert len(poles) == 2
    assert len(zeros) == 0
    assert sections(*closed("ladder"), 48_000.0).shape == (1, 6)


def test_sections_of_a_plain_gain_are_one_row() -> None:
    circuit = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 5e3)], [("gnd", "s", "out")])
    topology = Topology(circuit)
    matrices = (m[0] for m in topology.evaluate(topology.values_of(circuit)[None]).closed())
    np.testing.assert_allclose(sections(*matrices, 48_000.0), [[-5.0, 0, 0, 1, 0, 0]], rtol=1e-12)


def step_response_error(name: str, steps_per_s: float, f: float) -> float:
    """Relative error of a mode-by-mode running step at one frequency, the signal's own mean taken exactly."""
    circuit = ALL[name]
    M = running_step(space_of(name), 1.0 / steps_per_s).free[0]
    k = len(circuit.opamps)
    n = M.shape[1] - k - 3
    theta = 2.0 * np.pi * f / steps_per_s
    z = np.exp(1j * theta)
    mean = (z - 1.0) / (1j * theta)
    inputs = np.array([1.0, mean, z])
    size = n + k
    states = np.linalg.solve(z * np.eye(size) - M[:size, :size], M[:size, size:] @ inputs)
    out = M[n + 2 * k, :size] @ states + M[n + 2 * k, size:] @ inputs
    return float(abs(out / mean / response(circuit, [f])[0] - 1.0))


@pytest.mark.parametrize("name", ALL)
def test_running_step_is_of_fourth_order(name: str) -> None:
    coarse, fine = step_response_error(name, 384e3, 20e3), step_response_error(name, 768e3, 20e3)
    assert fine < 1e-5
    assert coarse / fine == pytest.approx(16.0, rel=0.15)


def test_running_step_warps_far_less_than_the_plain_transform() -> None:
    exact = response(LOW_PASS, [20e3])[0]
    A, B, C, D = discretise(*closed("low-pass"), 768e3)
    z = np.exp(2j * np.pi * 20e3 / 768e3)
    plain = abs((C @ np.linalg.solve(z * np.eye(1) - A, B) + D)[0, 0] / exact - 1.0)
    assert plain > 2e-3
    assert step_response_error("low-pass", 768e3, 20e3) < plain / 1000.0


@pytest.mark.parametrize("name", ALL)
@pytest.mark.parametrize("steps_per_s", [1e3, 48e3, 768e3])
def test_running_step_is_stable_at_any_rate(name: str, steps_per_s: float) -> None:
    circuit = ALL[name]
    M = running_step(space_of(name), 1.0 / steps_per_s).free[0]
    size = M.shape[1] - 3
    assert np.abs(np.linalg.eigvals(M[:size, :size])).max() < 1.0 + 1e-9, circuit


def test_a_feedback_path_that_is_held_is_explained() -> None:
    # a bare differentiator: the capacitor pins the summing node to the ideal source
    circuit = net([("C1", "in", "s", 1e-9), ("R1", "s", "out", 10e3)], [("gnd", "s", "out")])
    topology = Topology(circuit)
    with pytest.raises(CircuitError, match="feedback"):
        running_step(topology.evaluate(topology.values_of(circuit)[None]), 1e-6)
