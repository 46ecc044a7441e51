"""The worst case of every signal: closed forms, scipy's impulse responses, and the running computation."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.signal import resample_poly

from preview.analysis.headroom import worst_cases
from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.nets import ALL, HIGH_PASS, LOW_PASS, RAIL_V, SALLEN_KEY, TWO_SECTIONS, net

REAL = OpAmpModel(
    "test", gain_bandwidth_hz=3e6, open_loop_gain=2e5, output_resistance_ohm=125.0, offset_v=3e-3
)


def with_model(circuit: Netlist, model: OpAmpModel) -> Netlist:
    return replace(circuit, opamps=tuple(replace(o, model=model) for o in circuit.opamps))


def gains(circuit: Netlist) -> list[float]:
    return [w.gain for w in worst_cases(circuit)]


def resonant(q: float) -> Netlist:
    """A Sallen-Key low-pass of unity gain with equal resistors: Q = sqrt(C1 / C2) / 2."""
    return SALLEN_KEY.with_values({"C1": 1e-9 * (2 * q) ** 2})


def test_a_low_pass_of_first_order_can_do_no_worse_than_its_gain() -> None:
    # h does not change its sign: its integral is the gain at 0 Hz, R2 / R1
    assert gains(LOW_PASS) == pytest.approx([10.0], rel=3e-9)


def test_a_high_pass_of_first_order_can_do_twice_its_gain() -> None:
    # h = -G (delta(t) - exp(-t / tau) / tau): G for the delta and G for the tail
    assert gains(HIGH_PASS) == pytest.approx([20.0], rel=1e-7)


@pytest.mark.parametrize("q", [0.4, 0.5, math.sqrt(0.5), 1.0, 3.0, 30.0])
def test_a_resonance_of_second_order_by_the_overshoots_of_its_step_response(q: float) -> None:
    # the step response swings about 1 with overshoots p, p^2 ...: all ups and downs are (1 + p) / (1 - p) in sum,
    # p = exp(-pi zeta / sqrt(1 - zeta^2)), zeta = 1 / (2 Q); without overshoot (Q up to 1/2) they are 1
    zeta = 1 / (2 * q)
    p = math.exp(-math.pi * zeta / math.sqrt(1 - zeta**2)) if zeta < 1 else 0.0
    assert gains(resonant(q)) == pytest.approx([(1 + p) / (1 - p)], rel=1e-6)


def test_two_equal_sections_whose_poles_coincide() -> None:
    # (1 / (1 + s tau))^2: h = t exp(-t / tau) / tau^2 is positive, its integral 1, for both outputs
    circuit = net(
        [
            ("R1", "in", "a", 10e3),
            ("C1", "a", "gnd", 1e-9),
            ("R2", "o1", "b", 10e3),
            ("C2", "b", "gnd", 1e-9),
        ],
        [("a", "o1", "o1"), ("b", "out", "out")],
    )
    assert gains(circuit) == pytest.approx([1.0, 1.0], rel=1e-7)


def test_a_band_pass_against_scipys_quadrature() -> None:
    # second output of the two sections: 4.7 / (1 + s t1) * 4.7 s t2 / (1 + s t2) by partial fractions
    a, b = 1 / (47e3 * 1e-9), 1 / (1e3 * 100e-9)

    def h(t: float) -> float:
        return 4.7 * 4.7 * a / (b - a) * (b * math.exp(-b * t) - a * math.exp(-a * t))

    turn = math.log(a / b) / (a - b)
    expected = abs(quad(h, 0, turn)[0]) + abs(quad(h, turn, 60 / b, limit=200)[0])
    first, second = gains(TWO_SECTIONS)
    assert first == pytest.approx(4.7, rel=3e-9)
    assert second == pytest.approx(expected, rel=1e-6)


def test_a_real_op_amp_with_much_speed_comes_to_the_ideal_one() -> None:
    fast = replace(REAL, gain_bandwidth_hz=1e9, open_loop_gain=1e8, output_resistance_ohm=0.0)
    for circuit in (LOW_PASS, SALLEN_KEY, TWO_SECTIONS):
        assert gains(with_model(circuit, fast)) == pytest.approx(gains(circuit), rel=2e-4)


def test_the_offset_is_in_the_bound() -> None:
    (worst,) = worst_cases(with_model(LOW_PASS, REAL))
    # noise gain 11 at 0 Hz, behind 125 ohm into 110k; open-loop gain 2e5
    gain = 11 * (1 + 125 / 110e3)
    assert worst.rest_v == pytest.approx(3e-3 * 11 / (1 + gain / 2e5), rel=1e-9)
    assert worst.bound_v(1.0) == pytest.approx(worst.gain + worst.rest_v)
    assert worst.clean_input_v == pytest.approx((RAIL_V - worst.rest_v) / worst.gain)


def test_swing_by_load_current_and_input_range_are_limits_too() -> None:
    # a follower into 600 ohm without speed to speak of: everything is the input itself
    fast = replace(REAL, gain_bandwidth_hz=1e9, open_loop_gain=1e9, offset_v=0.0)

    def clean_v(model: OpAmpModel, **site: float) -> tuple[float, str]:
        circuit = with_model(
            net([("R1", "in", "a", 1.0), ("Rload", "out", "gnd", 600.0)], [("a", "out", "out")]), model
        )
        circuit = replace(circuit, opamps=tuple(replace(o, **site) for o in circuit.opamps))
        (worst,) = worst_cases(circuit)
        return worst.clean_input_v, worst.limit

    assert clean_v(fast) == (pytest.approx(RAIL_V, rel=2e-3), "rail")
    # 15 V less 1.5 V at no current and 100 ohm from there: v (1 + 100 / 600) = 13.5 V
    points = ((0.0, 1.5), (10e-3, 2.5))
    swing = replace(fast, swing_high_v=1.5, swing_high_points=points)
    assert clean_v(swing) == (pytest.approx(13.5 / (1 + 100 / 600), rel=2e-3), "rail")
    assert clean_v(replace(fast, current_sink_a=8e-3)) == (pytest.approx(4.8, rel=2e-3), "output current")
    assert clean_v(fast, input_low_v=-3.0) == (pytest.approx(3.0, rel=2e-3), "input range")


@pytest.mark.parametrize("name", ["low-pass", "high-pass", "sallen-key", "two-sections", "loaded-low-pass"])
@pytest.mark.parametrize("kind", ["ideal", "real"])
def test_no_signal_passes_the_bound_and_the_worst_one_comes_near(name: str, kind: str) -> None:
    circuit = ALL[name] if kind == "ideal" else with_model(ALL[name], replace(REAL, offset_v=0.0))
    rate, frames = 192_000, 6000
    bounds = gains(circuit)

    def peaks(volts: np.ndarray) -> list[float]:
        stage = StageProcessor(
            circuit, sample_rate_hz=rate, channels=volts.shape[1], quality=Quality.STANDARD
        )
        stage.process(volts, np.empty_like(volts))
        return [r.peak_v for r in stage.readings()]

    # its own peak between the samples counts, and for signs of noise that is well above 1: use smooth ones
    t = np.arange(frames) / rate
    rng = np.random.default_rng(7)
    phases = rng.uniform(0, 2 * np.pi, (12, 1))
    smooth = np.cos(2 * np.pi * np.geomspace(50, 40e3, 12)[:, None] * t + phases).sum(axis=0) / 12
    assert all(
        p <= b * 1.0001 for p, b in zip(peaks(np.ascontiguousarray(smooth[:, None])), bounds, strict=True)
    )
    # the sign of the impulse response backwards: its response comes from the circuit itself
    for j, bound in enumerate(bounds):
        output = replace(circuit, output_node=circuit.opamps[j].out)
        stage = StageProcessor(output, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
        pulse = np.zeros((frames, 1))
        pulse[1] = 1e-3
        h = np.empty_like(pulse)
        stage.process(pulse, h)
        smoothed = np.convolve(h[::-1, 0], np.hanning(13), mode="same")  # without the ringing of the filters
        sign = (np.sign(smoothed) * (np.abs(smoothed) > 1e-3 * np.abs(smoothed).max()))[:, None]
        between = np.abs(resample_poly(np.pad(sign[:, 0], 100), 16, 1)).max()
        scale = 0.1 / bound / between  # band-limited edges overshoot, from one sign to the other by 18 %
        assert 0.75 * 0.1 <= peaks(np.ascontiguousarray(sign * scale))[j] <= 1.001 * 0.1
