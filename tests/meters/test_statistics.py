"""Sample peak, RMS, crest factor and DC against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import lfilter

from preview.meters.crest import CrestMeter
from preview.meters.dc import DC_TIME_S, DcMeter
from preview.meters.rms import FAST_S, SLOW_S, RmsMeter
from preview.meters.sample_peak import SamplePeakMeter
from tests.meters.signals import db, feed, row, sine

RATE = 48_000


def test_the_sample_peak_keeps_both_extremes() -> None:
    reading = feed(SamplePeakMeter(RATE, 2), np.array([[1.0, -5.0], [-3.0, 2.0], [0.5, 0.25]]))
    assert reading.max_v == (1.0, 2.0)
    assert reading.min_v == (-3.0, -5.0)
    assert reading.peak_v == (3.0, 5.0)


def test_the_sample_peak_rises_at_once_and_falls_20_db_in_1_7_s() -> None:
    published = row("ppm", type="digital peak")
    meter = SamplePeakMeter(RATE, 1)
    assert feed(meter, np.array([0.0, -2.0])).shown_v == (2.0,)
    fallen = feed(meter, np.zeros(round(published["return_s"] * RATE))).shown_v[0]
    assert db(fallen / 2.0) == pytest.approx(-published["return_db"], abs=1e-3)
    assert meter.read().peak_v == (2.0,)


def test_the_rms_of_all_is_that_of_the_closed_forms() -> None:
    assert feed(RmsMeter(RATE, 1), sine(RATE, 1000, 1.0, 8.7)).mean_rms_v[0] == pytest.approx(
        8.7 / math.sqrt(2), rel=1e-12
    )
    assert feed(RmsMeter(RATE, 1), np.full(100, -3.0)).mean_rms_v == (3.0,)


@pytest.mark.parametrize(("time_s", "decay_db_per_s"), [(FAST_S, 34.7), (SLOW_S, 4.34)])
def test_the_running_rms_decays_as_iec_61672_says(time_s: float, decay_db_per_s: float) -> None:
    # IEC 61672-1: 10 log10(e) / tau, 34.7 dB/s for F and 4.3 dB/s for S
    meter = RmsMeter(RATE, 1, time_s=time_s)
    before = feed(meter, sine(RATE, 1000, 10 * time_s)).rms_v[0]
    after = feed(meter, np.zeros(RATE // 2)).rms_v[0]
    assert -2 * db(after / before) == pytest.approx(decay_db_per_s, abs=0.05)
    assert meter.read().time_s == time_s
    assert meter.read().max_rms_v[0] == pytest.approx(before, rel=1e-3)


def test_the_running_rms_is_the_stated_recursion() -> None:
    volts = np.random.default_rng(3).standard_normal(20_000)
    a = 1 - math.exp(-1 / (FAST_S * RATE))
    expected = math.sqrt(lfilter([a], [1, a - 1], volts**2)[-1])
    assert feed(RmsMeter(RATE, 1), volts).rms_v[0] == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize(
    ("volts", "ratio"),
    [
        (sine(RATE, 1000, 1.0, 5.0), math.sqrt(2)),
        (np.sign(sine(RATE, 1000, 1.0, phase_deg=1.0)), 1.0),
        (1 - 2 * np.abs(((np.arange(48_000) + 0.5) / 48_000) % 1 - 0.5) * 2, math.sqrt(3)),  # a triangle
    ],
)
def test_the_crest_factor_is_that_of_the_closed_forms(volts: np.ndarray, ratio: float) -> None:
    reading = feed(CrestMeter(RATE, 1), volts)
    assert reading.crest_ratio[0] == pytest.approx(ratio, rel=1e-4)
    assert reading.crest_db[0] == pytest.approx(db(ratio), abs=1e-3)


def test_silence_has_no_crest_factor() -> None:
    reading = feed(CrestMeter(RATE, 1), np.zeros(100))
    assert math.isnan(reading.crest_ratio[0])
    assert math.isnan(reading.crest_db[0])


def test_dc_is_found_beneath_a_tone() -> None:
    reading = feed(DcMeter(RATE, 2), np.column_stack([0.01 + sine(RATE, 50, 10.0), np.full(10 * RATE, -2.0)]))
    # two low-passes of 0.5 s: 50 Hz comes through 1 / (1 + (2 pi 50 0.5)^2) = 4.1e-5
    assert reading.dc_v[0] == pytest.approx(0.01, abs=4.2e-5)
    assert reading.mean_v[0] == pytest.approx(0.01, abs=1e-12)
    assert reading.dc_v[1] == pytest.approx(-2.0, abs=1e-6)


def test_a_step_of_dc_shows_as_two_low_passes_in_a_row_do() -> None:
    reading = feed(DcMeter(RATE, 1), np.ones(round(DC_TIME_S * RATE)))
    assert reading.dc_v[0] == pytest.approx(1 - 2 / math.e, abs=1e-4)
