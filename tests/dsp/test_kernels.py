"""Each compiled function against its own Python source, and the pieces against plain quadrature."""

from __future__ import annotations

import numpy as np
import pytest

from preview.dsp import kernels, rate_kernels
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.nets import ALL

RNG = np.random.default_rng(11)


def parabola(start: float, mean: float, end: float, t: np.ndarray) -> np.ndarray:
    return start + (end - start) * t + 6 * (mean - (start + end) / 2) * t * (1 - t)


@pytest.mark.parametrize("case", range(60))
def test_clamped_mean_equals_fine_quadrature(case: int) -> None:
    start, mean, end = np.random.default_rng(case).uniform(-3, 3, 3)
    t = (np.arange(400_000) + 0.5) / 400_000
    path = parabola(start, mean, end, t)
    value, by_mean, by_end, share = kernels.clamped_mean(start, mean, end, -1.0, 1.0)
    inside = np.abs(path) < 1.0
    assert value == pytest.approx(np.clip(path, -1, 1).mean(), abs=1e-8)
    assert share == pytest.approx(1 - inside.mean(), abs=1e-5)
    assert by_mean == pytest.approx((inside * 6 * t * (1 - t)).mean(), abs=2e-5)
    assert by_end == pytest.approx((inside * (3 * t * t - 2 * t)).mean(), abs=2e-5)


def test_clamped_mean_of_a_path_inside_is_its_mean() -> None:
    assert kernels.clamped_mean(0.1, 0.2, 0.3, -1.0, 1.0) == (0.2, 1.0, 0.0, 0.0)


def test_clamped_mean_of_a_path_outside_is_the_limit() -> None:
    value, by_mean, by_end, share = kernels.clamped_mean(2.0, 3.0, 4.0, -1.0, 1.0)
    assert value == pytest.approx(1.0, abs=1e-15)
    assert (by_mean, by_end, share) == (0.0, 0.0, 1.0)


def test_clamped_mean_without_limits_is_the_mean() -> None:
    assert kernels.clamped_mean(-5.0, 7.0, 9.0, -np.inf, np.inf)[0] == 7.0


@pytest.mark.parametrize(
    ("name", "arguments"),
    [
        ("above_zero", (0.3, -1.0, 0.4)),
        ("above_zero", (0.0, -1.0, 0.4)),
        ("above_zero", (-2.0, 1.5, -0.1)),
        ("clamped_mean", (0.2, 0.9, 1.3, -1.0, 1.0)),
        ("clamped_mean", (-1.4, 0.2, 1.3, -1.0, 1.0)),
    ],
)
def test_scalar_kernels_equal_their_source(name: str, arguments: tuple[float, ...]) -> None:
    kernel = getattr(kernels, name)
    assert kernel(*arguments) == pytest.approx(kernel.py_func(*arguments), rel=1e-14, abs=1e-15)


@pytest.mark.parametrize("size", [1, 2, 3, 6])
def test_solve_small_equals_numpy(size: int) -> None:
    for function in (kernels.solve_small, kernels.solve_small.py_func):
        a, b = RNG.normal(size=(size, size)), RNG.normal(size=size)
        expected = np.linalg.solve(a, b)
        assert function(a.copy(), b, size)
        np.testing.assert_allclose(b, expected, rtol=1e-10)


def test_solve_small_refuses_a_singular_matrix() -> None:
    assert not kernels.solve_small(np.zeros((2, 2)), np.ones(2), 2)


def test_convolution_equals_numpy() -> None:
    taps, signal = RNG.normal(size=16), RNG.normal(size=100)
    for function in (rate_kernels.convolve_phase, rate_kernels.convolve_phase.py_func):
        result = np.empty(50)
        function(taps, signal, 20, 50, result)
        np.testing.assert_allclose(result, np.convolve(signal, taps)[20:70], rtol=1e-12)


@pytest.mark.parametrize("name", ["low-pass", "two-sections", "ladder"])
@pytest.mark.parametrize("gliding", [False, True])
def test_running_kernels_equal_their_source(
    name: str, gliding: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    circuit = ALL[name]
    volts = RNG.normal(0, 20.0, (80, 2))  # some 50 until the first comes through
    results = []
    for source in (False, True):
        if source:
            for name_of, names in (
                (
                    kernels,
                    (
                        "run_steps",
                        "begin_row",
                        "end_row",
                        "free_steps",
                        "held_steps",
                        "checked_steps",
                        "newton",
                        "recur",
                        "note_path",
                    ),
                ),
                (rate_kernels, ("up_block", "keep_last", "down_block")),
            ):
                for kernel in names:
                    monkeypatch.setattr(name_of, kernel, getattr(name_of, kernel).py_func)
        stage = StageProcessor(circuit, sample_rate_hz=48_000, channels=2, quality=Quality.DRAFT)
        if gliding:
            stage.glide(stage.plan({circuit.branches[0].designator: circuit.branches[0].value * 1.5}))
        out = np.empty_like(volts)
        stage.core.log.begin(4000)
        stage.process(volts, out)
        results.append((out, stage.readings(), np.array(stage.core.log.take())))
    np.testing.assert_allclose(results[0][0], results[1][0], rtol=1e-10, atol=1e-12)
    clips = sum(reading.clip_events for reading in results[0][1])
    assert clips > 0 or name == "ladder"
    assert (len(results[0][2]) > 0) == (clips > 0 and not gliding)
    np.testing.assert_allclose(results[0][2], results[1][2], rtol=1e-9, atol=1e-9)
    for compiled, plain in zip(results[0][1], results[1][1], strict=True):
        assert compiled.clip_events == plain.clip_events
        assert compiled.peak_v == pytest.approx(plain.peak_v, rel=1e-12)
        assert compiled.clipped_s == pytest.approx(plain.clipped_s, rel=1e-9)


def test_one_by_one_finds_what_newton_finds(monkeypatch: pytest.MonkeyPatch) -> None:
    # the fallback alone, on every limited step of two op-amps and of three in a loop
    volts = np.random.default_rng(4).normal(0, 60.0, (60, 1))
    for name in ("two-sections", "sallen-key"):
        stage = StageProcessor(ALL[name], sample_rate_hz=48_000, channels=1, quality=Quality.DRAFT)
        by_newton = np.empty_like(volts)
        stage.process(volts, by_newton)
        with monkeypatch.context() as patch:
            for kernel in ("run_steps", "checked_steps"):
                patch.setattr(kernels, kernel, getattr(kernels, kernel).py_func)
            patch.setattr(kernels, "newton", lambda *arguments: False)
            stage = StageProcessor(ALL[name], sample_rate_hz=48_000, channels=1, quality=Quality.DRAFT)
            alone = np.empty_like(volts)
            stage.process(volts, alone)
        assert sum(r.clip_events for r in stage.readings()) > 0
        assert sum(r.unsolved_steps for r in stage.readings()) == 0
        np.testing.assert_allclose(alone, by_newton, rtol=0, atol=1e-9)
