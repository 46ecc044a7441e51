"""Corners, passband gain and the heard response."""

from __future__ import annotations

import numpy as np
import pytest

from preview.analysis.figures import expected_figure
from preview.analysis.response import analyse, deviation, find_corners, heard
from preview.circuit.library import find_stage, stage_names
from preview.circuit.parts import Expect, Stage
from preview.errors import CircuitError
from preview.network.transfer import response
from preview.values.quality import Quality
from tests.nets import ALL, HIGH_PASS, LOW_PASS, SALLEN_KEY, net


def expectations() -> list[tuple[Stage, Expect]]:
    return [(stage, e) for name in stage_names() for stage in [find_stage(name)] for e in stage.expects]


@pytest.mark.parametrize(
    ("stage", "expect"), expectations(), ids=lambda x: getattr(x, "what", getattr(x, "name", ""))
)
def test_every_expected_figure_of_every_stage_comes_true(stage: Stage, expect: Expect) -> None:
    found = expected_figure(stage, expect)
    allowed = expect.within if expect.absolute else expect.within * abs(expect.value)
    difference = abs(found - expect.value)
    if expect.what.startswith("phase_deg"):
        difference = min(difference, abs(difference - 360.0))
    assert difference <= allowed, f"{expect.what}: {found} against {expect.value}, {expect.source}"


def test_corner_of_the_low_pass() -> None:
    passband, corners = find_corners(LOW_PASS)
    assert passband == pytest.approx(20.0, abs=1e-9)
    assert corners == pytest.approx([1.0 / (2 * np.pi * 1e-4)], rel=1e-6)


def test_corner_of_the_high_pass() -> None:
    passband, corners = find_corners(HIGH_PASS)
    assert passband == pytest.approx(20.0, abs=1e-6)
    assert corners == pytest.approx([1.0 / (2 * np.pi * 1e-4)], rel=1e-6)


def test_two_corners_of_two_sections() -> None:
    passband, corners = find_corners(ALL["two-sections"])
    assert len(corners) == 2
    gain = np.abs(response(ALL["two-sections"], corners))
    np.testing.assert_allclose(20 * np.log10(gain), passband - 10 * np.log10(2), atol=1e-6)


def test_corner_of_a_butterworth_is_its_natural_frequency() -> None:
    _, corners = find_corners(SALLEN_KEY)
    assert corners == pytest.approx([1.0 / (2 * np.pi * np.sqrt(2e-10))], rel=1e-6)


def test_a_resonant_peak_is_found_between_the_grid_points() -> None:
    # series R-L-C: at resonance the gain across C is Q
    circuit = net([("R1", "in", "a", 10.0), ("L1", "a", "out", 10e-3), ("C1", "out", "gnd", 100e-9)], [])
    q = np.sqrt(10e-3 / 100e-9) / 10.0
    exact = q / np.sqrt(1 - 1 / (4 * q * q))  # peak of a second-order low-pass, handbook formula
    passband, corners = find_corners(circuit)
    assert passband == pytest.approx(20 * np.log10(exact), abs=1e-5)
    assert corners[1] - corners[0] == pytest.approx(1 / (2 * np.pi * np.sqrt(1e-9)) / q, rel=2e-3)


def test_a_flat_gain_has_no_corner() -> None:
    circuit = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 5e3)], [("gnd", "s", "out")])
    assert find_corners(circuit)[1] == ()


def test_unstable_circuits_are_not_analysed() -> None:
    circuit = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 5e3)], [("s", "gnd", "out")])
    with pytest.raises(CircuitError, match="positive feedback"):
        analyse(circuit)


@pytest.mark.parametrize("name", ALL)
@pytest.mark.parametrize("rate", [8e3, 44.1e3, 48e3, 96e3, 192e3])
def test_heard_response_keeps_the_promise_of_each_quality(name: str, rate: float) -> None:
    standard = deviation(ALL[name], rate, Quality.STANDARD)
    fine = deviation(ALL[name], rate, Quality.FINE)
    assert standard.gain_db < 0.01
    assert standard.phase_deg < 0.1
    assert fine.gain_db < 0.001
    assert fine.phase_deg < 0.01


def test_heard_response_falls_off_above_the_band() -> None:
    gain = np.abs(heard(LOW_PASS, 48e3, Quality.STANDARD, [23.9e3]) / response(LOW_PASS, [23.9e3]))
    assert gain[0] < 0.6


def test_an_integrator_and_a_differentiator_have_no_corner() -> None:
    integrator = net([("R1", "in", "s", 10e3), ("C1", "s", "out", 10e-9)], [("gnd", "s", "out")])
    differentiator = net([("C1", "in", "s", 10e-9), ("R1", "s", "out", 10e3)], [("gnd", "s", "out")])
    assert find_corners(integrator)[1] == ()
    assert find_corners(differentiator)[1] == ()
    assert analyse(differentiator, [1000.0]).gain_db[0] == pytest.approx(
        20 * np.log10(2 * np.pi * 0.1), abs=1e-9
    )


def test_corners_of_a_resonance_narrower_than_the_grid_of_the_search() -> None:
    # series R-L-C, out across R: the corners are f0 / Q apart, half a percent of f0
    circuit = net([("C1", "in", "a", 100e-9), ("L1", "a", "out", 10e-3), ("R1", "out", "gnd", 1.6)], [])
    passband, (low_hz, high_hz) = find_corners(circuit)
    assert passband == pytest.approx(0.0, abs=1e-6)
    assert high_hz - low_hz == pytest.approx(1.6 / (2 * np.pi * 10e-3), rel=1e-6)
