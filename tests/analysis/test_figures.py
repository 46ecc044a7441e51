"""Figures of peaks, notches and poles against the closed forms of series R-L-C circuits."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from preview.analysis.figures import evaluate, expected_figure
from preview.circuit.library import find_stage
from preview.circuit.parts import Expect
from tests.nets import HIGH_PASS, LOW_PASS, SALLEN_KEY, net

L, C = 10e-3, 100e-9
F0 = 1 / (2 * np.pi * np.sqrt(L * C))


def across_c(q: float):
    """Low-pass: out across C of a series R-L-C."""
    r = np.sqrt(L / C) / q
    return net([("R1", "in", "a", r), ("L1", "a", "out", L), ("C1", "out", "gnd", C)], [])


def across_r(q: float):
    """Band-pass: out across R."""
    r = np.sqrt(L / C) / q
    return net([("C1", "in", "a", C), ("L1", "a", "out", L), ("R1", "out", "gnd", r)], [])


def trap(q: float, loss_ohm: float):
    """Notch: out across L and C in series with a loss."""
    r = np.sqrt(L / C) / q - loss_ohm
    return net(
        [("R1", "in", "out", r), ("L1", "out", "a", L), ("C1", "a", "b", C), ("R2", "b", "gnd", loss_ohm)], []
    )


@pytest.mark.parametrize("q", [0.75, 1.0, 5.0, 200.0])
def test_a_low_pass_peaks_below_its_natural_frequency(q: float) -> None:
    # Handbook formulas of the second-order low-pass: f0 sqrt(1 - 1/(2 Q^2)), Q / sqrt(1 - 1/(4 Q^2)).
    circuit = across_c(q)
    assert evaluate(circuit, "peak_hz") == pytest.approx(F0 * np.sqrt(1 - 1 / (2 * q * q)), rel=1e-6)
    assert evaluate(circuit, "passband_gain_db") == pytest.approx(
        20 * np.log10(q / np.sqrt(1 - 1 / (4 * q * q))), abs=1e-6
    )


@pytest.mark.parametrize("q", [0.2, 1.0, 10.0, 200.0])
def test_width_of_a_band_pass_is_its_frequency_over_its_q(q: float) -> None:
    assert evaluate(across_r(q), "peak_hz") == pytest.approx(F0, rel=1e-6)
    assert evaluate(across_r(q), "bandwidth_hz") == pytest.approx(F0 / q, rel=1e-6)


@pytest.mark.parametrize("q", [0.25, 1.0, 12.0])
def test_a_notch_has_a_place_a_depth_and_a_width(q: float) -> None:
    circuit = trap(q, 1.0)
    assert evaluate(circuit, "notch_hz") == pytest.approx(F0, rel=1e-6)
    assert evaluate(circuit, "notch_gain_db") == pytest.approx(20 * np.log10(q / np.sqrt(L / C)), abs=1e-6)
    # (R + r)^2 + X^2 = 2 (r^2 + X^2) at X = +-sqrt((R + r)^2 - 2 r^2), and X = w L - 1 / (w C)
    width = np.sqrt(L / C / q / q - 2) / (2 * np.pi * L)
    assert evaluate(circuit, "bandwidth_hz") == pytest.approx(width, rel=1e-6)


def test_a_gain_without_peak_or_notch_is_not_given_one() -> None:
    for circuit in (LOW_PASS, HIGH_PASS):
        with pytest.raises(ValueError, match="no peak"):
            evaluate(circuit, "peak_hz")
        with pytest.raises(ValueError, match="no notch"):
            evaluate(circuit, "notch_hz")
        with pytest.raises(ValueError, match="no pair of complex poles"):
            evaluate(circuit, "q")


@pytest.mark.parametrize("q", [0.55, 1.0, 100.0])
def test_natural_frequency_and_q_are_those_of_the_poles(q: float) -> None:
    for circuit in (across_c(q), across_r(q), trap(q, 1.0)):
        assert evaluate(circuit, "f0_hz") == pytest.approx(F0, rel=1e-9)
        assert evaluate(circuit, "q") == pytest.approx(q, rel=1e-9)


def test_of_two_sections_the_higher_and_the_lower_q_are_told_apart() -> None:
    # SALLEN_KEY: Q = sqrt(1/2), f0 = 1 / (2 pi R sqrt(2 C^2)); a trap of Q 3 is driven by it.
    r = np.sqrt(L / C) / 3
    rows = [(b.designator, b.a, b.b.replace("out", "mid"), b.value) for b in SALLEN_KEY.branches]
    rows += [("R9", "mid", "c", r), ("L9", "c", "out", L), ("C9", "out", "gnd", C)]
    circuit = net(rows, [("b", "mid", "mid")])
    assert evaluate(circuit, "q") == pytest.approx(3, rel=1e-9)
    assert evaluate(circuit, "f0_hz") == pytest.approx(F0, rel=1e-9)
    assert evaluate(circuit, "low_q") == pytest.approx(np.sqrt(0.5), rel=1e-9)
    assert evaluate(circuit, "low_q_f0_hz") == pytest.approx(1 / (2 * np.pi * np.sqrt(2e-10)), rel=1e-9)


def test_a_figure_can_hold_for_op_amps_without_limits() -> None:
    stage = find_stage("inverting-low-pass")
    slow = stage.with_part(replace(stage.opamps[0], type="LM741"))
    gain = Expect("gain_db_at_10000_hz", 0.0, 0.1, True, "closed form")
    exact = -10 * np.log10(1 + (1e4 / 1591.549) ** 2) + 20
    assert expected_figure(slow, replace(gain, opamp="ideal")) == pytest.approx(exact, abs=1e-4)
    assert expected_figure(slow, gain) < exact - 1e-3
