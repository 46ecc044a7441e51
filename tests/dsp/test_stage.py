"""The running stage, measured by what comes out of it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from preview.analysis.response import deviation
from preview.circuit.library import find_stage
from preview.circuit.netlist import Netlist, netlist
from preview.dsp.stage import GLIDE_S, StageProcessor
from preview.errors import PartValueError, UnknownNameError
from preview.network.transfer import response
from preview.values.quality import Quality
from tests.nets import ALL, HIGH_PASS, LADDER, LOW_PASS, RAIL_V, SALLEN_KEY, TWO_SECTIONS, net

Real = NDArray[np.float64]
STAGES = ("inverting-low-pass", "inverting-high-pass", "inverting-band-pass", "non-inverting-gain")


def run(circuit: Netlist, volts: Real, rate: float, quality: Quality = Quality.STANDARD) -> Real:
    """The whole signal through a new processor, delay taken out."""
    columns = volts.reshape(len(volts), -1)
    stage = StageProcessor(circuit, sample_rate_hz=rate, channels=columns.shape[1], quality=quality)
    padded = np.concatenate([columns, np.zeros((stage.latency_frames, columns.shape[1]))])
    out = np.empty_like(padded)
    stage.process(padded, out)
    return out[stage.latency_frames :].reshape(volts.shape)


def measured_deviation(circuit: Netlist, rate: int, quality: Quality) -> tuple[float, float]:
    """Largest error of gain [dB] and phase [degrees], 10 Hz to 20 kHz, by a multitone in steady state."""
    bins = np.unique(np.round(np.geomspace(10, 20e3, 34)).astype(int))
    t = np.arange(6 * rate) / rate
    phases = np.random.default_rng(3).uniform(0, 2 * np.pi, len(bins))
    volts = sum(1e-3 * np.cos(2 * np.pi * b * t + p) for b, p in zip(bins, phases, strict=True))
    out = run(circuit, np.asarray(volts), rate, quality)
    # the fifth second: settled, and clear of the end
    last = slice(4 * rate, 5 * rate)
    ratio = np.fft.rfft(out[last])[bins] / np.fft.rfft(volts[last])[bins] / response(circuit, bins)
    return float(np.abs(20 * np.log10(np.abs(ratio))).max()), float(np.abs(np.angle(ratio, deg=True)).max())


@pytest.mark.parametrize("rate", [44_100, 48_000, 96_000])
@pytest.mark.parametrize("name", STAGES)
def test_heard_response_by_multitone(name: str, rate: int) -> None:
    circuit = netlist(find_stage(name))
    gain, phase = measured_deviation(circuit, rate, Quality.STANDARD)
    assert gain < 0.01
    assert phase < 0.1
    gain, phase = measured_deviation(circuit, rate, Quality.FINE)
    assert gain < 0.001
    assert phase < 0.01


def test_the_deviation_shown_is_the_deviation_measured() -> None:
    circuit = netlist(find_stage("inverting-low-pass"))
    shown = deviation(circuit, 48_000, Quality.DRAFT)
    gain, _ = measured_deviation(circuit, 48_000, Quality.DRAFT)
    assert gain == pytest.approx(shown.gain_db, rel=0.02)


def harmonics(y: Real, f: int) -> NDArray[np.complex128]:
    """Complex amplitude of each hertz of one second of signal."""
    return np.asarray(np.fft.rfft(y) / len(y) * 2)


def clipped_by_solver(name: str, f: float, amplitude: float, rail: float) -> NDArray[np.complex128]:
    """Harmonics 1.. of the clipped output in steady state, by scipy's Radau on equations written here by hand."""
    r1, r2, w = 10e3, 100e3, 2 * np.pi * f

    def low_pass(t: float, x: Real) -> Real:  # x: v(sum) - v(out) over C = 1 nF
        y = np.clip(-x, -rail, rail)
        return ((amplitude * np.sin(w * t) - (x + y)) / r1 - x / r2) / 1e-9

    def high_pass_out(t: Real, x: Real) -> Real:  # x: voltage of C = 10 nF in series with R1
        return np.clip(-(amplitude * np.sin(w * t) - x) * r2 / r1, -rail, rail)

    def high_pass(t: float, x: Real) -> Real:
        return (amplitude * np.sin(w * t) - x - high_pass_out(np.asarray(t), x)) / (r1 + r2) / 10e-9

    periods, points = 30, 4096
    at = (periods - 1 + np.arange(points) / points) / f
    solved = solve_ivp(
        low_pass if name == "low-pass" else high_pass,
        (0, periods / f),
        [0.0],
        method="Radau",
        rtol=1e-9,
        atol=1e-11,
        max_step=1 / f / 400,
        t_eval=at,
    )
    x = solved.y[0]
    y = np.clip(-x, -rail, rail) if name == "low-pass" else high_pass_out(at, x)
    return np.asarray(np.fft.rfft(y) / points * 2)


LIMITS = {
    (Quality.STANDARD, 997): (-75.0, -100.0),
    (Quality.STANDARD, 4999): (-60.0, -80.0),
    (Quality.FINE, 997): (-90.0, -120.0),
    (Quality.FINE, 4999): (-75.0, -95.0),
}
"""Waveform error and strongest alias below 20 kHz, both re the fundamental [dB]."""


@pytest.mark.parametrize("f", [997, 4999])
@pytest.mark.parametrize("name", ["low-pass", pytest.param("high-pass", marks=pytest.mark.slow)])
def test_rail_clipping_20_db_over_against_a_stiff_solver(name: str, f: int) -> None:
    circuit = ALL[name]
    amplitude = 10.0 * RAIL_V / abs(response(circuit, [f])[0])
    expected = clipped_by_solver(name, f, amplitude, RAIL_V)
    order = np.arange(1, 20_000 // f + 1)
    rate = 48_000
    volts = amplitude * np.sin(2 * np.pi * f * np.arange(3 * rate) / rate)
    for quality in (Quality.STANDARD, Quality.FINE):
        lines = harmonics(run(circuit, volts, rate, quality)[rate : 2 * rate], f)
        error = np.linalg.norm(lines[order * f] - expected[order]) / np.linalg.norm(expected[order])
        others = np.abs(lines[1:20_001])
        others[order * f - 1] = 0.0
        alias = others.max() / abs(lines[f])
        most_error, most_alias = LIMITS[quality, f]
        assert 20 * math.log10(error) < most_error
        assert 20 * math.log10(alias) < most_alias


def test_a_loop_of_second_order_clips_as_a_stiff_solver_says() -> None:
    f, amplitude, rail, w = 997, 30.0, RAIL_V, 2 * np.pi * 997

    def rates(t: float, x: Real) -> Real:  # x: v(a) - v(out) over 2 nF, v(b) over 1 nF
        y = np.clip(x[1], -rail, rail)
        a = x[0] + y
        i2 = (a - x[1]) / 10e3
        return np.array([((amplitude * np.sin(w * t) - a) / 10e3 - i2) / 2e-9, i2 / 1e-9])

    points = 4096
    at = (9 + np.arange(points) / points) / f
    solved = solve_ivp(
        rates, (0, 10 / f), [0, 0], method="Radau", rtol=1e-9, atol=1e-11, max_step=2e-6, t_eval=at
    )
    expected = np.fft.rfft(np.clip(solved.y[1], -rail, rail)) / points * 2
    order = np.arange(1, 21)
    rate = 48_000
    volts = amplitude * np.sin(w * np.arange(2 * rate) / rate)
    lines = harmonics(run(SALLEN_KEY, volts, rate)[rate // 2 : rate // 2 + rate], f)
    phase = np.exp(-1j * w * order * 0.5)  # the second starts half a second in
    error = np.linalg.norm(lines[order * f] * phase - expected[order]) / np.linalg.norm(expected[order])
    assert 20 * math.log10(error) < -75.0


@pytest.mark.slow
def test_two_op_amps_that_both_clip_do_as_a_stiff_solver_says() -> None:
    f, amplitude, rail, w = 997, 60.0, RAIL_V, 2 * np.pi * 997

    def outputs(t: Real, x: Real) -> tuple[Real, Real]:  # x: v(s1) - v(o1), voltage of C2
        first = np.clip(-x[0], -rail, rail)
        return first, np.clip(-(first - x[1]) * 4.7, -rail, rail)

    def rates(t: float, x: Real) -> Real:
        first, second = outputs(np.asarray(t), x)
        s1 = x[0] + first
        return np.array(
            [
                ((amplitude * np.sin(w * t) - s1) / 10e3 - x[0] / 47e3) / 1e-9,
                (first - x[1] - second) / 5.7e3 / 100e-9,
            ]
        )

    points = 4096
    at = (39 + np.arange(points) / points) / f
    solved = solve_ivp(
        rates, (0, 40 / f), [0, 0], method="Radau", rtol=1e-9, atol=1e-11, max_step=2e-6, t_eval=at
    )
    expected = np.fft.rfft(outputs(at, solved.y)[1]) / points * 2
    order = np.arange(1, 21)
    rate = 48_000
    volts = amplitude * np.sin(w * np.arange(3 * rate) / rate)
    found = harmonics(run(TWO_SECTIONS, volts, rate)[rate : 2 * rate], f)[order * f]
    assert 20 * math.log10(np.linalg.norm(found - expected[order]) / np.linalg.norm(expected[order])) < -75.0


@pytest.mark.parametrize("seed", range(4))
def test_noise_far_over_two_pairs_of_rails_is_solved_at_every_step(seed: int) -> None:
    rng = np.random.default_rng(seed)
    values = {b.designator: b.value * float(np.exp(rng.normal(0, 0.7))) for b in TWO_SECTIONS.branches}
    circuit = TWO_SECTIONS.with_values(values)
    stage = StageProcessor(circuit, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    volts = rng.normal(0, 100.0, (4000, 1))
    out = np.empty_like(volts)
    stage.process(volts, out)
    assert [r.unsolved_steps for r in stage.readings()] == [0, 0]
    assert sum(r.clip_events for r in stage.readings()) > 100
    assert np.isfinite(out).all()


def test_recovery_from_a_rail_takes_the_time_of_the_closed_form() -> None:
    # 15 V for 40 ms into the low-pass with C1 = 100 nF. At the rail -E the loop is open: the summing node is a divider
    # and C1 goes on towards x1 = (u + E) R2 / (R1 + R2) with (R1 || R2) C1. It left x = E, where the output just
    # reaches the rail, and after the pulse falls towards x2 = E R2 / (R1 + R2) < E; at x = E the output comes back.
    rail, u, c, pulse_s = RAIL_V, 15.0, 100e-9, 40e-3
    tau_closed, tau_open = 100e3 * c, 10e3 * 100e3 / 110e3 * c
    enter = -tau_closed * math.log(1 - rail / (10 * u))
    x1 = (u + rail) * 100e3 / 110e3
    held = x1 + (rail - x1) * math.exp(-(pulse_s - enter) / tau_open)
    x2 = rail * 100e3 / 110e3
    recovery = tau_open * math.log((held - x2) / (rail - x2))
    rate = 192_000
    volts = np.zeros((rate // 10, 1))
    volts[1000 : 1000 + round(pulse_s * rate)] = u
    circuit = LOW_PASS.with_values({"C1": c})
    stage = StageProcessor(circuit, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
    stage.process(volts, np.empty_like(volts))
    reading = stage.readings()[0]
    assert recovery > 1e-3
    assert reading.clip_events == 1
    # the pulse's edges are band-limited, a few microseconds wide; that moves the times by nanoseconds
    assert reading.clipped_s == pytest.approx(pulse_s - enter + recovery, abs=0.2e-6)


@pytest.mark.parametrize("name", ALL)
@pytest.mark.parametrize("loud", [0.1, 40.0])
def test_samples_do_not_depend_on_how_the_signal_is_cut(name: str, loud: float) -> None:
    volts = np.random.default_rng(1).normal(0, loud, (2000, 2))
    whole = np.empty_like(volts)
    StageProcessor(ALL[name], sample_rate_hz=48_000, channels=2, quality=Quality.STANDARD).process(
        volts, whole
    )
    for size in (1, 17, 509):
        stage = StageProcessor(ALL[name], sample_rate_hz=48_000, channels=2, quality=Quality.STANDARD)
        cut = np.empty_like(volts)
        for start in range(0, len(volts), size):
            stage.process(volts[start : start + size], cut[start : start + size])
        np.testing.assert_array_equal(cut, whole)


def test_channels_do_not_touch_each_other() -> None:
    volts = np.random.default_rng(2).normal(0, 5.0, (3000, 3))
    together = run(TWO_SECTIONS, volts, 48_000)
    for c in range(3):
        np.testing.assert_array_equal(
            together[:, c], run(TWO_SECTIONS, np.ascontiguousarray(volts[:, c]), 48_000)
        )


def test_small_signals_superpose() -> None:
    a, b = np.random.default_rng(4).normal(0, 0.01, (2, 4000))
    both = run(TWO_SECTIONS, a + b, 48_000)
    np.testing.assert_allclose(both, run(TWO_SECTIONS, a, 48_000) + run(TWO_SECTIONS, b, 48_000), atol=1e-13)


def test_output_never_leaves_the_rails_in_the_circuit() -> None:
    volts = np.random.default_rng(6).normal(0, 60.0, (20_000, 1))
    for circuit in (LOW_PASS, HIGH_PASS, SALLEN_KEY, TWO_SECTIONS):
        stage = StageProcessor(circuit, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
        out = np.empty_like(volts)
        stage.process(volts, out)
        assert np.isfinite(out).all()
        for reading in stage.readings():
            assert reading.high_v <= RAIL_V
            assert reading.low_v >= -RAIL_V
            assert reading.unsolved_steps == 0
            assert reading.headroom_db == 0.0


def test_readings_of_a_clean_sine_are_its_volts() -> None:
    rate, f = 48_000, 200.0
    volts = np.sin(2 * np.pi * f * np.arange(rate) / rate)[:, None]
    stage = StageProcessor(LOW_PASS, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
    stage.process(volts[: rate // 2].copy(), np.empty((rate // 2, 1)))
    stage.clear_readings()
    stage.process(volts[rate // 2 :].copy(), np.empty((rate // 2, 1)))
    reading = stage.readings()[0]
    peak = abs(response(LOW_PASS, [f])[0])
    assert reading.peak_v == pytest.approx(peak, rel=1e-6)
    assert reading.headroom_db == pytest.approx(20 * math.log10(RAIL_V / peak), abs=1e-5)
    assert reading.slew_peak_v_per_s == pytest.approx(2 * np.pi * f * peak, rel=1e-4)
    # the output drives the feedback network alone: its far end is a virtual ground
    assert reading.current_peak_a == pytest.approx(1.0 / 10e3, rel=1e-4)
    assert reading.clip_events == 0
    assert reading.clipped_s == 0.0


def test_load_current_is_in_the_op_amps_current() -> None:
    circuit = net(
        [("R1", "in", "s", 10e3), ("R2", "s", "out", 10e3), ("Rload", "out", "gnd", 600.0)],
        [("gnd", "s", "out")],
    )
    volts = np.sin(2 * np.pi * 1000 * np.arange(4800) / 48_000)[:, None]
    stage = StageProcessor(circuit, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    stage.process(volts, np.empty_like(volts))
    assert stage.readings()[0].current_peak_a == pytest.approx(1.0 / 600 + 1.0 / 10e3, rel=1e-3)


def test_clip_events_count_visits_to_the_rail_and_their_time() -> None:
    rate = 48_000
    amplifier = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 10e3)], [("gnd", "s", "out")])
    volts = (
        3.0 * np.sin(2 * np.pi * 100 * (np.arange(rate) + 0.5) / rate)[:, None]
    )  # 30 V asked of 13.5 V rails
    stage = StageProcessor(amplifier, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
    flush = np.zeros((stage.latency_frames, 1))
    stage.process(volts, np.empty_like(volts))
    stage.process(flush, np.empty_like(flush))
    assert stage.readings()[0].clip_events == 200
    share = 1 - 2 / np.pi * math.asin(13.5 / 30.0)
    assert stage.readings()[0].clipped_s == pytest.approx(share, rel=1e-6)


def tone_glided(circuit: Netlist, values: dict[str, float]) -> Real:
    """0.4 s of a 200 Hz tone of 1 V peak at the output, parts set off at 0.2 s."""
    rate = 48_000
    volts = np.sin(2 * np.pi * 200 * np.arange(rate // 2) / rate)[:, None] / abs(
        response(circuit, [200.0])[0]
    )
    stage = StageProcessor(circuit, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
    out = np.empty_like(volts)
    stage.process(volts[: rate // 4], out[: rate // 4])
    stage.glide(stage.plan(values))
    assert stage.gliding
    stage.process(volts[rate // 4 :], out[rate // 4 :])
    assert not stage.gliding
    return out[rate // 20 :, 0]


@pytest.mark.parametrize(
    ("name", "values"),
    [
        ("low-pass", {"R2": 110e3}),
        ("low-pass", {"C1": 1.2e-9}),
        ("low-pass", {"R1": 11e3}),
        ("low-pass", {"R2": 200e3, "C1": 470e-12}),
        ("high-pass", {"C1": 12e-9}),
        ("high-pass", {"R1": 9.1e3}),
        ("two-sections", {"C2": 120e-9, "R4": 5.1e3}),
        ("sallen-key", {"C1": 2.2e-9, "C2": 1.2e-9}),
        ("ladder", {"C4": 2e-9, "L1": 0.12}),
    ],
)
def test_gliding_parts_do_not_click(name: str, values: dict[str, float]) -> None:
    out = tone_glided(ALL[name], values)
    spectrum = np.abs(np.fft.rfft(out * np.blackman(len(out)))) ** 2
    f = np.fft.rfftfreq(len(out), 1 / 48_000)
    tone = spectrum[(f > 150) & (f < 250)].sum()
    assert 10 * math.log10(spectrum[f > 4000].sum() / tone) < -90.0


def test_after_a_glide_the_circuit_is_the_new_one() -> None:
    rate = 48_000
    volts = np.random.default_rng(8).normal(0, 0.1, (rate, 1))
    stage = StageProcessor(LOW_PASS, sample_rate_hz=rate, channels=1, quality=Quality.STANDARD)
    stage.process(volts[:100], np.empty((100, 1)))
    stage.glide(stage.plan({"R2": 220e3, "C1": 330e-12}))
    assert stage.netlist.values["R2"] == 220e3
    out = np.empty_like(volts)
    stage.process(volts[100:], out[100:])
    fresh = run(LOW_PASS.with_values({"R2": 220e3, "C1": 330e-12}), volts[:, 0], rate)
    lag = stage.latency_frames
    np.testing.assert_allclose(out[rate // 2 :, 0], fresh[rate // 2 - lag : rate - lag], rtol=0, atol=1e-12)


def test_a_glide_takes_its_15_ms_and_a_second_one_waits_for_it() -> None:
    stage = StageProcessor(LOW_PASS, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    quiet = np.zeros((1, 1))
    stage.glide(stage.plan({"R2": 220e3}))
    assert stage.ready
    stage.glide(stage.plan({"R2": 330e3}))
    assert not stage.ready
    frames = 0
    while stage.gliding:
        stage.process(quiet, np.empty((1, 1)))
        frames += 1
    assert frames == pytest.approx(2 * GLIDE_S * 48_000, rel=0.05)
    assert stage.netlist.values["R2"] == 330e3


def test_a_capacitor_keeps_its_voltage_when_its_value_glides() -> None:
    # steady 1 V through the low-pass: -10 V out; while C1 glides no current flows in it, so the output stays
    volts = np.ones((20_000, 1))
    stage = StageProcessor(LOW_PASS, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    out = np.empty_like(volts)
    stage.process(volts[:10_000], out[:10_000])
    stage.glide(stage.plan({"C1": 10e-9}))
    stage.process(volts[10_000:], out[10_000:])
    np.testing.assert_allclose(out[9_000:], -10.0, atol=1e-6)


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_impossible_values_are_refused(value: float) -> None:
    stage = StageProcessor(LOW_PASS, sample_rate_hz=48_000, channels=1, quality=Quality.DRAFT)
    with pytest.raises(PartValueError, match="positive number"):
        stage.plan({"R2": value})


def test_unknown_parts_are_refused() -> None:
    stage = StageProcessor(LOW_PASS, sample_rate_hz=48_000, channels=1, quality=Quality.DRAFT)
    with pytest.raises(UnknownNameError, match="R9"):
        stage.plan({"R9": 1e3})


def test_perfect_op_amps_have_no_rails() -> None:
    circuit = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 100e3)], [("gnd", "s", "out")], rail_v=math.inf)
    out = run(circuit, 10.0 * np.sin(2 * np.pi * 500 * np.arange(4800) / 48_000), 48_000)
    assert np.abs(out).max() == pytest.approx(1000.0, rel=1e-4)


@pytest.mark.parametrize("rate", [8_000, 11_025, 22_050, 32_000, 88_200, 176_400, 192_000])
def test_any_rate_is_aligned_with_its_input(rate: int) -> None:
    t = np.arange(rate // 4) / rate
    f = rate / 16
    out = run(LADDER, np.sin(2 * np.pi * f * t), rate)
    h = response(LADDER, [f])[0]
    expected = np.abs(h) * np.sin(2 * np.pi * f * t + np.angle(h))
    middle = slice(rate // 8, rate // 8 + rate // 16)
    np.testing.assert_allclose(out[middle], expected[middle], atol=2e-3 * abs(h) + 1e-4)


def test_headroom_is_gone_at_a_rail_of_zero_volts_too() -> None:
    single = replace(LOW_PASS, opamps=(replace(LOW_PASS.opamps[0], high_v=9.0, low_v=0.0),))
    volts = 0.4 * np.sin(2 * np.pi * 100 * np.arange(4800) / 48_000)[:, None]
    stage = StageProcessor(single, sample_rate_hz=48_000, channels=1, quality=Quality.STANDARD)
    stage.process(volts, np.empty_like(volts))
    assert stage.readings()[0].headroom_db == 0.0
    assert stage.readings()[0].low_v == 0.0
