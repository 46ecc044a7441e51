"""Figures of the step response: handbook tables, closed forms, a general library."""

from __future__ import annotations

import math
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import scipy.signal

from preview.analysis.step import step_curve, step_figures
from preview.circuit.drive import parse_source
from preview.circuit.library import find_stage
from preview.circuit.netlist import netlist
from preview.network.linear import Linear, linear
from preview.network.transfer import response
from tests.nets import ALL, net

PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "sections.toml").read_text("utf-8"))


def system(num: list[float], den: list[float]) -> Linear:
    A, B, C, D = scipy.signal.tf2ss(num, den)
    return Linear(A, B[:, 0], C[0], float(D[0, 0]))


(OVERSHOOT,) = PUBLISHED["overshoot"]


@pytest.mark.parametrize(
    ("damping", "percent"), list(zip(OVERSHOOT["damping"], OVERSHOOT["percent"], strict=True))
)
def test_overshoot_by_damping_is_that_of_the_printed_table(damping: float, percent: float) -> None:
    found = step_figures(system([1e8], [1.0, 2e4 * damping, 1e8]))
    assert found is not None
    assert found.overshoot_percent == pytest.approx(
        percent, abs=0.051
    )  # half a digit, and 0.15 % prints as 0.2
    exact = 100 * math.exp(-math.pi * damping / math.sqrt(1 - damping**2))
    assert found.overshoot_percent == pytest.approx(exact, abs=1e-5)


def test_rise_time_of_a_first_order_low_pass_is_the_handbook_rule() -> None:
    found = step_figures(linear(netlist(find_stage("inverting-low-pass"))))
    assert found is not None
    (rule,) = PUBLISHED["rise"]
    assert found.rise_s * 1591.549 == pytest.approx(rule["rise_s_times_bandwidth_hz"], abs=0.005)
    # exactly: RC ln 9; within 1 % after RC ln 100, 0.1 % after RC ln 1000
    assert found.rise_s == pytest.approx(1e-4 * math.log(9), rel=1e-6)
    assert found.settling_1_percent_s == pytest.approx(1e-4 * math.log(100), rel=1e-6)
    assert found.settling_0_1_percent_s == pytest.approx(1e-4 * math.log(1000), rel=1e-6)
    assert (found.overshoot_percent, found.of) == (0.0, "end")
    assert found.end_gain == pytest.approx(-10.0)


@pytest.mark.parametrize("ratio", [1.0, 10.0, 1e6, 1e10])
def test_poles_however_far_apart_give_the_figures_of_the_slow_one(ratio: float) -> None:
    found = step_figures(system([ratio], np.polymul([1.0, 1.0], [1.0, ratio])))
    assert found is not None
    if ratio == 1.0:  # y = 1 - (1 + t) exp(-t), a double pole, which has no modal form
        t = found.settling_1_percent_s
        assert (1 + t) * math.exp(-t) == pytest.approx(0.01, rel=1e-6)
    elif ratio > 100.0:
        assert found.settling_1_percent_s == pytest.approx(math.log(100), rel=2 / ratio + 1e-6)
        assert found.rise_s == pytest.approx(math.log(9), rel=2 / ratio + 1e-6)


def test_a_high_pass_goes_to_its_peak_at_once_and_rests_at_nothing() -> None:
    found = step_figures(linear(ALL["high-pass"]))
    assert found is not None
    assert (found.of, found.rise_s, found.end_gain) == ("peak", 0.0, 0.0)
    assert found.start_gain == found.peak_gain == pytest.approx(-10.0)
    assert math.isnan(found.overshoot_percent)
    assert found.settling_1_percent_s == pytest.approx(1e-4 * math.log(100), rel=1e-6)


BRIEF = ("sallen-key", "elliptic-5")
"""What is compared in every run; the others take their time."""


@pytest.mark.parametrize(
    "name",
    [
        pytest.param(name, marks=() if name in BRIEF else pytest.mark.slow)
        for name in (*ALL, "butter-6", "cheby-5", "bessel-4", "elliptic-5")
    ],
)
def test_figures_agree_with_a_finely_sampled_step_of_a_general_library(name: str) -> None:
    made = {
        "butter-6": lambda: scipy.signal.butter(6, 1e4, analog=True),
        "cheby-5": lambda: scipy.signal.cheby1(5, 1.0, 1e4, analog=True),
        "bessel-4": lambda: scipy.signal.bessel(4, 1e4, analog=True, norm="mag"),
        "elliptic-5": lambda: scipy.signal.ellip(5, 1.0, 40.0, 1e4, analog=True),
    }
    circuit = linear(ALL[name]) if name in ALL else system(*made[name]())
    found = step_figures(circuit)
    assert found is not None
    time_s = np.linspace(0.0, 3.0 * found.settling_0_1_percent_s, 400_001)
    matrices = (circuit.A, circuit.B[:, None], circuit.C[None], np.array([[circuit.D]]))
    _, volts = scipy.signal.step(matrices, T=time_s)
    reference = found.end_gain if found.of == "end" else found.peak_gain
    assert np.abs(volts).max() == pytest.approx(abs(found.peak_gain), rel=1e-5)
    shape = volts / reference
    step_s = time_s[1]
    first = [time_s[np.argmax(shape >= level)] for level in (0.1, 0.9)]
    assert found.rise_s == pytest.approx(first[1] - first[0], abs=2 * step_s)
    for share, settled_s in ((0.01, found.settling_1_percent_s), (0.001, found.settling_0_1_percent_s)):
        outside = np.flatnonzero(np.abs(volts - found.end_gain) > share * abs(reference))
        assert settled_s == pytest.approx(time_s[outside[-1]], abs=2 * step_s)


def test_the_curve_is_that_of_a_general_library() -> None:
    circuit = linear(ALL["ladder"])
    time_s, volts = step_curve(circuit, 5e-3, 501)
    matrices = (circuit.A, circuit.B[:, None], circuit.C[None], np.array([[circuit.D]]))
    _, theirs = scipy.signal.step(matrices, T=time_s)
    np.testing.assert_allclose(volts, theirs, atol=1e-9)


def test_an_integrator_and_a_tank_without_loss_come_to_no_rest() -> None:
    integrator = net([("R1", "in", "s", 10e3), ("C1", "s", "out", 10e-9)], [("gnd", "s", "out")])
    assert step_figures(linear(integrator)) is None
    tank = net([("L1", "in", "out", 10e-3), ("C1", "out", "gnd", 1e-9)], [])
    assert step_figures(linear(tank)) is None


def test_a_circuit_of_resistors_follows_at_once() -> None:
    found = step_figures(linear(net([("R1", "in", "out", 1e3), ("R2", "out", "gnd", 3e3)], [])))
    assert found is not None
    assert (found.rise_s, found.overshoot_percent, found.settling_0_1_percent_s) == (0.0, 0.0, 0.0)
    assert found.end_gain == pytest.approx(0.75)


def test_a_trapped_charge_that_the_output_does_not_show_is_left_out() -> None:
    # A piezo disc on an ideal all-pass: the sum of what the disc and C1 hold never changes, and is not heard. The step
    # rests where the response is at the lowest frequencies.
    stage = find_stage("all-pass")
    stage = stage.with_part(replace(stage.opamps[0], type="ideal"))
    circuit = netlist(stage, source=parse_source("20 nF"))
    figures = step_figures(linear(circuit))
    assert figures is not None
    assert figures.end_gain == pytest.approx(response(circuit, [1e-3])[0].real, rel=1e-6)
    assert 0.0 < figures.settling_1_percent_s < figures.settling_0_1_percent_s < 1e-3
