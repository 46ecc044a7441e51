"""Diodes and class 2 capacitors in the running circuit, against scipy's stiff solvers on hand-written equations."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.interpolate import PchipInterpolator
from scipy.optimize import brentq

from preview.circuit.netlist import Charge, FixedNode, Junction, Netlist, Port
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.dsp.test_macromodel import error_db, lines, run, solved, with_model
from tests.nets import net

Real = NDArray[np.float64]
RATE = 48_000
PROMISE = {Quality.STANDARD: -60.0, Quality.FINE: -80.0}

SIGNAL = Junction(saturation_a=2.5e-9, slope_v=1.75 * 0.02585, series_ohm=0.6)
"""A silicon signal diode: 2.5 nA, emission 1.75, 0.6 ohm (common practice, from memory)."""


def port(name: str, a: str, b: str, law: Junction | Charge = SIGNAL) -> Port:
    return Port(name, a, b, law)


def clipper(model: OpAmpModel) -> Netlist:
    """Inverting low-pass of gain 10 with a diode each way across the feedback."""
    circuit = net(
        [("R1", "in", "s", 10e3), ("R2", "s", "out", 100e3), ("C1", "s", "out", 220e-12)],
        [("gnd", "s", "out")],
    )
    both = (port("D1", "s", "out"), port("D2", "out", "s"))
    return replace(with_model(circuit, model, 13.5), ports=both)


def sine(f: float, peak: float, seconds: float) -> Real:
    return np.asarray(peak * np.sin(2 * np.pi * f * np.arange(round(seconds * RATE)) / RATE))


def current_of(law: Junction, v: float) -> float:
    """Current of a diode at a terminal voltage, by a bracketed root of Shockley's equation."""

    def excess(i: float) -> float:
        return law.saturation_a * math.expm1((v - i * law.series_ohm) / law.slope_v) - i

    return float(
        brentq(excess, -law.saturation_a, max(v, 0.0) / law.series_ohm + 1e-12, xtol=1e-18, rtol=1e-14)
    )


def pair_currents() -> tuple[Real, Real]:
    """Current of two diodes back to back by voltage, as a table with its voltages."""
    v = np.linspace(-1.6, 1.6, 6401)
    forward = np.array([current_of(SIGNAL, x) for x in v])
    return v, forward - forward[::-1]


@pytest.mark.parametrize("quality", list(PROMISE))
@pytest.mark.parametrize("f", [1000, pytest.param(5000, marks=pytest.mark.slow)])
def test_back_to_back_diodes_in_the_feedback_20_db_over(f: int, quality: Quality) -> None:
    # 20 dB over: the linear stage would give 10 times the 0.6 V at which the diodes begin to take over
    from scipy.interpolate import CubicSpline

    amplitude, wt = 0.6, 2 * np.pi * 3e6
    table = CubicSpline(*pair_currents())

    def rates(t: float, z: Real) -> Real:  # z: v(s) - w, w
        vs = z[0] + z[1]
        u = amplitude * np.sin(2 * np.pi * f * t)
        return np.array([((u - vs) / 10e3 - z[0] / 100e3 - table(z[0])) / 220e-12, -wt * vs])

    points, periods = 8192, 8
    at = (periods - 1 + np.arange(points) / points) / f
    solved = solve_ivp(
        rates,
        (0, periods / f),
        np.zeros(2),
        method="Radau",
        rtol=1e-9,
        atol=1e-12,
        max_step=1 / f / 400,
        t_eval=at,
    )
    expected = np.fft.rfft(solved.y[1]) / points * 2
    order = np.arange(1, 20_000 // f + 1)
    model = OpAmpModel("test", gain_bandwidth_hz=3e6, output_resistance_ohm=0.0)
    out, stage = run(clipper(model), amplitude * np.sin(2 * np.pi * f * np.arange(2 * RATE) / RATE), quality)
    found_db = error_db(lines(out, f, order), expected[order])
    print(f"{quality} {f} Hz: {found_db:.1f} dB")  # noqa: T201 - shown with -s: the figure that was reached
    assert found_db < PROMISE[quality]
    assert stage.readings()[0].unsolved_steps == 0


@pytest.mark.parametrize("quality", [Quality.DRAFT, Quality.STANDARD])
def test_a_rectifier_charges_its_capacitor_as_a_stiff_solver_says(quality: Quality) -> None:
    circuit = replace(
        net(
            [
                ("R1", "in", "a", 100.0),
                ("C1", "out", "gnd", 1e-6),
                ("R2", "out", "gnd", 10e3),
                ("R3", "a", "out", 1e9),
            ],
            [],
        ),
        ports=(port("D1", "a", "out"),),
    )
    f, amplitude = 200, 5.0
    volts = amplitude * np.sin(2 * np.pi * f * np.arange(RATE // 10) / RATE)
    law = SIGNAL

    def through(x: float) -> float:
        # source, 100 ohm and the diode in series
        if x <= 0.0:
            return -law.saturation_a
        series = replace(law, series_ohm=law.series_ohm + 100.0)
        return current_of(series, x)

    def rates(t: float, z: Real) -> Real:
        x = amplitude * np.sin(2 * np.pi * f * t) - z[0]
        return np.array([(through(x) + x / 1e9 - z[0] / 10e3) / 1e-6])

    solved = solve_ivp(
        rates,
        (0, 0.09),
        [0.0],
        method="Radau",
        rtol=1e-9,
        atol=1e-11,
        max_step=2e-5,
        t_eval=[0.02, 0.05, 0.08],
    )
    out, _ = run(circuit, volts, quality)
    np.testing.assert_allclose(out[[960, 2400, 3840]], solved.y[0], rtol=2e-4)


@pytest.mark.parametrize("aside_ohm", [1e5, None], ids=["with a way aside", "in series alone"])
def test_an_inductor_keeps_its_current_where_only_a_diode_lets_it_flow(aside_ohm: float | None) -> None:
    # 0.1 H and a diode into 200 ohm: 0.5 ms while it conducts, next to no time while it blocks
    f, amplitude, henry, load = 1000, 5.0, 0.1, 200.0
    rows = [("L1", "in", "a", henry), ("R1", "out", "gnd", load)]
    if aside_ohm is not None:
        rows.append(("R2", "a", "gnd", aside_ohm))
    circuit = replace(net(rows, []), ports=(port("D1", "a", "out"),))
    # voltage after the inductor and current of the diode, by the inductor's current
    junction_v = np.concatenate([np.linspace(-500.0, -0.5, 2000), np.linspace(-0.499, 0.9, 20_000)])
    diode_a = SIGNAL.saturation_a * np.expm1(junction_v / SIGNAL.slope_v)
    after_v = junction_v + diode_a * (SIGNAL.series_ohm + load)
    through_a = diode_a + after_v / (aside_ohm or 100e6)
    voltage, current = (PchipInterpolator(through_a, y) for y in (after_v, diode_a))

    def rates(t: float, z: Real) -> Real:
        return np.array([(amplitude * np.sin(2 * np.pi * f * t) - voltage(z[0])) / henry])

    expected = solved(rates, lambda _t, z: load * current(z[0]), 1, f, 4)
    order = np.arange(20)
    out, stage = run(circuit, sine(f, amplitude, 2.0), Quality.STANDARD)
    found_db = error_db(lines(out, f, order), expected[order])
    print(f"{found_db:.1f} dB")  # noqa: T201 - shown with -s: the figure that was reached
    assert found_db < PROMISE[Quality.STANDARD]
    assert stage.readings() == ()


@pytest.mark.parametrize("ohm", [1.0, 50.0])
@pytest.mark.parametrize("farad", [1e-9, pytest.param(100e-9, marks=pytest.mark.slow)])
def test_a_largest_current_is_kept_beside_a_diode_as_a_stiff_solver_says(farad: float, ohm: float) -> None:
    # a follower at its 5 mA into 1 k, a capacitor, and 220 ohm with a diode; what is beyond the limit is taken back
    # within a tenth of a picosecond by the solver, at once here
    f, amplitude, wt, most_a = 1000, 5.0, 2 * np.pi * 10e6, 5e-3
    circuit = net(
        [("R1", "out", "gnd", 1e3), ("C1", "out", "gnd", farad), ("R2", "out", "d", 220.0)],
        [("in", "out", "out")],
    )
    model = OpAmpModel(
        "test",
        gain_bandwidth_hz=10e6,
        output_resistance_ohm=ohm,
        current_source_a=most_a,
        current_sink_a=most_a,
    )
    circuit = replace(with_model(circuit, model, 13.5), ports=(port("D1", "d", "gnd"),))
    junction_v = np.concatenate([np.linspace(-50.0, -0.5, 100), np.linspace(-0.499, 0.9, 20_000)])
    diode_a = SIGNAL.saturation_a * np.expm1(junction_v / SIGNAL.slope_v)
    through = PchipInterpolator(junction_v + diode_a * (SIGNAL.series_ohm + 220.0), diode_a)

    def rates(t: float, z: Real) -> Real:  # z: inner voltage, output
        u = amplitude * np.sin(2 * np.pi * f * t)
        amps = (z[0] - z[1]) / ohm
        beyond_v = ohm * (amps - np.clip(amps, -most_a, most_a))
        return np.array(
            [wt * (u - z[1]) - 5e14 / ohm * beyond_v, (amps - z[1] / 1e3 - through(z[1])) / farad]
        )

    expected = solved(rates, lambda _t, z: z[1], 2, f, 3)
    order = np.arange(20)
    out, stage = run(circuit, sine(f, amplitude, 2.0), Quality.STANDARD)
    found_db = error_db(lines(out, f, order), expected[order])
    print(f"{farad} {ohm}: {found_db:.1f} dB")  # noqa: T201 - shown with -s: the figure that was reached
    assert found_db < PROMISE[Quality.STANDARD]
    assert stage.readings()[0].unsolved_steps == 0


def test_a_zener_holds_its_voltage_at_its_current() -> None:
    # 5.1 V at 5 mA: a supply of 10.1 V through 1 k gives just that current
    zener = Junction(1e-14, 0.026, 1.0, breakdown_v=5.1, breakdown_a=5e-3, breakdown_slope_v=0.02)
    circuit = replace(
        net([("R1", "v", "out", 1e3), ("R2", "in", "gnd", 1e3), ("R3", "in", "out", 1e12)], []),
        ports=(port("D1", "gnd", "out", zener),),
        fixed=(FixedNode("V1", "v", 10.1),),
    )
    out, _ = run(circuit, np.zeros(200), Quality.DRAFT)
    np.testing.assert_allclose(out, 5.1, atol=1e-6)


def test_a_passive_circuit_with_diodes_never_gains_energy() -> None:
    rng = np.random.default_rng(5)
    circuit = replace(
        net(
            [
                ("R1", "in", "a", 1e3),
                ("C1", "a", "gnd", 47e-9),
                ("L1", "a", "b", 0.1),
                ("R2", "b", "gnd", 10e3),
                ("R3", "b", "out", 2.2e3),
                ("C2", "out", "gnd", 10e-9),
            ],
            [],
        ),
        ports=(port("D1", "b", "gnd"), port("D2", "gnd", "b"), port("D3", "out", "gnd")),
    )
    volts = np.concatenate([rng.normal(0, 20.0, 2000), np.zeros(4000)])[:, None]
    stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=1, quality=Quality.STANDARD)
    model = stage._core._model  # type: ignore[attr-defined]
    energies = []
    out = np.empty((1, 1))
    for sample in volts:
        stage.process(sample[None], out)
        state = stage._core._state[0]  # type: ignore[attr-defined]
        # physical states: voltages along the tree of capacitors, here of C1 and C2 to gnd, then the coil's current
        energies.append(0.5 * np.sum(np.array([47e-9, 10e-9, 0.1]) * state**2))
    assert model.size == 3
    free = np.array(energies[2000 + stage.latency_frames :])
    assert energies[1000] > 1e-9
    assert np.all(np.diff(free) <= 1e-12 * free[:-1] + 1e-30)


def test_a_class_2_capacitor_droops_as_its_charge_says() -> None:
    # charge C V0 atan(v / V0) behind 10 k: against a stiff solver on the same charge
    farad, half_v, ohm = 100e-9, 10.0, 10e3
    circuit = replace(
        net([("R1", "in", "out", ohm), ("C1", "out", "gnd", farad)], []),
        ports=(port("C1", "out", "gnd", Charge(farad, half_v)),),
    )
    f, amplitude = 200, 30.0

    def rates(t: float, z: Real) -> Real:
        v = z[0]
        return np.array(
            [(amplitude * np.sin(2 * np.pi * f * t) - v) / ohm / (farad / (1 + (v / half_v) ** 2))]
        )

    at = np.arange(1, 40) / 1000
    solved = solve_ivp(
        rates, (0, 0.04), [0.0], method="Radau", rtol=1e-9, atol=1e-10, max_step=2e-5, t_eval=at
    )
    volts = amplitude * np.sin(2 * np.pi * f * np.arange(RATE // 20) / RATE)
    out, _ = run(circuit, volts, Quality.STANDARD)
    np.testing.assert_allclose(out[(at * RATE).round().astype(int)], solved.y[0], atol=3e-3)


@pytest.mark.parametrize("loud", [0.3, 30.0])
def test_samples_with_diodes_do_not_depend_on_how_the_signal_is_cut(loud: float) -> None:
    circuit = clipper(OpAmpModel("test", gain_bandwidth_hz=3e6, slew_up_v_per_s=1e6, slew_down_v_per_s=1e6))
    volts = np.random.default_rng(1).normal(0, loud, (600, 2))

    def new() -> StageProcessor:
        return StageProcessor(circuit, sample_rate_hz=48_000, channels=2, quality=Quality.DRAFT)

    whole = np.empty_like(volts)
    new().process(volts, whole)
    assert np.isfinite(whole).all()
    for size in (1, 17):
        stage, cut = new(), np.empty_like(volts)
        for start in range(0, len(volts), size):
            stage.process(volts[start : start + size], cut[start : start + size])
        np.testing.assert_array_equal(cut, whole)
