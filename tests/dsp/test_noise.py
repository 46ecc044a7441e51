"""Noise that is heard, against the exact spectrum of the same circuit by the adjoint network."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.linalg import expm

from preview.circuit.opamp import OpAmpModel
from preview.dsp.noise import _covariance
from preview.dsp.noise_kernels import evenly, fill_noise
from preview.dsp.stage import StageProcessor
from preview.network.noise import OutputNoise
from preview.values.noise import NoiseSetting
from preview.values.quality import Quality
from tests.dsp.test_macromodel import with_model
from tests.nets import LOW_PASS, SALLEN_KEY, net

Real = NDArray[np.float64]
RATE = 48_000
BANDS_HZ = 1000.0 * 10.0 ** (np.arange(-17, 14) / 10.0)
"""Third octaves from 20 Hz to 20 kHz (IEC 61260-1, base ten)."""

QUIET = OpAmpModel(
    "test",
    gain_bandwidth_hz=3e6,
    open_loop_gain=2e5,
    output_resistance_ohm=100.0,
    noise_v_rthz=18e-9,
    noise_corner_hz=300.0,
    noise_a_rthz=0.4e-12,
    noise_current_corner_hz=100.0,
)


def heard_noise(circuit: object, seconds: float, setting: NoiseSetting, channels: int = 2) -> Real:
    stage = StageProcessor(
        circuit,  # type: ignore[arg-type]
        sample_rate_hz=RATE,
        channels=channels,
        quality=Quality.STANDARD,
        noise=setting,
    )
    out = np.zeros((round(seconds * RATE), channels))
    quiet = np.zeros((4096, channels))
    for start in range(0, len(out), 4096):
        piece = out[start : start + 4096]
        stage.process(quiet[: len(piece)], piece)
    return out


@pytest.mark.slow
@pytest.mark.parametrize("name", ["inverting", "sallen-key", "passive"])
def test_heard_noise_of_20_s_has_the_exact_spectrum_in_third_octaves(name: str) -> None:
    circuit = {
        "inverting": with_model(LOW_PASS, QUIET),
        "sallen-key": with_model(SALLEN_KEY, QUIET),
        "passive": net(
            [("R1", "in", "out", 100e3), ("C1", "out", "gnd", 1e-9), ("R2", "out", "gnd", 1e6)], []
        ),
    }[name]
    # 48 channels at once: one channel's 20 Hz third octave scatters by 4.3 / sqrt(20 * 4.6) = 0.45 dB by itself
    out = heard_noise(circuit, 20.0, NoiseSetting(seed=3), channels=48)
    power = np.mean(np.abs(np.fft.rfft(out, axis=0)) ** 2, axis=1) * 2 / len(out) / RATE
    f = np.fft.rfftfreq(len(out), 1 / RATE)
    exact = OutputNoise(circuit, temperature_k=298.15)
    differences_db = []
    for centre in BANDS_HZ:
        inside = (f >= centre * 10**-0.05) & (f < centre * 10**0.05)
        density = np.mean(exact.spectrum(f[inside]).output_v_rthz ** 2)
        differences_db.append(10 * np.log10(np.mean(power[inside]) / density))
    print(f"{name}: worst {np.abs(differences_db).max():.3f} dB")  # noqa: T201 - shown with -s: what was reached
    assert np.abs(differences_db).max() < 0.2


def test_white_noise_alone_adds_up_to_the_exact_total() -> None:
    circuit = with_model(LOW_PASS, replace(QUIET, noise_corner_hz=0.0, noise_current_corner_hz=0.0))
    out = heard_noise(circuit, 2.0, NoiseSetting(), channels=8)
    power = np.mean(np.abs(np.fft.rfft(out, axis=0)) ** 2, axis=1) * 2 / len(out) ** 2
    f = np.fft.rfftfreq(len(out), 1 / RATE)
    inside = (f > 200) & (f < 20_000)
    exact = OutputNoise(circuit, temperature_k=298.15).total(200.0, 20_000.0).output_vrms
    assert np.sqrt(power[inside].sum()) == pytest.approx(exact, rel=5e-3)


def test_gain_and_seed_do_what_they_say() -> None:
    circuit = with_model(LOW_PASS, QUIET)
    plain = heard_noise(circuit, 1.0, NoiseSetting())
    np.testing.assert_allclose(
        heard_noise(circuit, 1.0, NoiseSetting(gain_db=40.0)), 100.0 * plain, rtol=1e-6, atol=1e-12
    )
    np.testing.assert_array_equal(heard_noise(circuit, 1.0, NoiseSetting()), plain)
    assert np.abs(np.corrcoef(heard_noise(circuit, 1.0, NoiseSetting(seed=2))[:, 0], plain[:, 0])[0, 1]) < 0.1
    assert np.abs(np.corrcoef(plain.T)[0, 1]) < 0.1  # each channel has its own


def test_noise_does_not_depend_on_how_the_signal_is_cut() -> None:
    circuit = with_model(LOW_PASS, replace(QUIET, slew_up_v_per_s=1e6, slew_down_v_per_s=1e6))
    volts = np.random.default_rng(1).normal(0, 2.0, (700, 2))
    results = []
    for size in (700, 1, 17):
        stage = StageProcessor(
            circuit, sample_rate_hz=RATE, channels=2, quality=Quality.DRAFT, noise=NoiseSetting(gain_db=60.0)
        )
        out = np.empty_like(volts)
        for start in range(0, len(volts), size):
            stage.process(volts[start : start + size], out[start : start + size])
        results.append(out)
    np.testing.assert_array_equal(results[1], results[0])
    np.testing.assert_array_equal(results[2], results[0])


def test_a_state_that_is_taken_back_to_brings_the_same_noise_again() -> None:
    circuit = with_model(LOW_PASS, QUIET)
    stage = StageProcessor(
        circuit, sample_rate_hz=48_000, channels=2, quality=Quality.DRAFT, noise=NoiseSetting()
    )
    quiet = np.zeros((700, 2))
    first, again, later = np.empty((3, 700, 2))
    stage.process(quiet, later)
    taken = stage.snapshot()
    stage.process(quiet, first)
    stage.process(quiet, later)
    stage.restore(taken)
    stage.process(quiet, again)
    assert np.abs(first).max() > 0.0
    np.testing.assert_array_equal(again, first)


def test_the_covariance_of_a_step_equals_its_integral() -> None:
    rng = np.random.default_rng(4)
    A, B = rng.normal(0, 3, (4, 4)) - 6 * np.eye(4), rng.normal(0, 1, (4, 3))
    x, w = np.polynomial.legendre.leggauss(60)
    integral = sum(wi / 2 * (e := expm(A * (xi + 1) / 2) @ B) @ e.T for xi, wi in zip(x, w, strict=True))
    np.testing.assert_allclose(_covariance(A, B), integral, rtol=1e-9, atol=1e-12)


def test_the_numbers_are_even_white_and_of_unit_variance() -> None:
    numbers = np.array([evenly(np.uint64(i)) for i in range(100_000)])
    assert np.abs(numbers).max() <= np.sqrt(3)
    assert numbers.mean() == pytest.approx(0.0, abs=0.01)
    assert numbers.var() == pytest.approx(1.0, abs=0.01)
    spectrum = np.abs(np.fft.rfft(numbers)[1:]) ** 2 / len(numbers)
    assert spectrum.reshape(100, -1).mean(axis=1) == pytest.approx(1.0, abs=0.2)


def test_the_noise_kernel_equals_its_source() -> None:
    rng = np.random.default_rng(5)
    arguments = (7, 1, 100, 9, 4, rng.normal(0, 1, (3, 3)), rng.normal(0, 1, (3, 2)), np.array([0.1, 0.2]))
    poles, zeros = np.array([0.99, 0.9]), np.array([0.97, 0.7])
    memories, results = np.zeros((2, 2, 3, 2)), np.zeros((2, 3, 9))
    fill_noise(*arguments, poles, zeros, memories[0], results[0])
    with np.errstate(over="ignore"):
        fill_noise.py_func(*arguments, poles, zeros, memories[1], results[1])
    np.testing.assert_allclose(results[1], results[0], rtol=1e-12)
