"""The true peak meter against BS.1770 annex 2, EBU Tech 3341 and the closed form of a sine."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.meters.intake import interpolator
from preview.meters.true_peak import TruePeakMeter
from tests.meters.signals import FULL_SCALE_V, PUBLISHED, Real, db, feed, row, sine

CASES = {
    # amplitude re full scale and phase, from the signals of the published rows
    "15": (0.5, 0.0),
    "16": (0.5, 45.0),
    "17": (0.5, 60.0),
    "18": (0.5, 67.5),
    "19": (1.41, 45.0),
}


def tapered(volts: Real, rate: float) -> Real:
    n = round(0.02 * rate)
    ramp = np.sin(np.pi / 2 * np.arange(n) / n) ** 2
    return volts * np.concatenate([ramp, np.ones(len(volts) - 2 * n), ramp[::-1]])


@pytest.mark.parametrize("rate", [44_100, 48_000, 96_000])
@pytest.mark.parametrize("case", list(CASES))
def test_ebu_3341_true_peak_cases(case: str, rate: int) -> None:
    published = row("ebu3341_case", case=case)
    amplitude, phase = CASES[case]
    assert f"amplitude {amplitude:g} of full scale, phase {phase:g} degrees" in published["signal"]
    volts = tapered(sine(rate, rate / 4, 1.0, amplitude * FULL_SCALE_V, phase), rate)
    got = db(feed(TruePeakMeter(rate, 2), np.column_stack([volts, volts])).peak_v[1] / FULL_SCALE_V)
    wanted = published["expected"]["max_true_peak_dbtp"]
    assert wanted - published["tolerance_minus_db"] <= got <= wanted + published["tolerance_plus_db"]
    # The sine's own peak, less at most the under-read of so many phases (annex 2, appendix: its formula).
    under_read = -db(math.cos(math.pi * 0.25 / len(interpolator(rate))))
    assert -under_read - 0.005 < got - db(amplitude) < 0.02


def test_the_published_under_read_is_that_of_its_formula() -> None:
    table = row("true_peak", name="max_under_read_db")
    for ratio, at_45, at_50 in zip(
        table["ratio"], table["f_norm_0_45_db"], table["f_norm_0_5_db"], strict=True
    ):
        assert -db(math.cos(math.pi * 0.45 / ratio)) == pytest.approx(at_45, abs=5.01e-4)
        assert -db(math.cos(math.pi * 0.5 / ratio)) == pytest.approx(at_50, abs=5.01e-4)


@pytest.mark.parametrize(("rate", "phases"), [(44_100, 8), (48_000, 8), (96_000, 4), (192_000, 4)])
def test_a_sine_in_the_worst_phase_reads_no_lower_than_the_published_under_read(
    rate: int, phases: int
) -> None:
    # BS.1770-5 annex 2, appendix: under-read of n times oversampling at 0.45 of the sample rate
    table = row("true_peak", name="max_under_read_db")
    allowed = table["f_norm_0_45_db"][table["ratio"].index(phases)]
    assert len(interpolator(rate)) == phases
    worst = []
    for frequency_hz in np.linspace(0.02, min(0.45 * rate, 20_000) / rate, 12) * rate:
        for phase in np.arange(0, 180, 7.5):
            volts = tapered(sine(rate, frequency_hz, 0.06, 1.0, phase), rate)
            worst.append(db(feed(TruePeakMeter(rate, 1), volts).peak_v[0]))
    assert min(worst) > -allowed - 0.005
    assert max(worst) < 0.03  # the interpolator's own ripple


def test_the_interpolator_is_flat_to_20_khz_at_44_1_khz() -> None:
    taps = interpolator(44_100)
    f = np.linspace(0, 20_000 / 44_100, 500)
    for p, row_of in enumerate(taps):
        # against the ideal delay of p / 8 of a sample
        at = np.arange(len(row_of)) - len(row_of) // 2 + p / len(taps)
        h = np.exp(-2j * np.pi * np.outer(f, at)) @ row_of
        assert np.abs(20 * np.log10(np.abs(h))).max() < 0.03
        assert np.abs(np.angle(h)).max() < 0.005


def test_a_single_sample_counts_at_once_and_the_peak_around_it_20_frames_later() -> None:
    meter = TruePeakMeter(48_000, 1)
    meter.feed(np.array([[0.0], [1.0], [1.0]]))
    assert meter.read().peak_v == (1.0,)
    meter.feed(np.zeros((20, 1)))
    # Closed form: two equal samples, sinc(1/2) + sinc(1/2) = 4/pi between them, less what the window takes.
    assert meter.read().peak_v[0] == pytest.approx(4 / math.pi, abs=0.005)


def test_the_reading_falls_20_db_in_1_7_s() -> None:
    digital = row("ppm", type="digital peak")
    meter = TruePeakMeter(48_000, 1)
    feed(meter, sine(48_000, 1000, 0.1))
    before = meter.read().shown_v[0]
    feed(meter, np.zeros(round(digital["return_s"] * 48_000)))
    assert db(meter.read().shown_v[0] / before) == pytest.approx(-digital["return_db"], abs=0.02)
    assert meter.read().peak_v[0] == pytest.approx(1.0, abs=1e-3)


def test_published_true_peak_cases_are_all_run() -> None:
    cases = {r["case"] for r in PUBLISHED["ebu3341_case"] if "max_true_peak_dbtp" in r["expected"]}
    assert cases == set(CASES)


@pytest.mark.parametrize("only_peak", [False, True])
def test_what_is_passed_over_changes_no_reading(only_peak: bool) -> None:
    rng = np.random.default_rng(6)
    volts = rng.normal(0, 1, (60_000, 2)) * np.exp(rng.uniform(-6, 0, (60, 2))).repeat(1000, axis=0)
    meter, taps = TruePeakMeter(48_000, 2, only_peak=only_peak), interpolator(48_000)
    fall = 10 ** (-20 / 1.7 / 48_000 / 20)
    between = np.stack([np.abs(np.apply_along_axis(np.convolve, 0, volts, row)) for row in taps]).max(axis=0)
    most = np.maximum(between[: len(volts)], np.abs(volts))
    assert feed(meter, volts).peak_v == pytest.approx(most.max(axis=0), rel=1e-12)
    if not only_peak:
        decay = np.arange(len(volts), 0, -1)[:, None] - 1
        assert meter.read().shown_v == pytest.approx((most * fall**decay).max(axis=0), rel=1e-6)
