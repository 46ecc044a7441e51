"""The level meter against closed forms and against the recursion it states, frame by frame."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import lfilter

from preview.meters.level import RMS_TIME_S, LevelMeter

RATE = 48_000


def noise(frames: int, channels: int = 2) -> np.ndarray:
    return np.random.default_rng(9).standard_normal((frames, channels)) * [3.0, 0.01, 7.0][:channels]


def test_a_long_sine_reads_its_peak_and_its_rms() -> None:
    # Closed form: a sine of amplitude A has RMS A / sqrt(2). 1 kHz on 48 kHz samples its own peak.
    time = np.arange(5 * RATE) / RATE
    meter = LevelMeter(RATE, 1)
    meter.feed(8.7 * np.sin(2 * np.pi * 1000 * time)[:, np.newaxis])
    reading = meter.read()
    assert reading.peak_v[0] == pytest.approx(8.7, rel=1e-12)
    # Ripple of the mean square at 2 kHz through 0.3 s: 1 / (2 x 2 pi 2000 x 0.3) = 1.3e-4 of it at most.
    assert reading.rms_v[0] == pytest.approx(8.7 / math.sqrt(2), rel=1.4e-4)


@pytest.mark.parametrize("rate", [8_000, 44_100, 192_000])
def test_a_step_reaches_63_percent_of_its_mean_square_in_the_time_constant(rate: int) -> None:
    meter = LevelMeter(rate, 1)
    frames = round(RMS_TIME_S * rate)
    meter.feed(np.full((frames, 1), 2.0))
    assert meter.read().rms_v[0] ** 2 / 4 == pytest.approx(1 - math.exp(-1), rel=1e-9)


def test_the_rms_is_the_stated_recursion() -> None:
    volts = noise(20_000)
    a = 1 - math.exp(-1 / (RMS_TIME_S * RATE))
    meter = LevelMeter(RATE, 2)
    meter.feed(volts)
    expected = np.sqrt(lfilter([a], [1, a - 1], volts**2, axis=0)[-1])
    np.testing.assert_allclose(meter.read().rms_v, expected, rtol=1e-11)


@pytest.mark.parametrize("chunk", [1, 17, 509, 4096, 4097])
def test_the_reading_does_not_depend_on_how_the_signal_is_cut(chunk: int) -> None:
    volts = noise(12_000, 3)
    whole, cut = LevelMeter(RATE, 3), LevelMeter(RATE, 3)
    whole.feed(volts)
    for start in range(0, len(volts), chunk):
        cut.feed(volts[start : start + chunk])
    one, other = whole.read(), cut.read()
    assert other.peak_v == one.peak_v
    assert other.hold_v == one.hold_v
    np.testing.assert_allclose(other.rms_v, one.rms_v, rtol=1e-12)


def test_the_peak_is_since_the_last_reading_and_the_hold_since_it_was_cleared() -> None:
    meter = LevelMeter(RATE, 2)
    meter.feed(np.array([[1.0, -5.0], [-3.0, 2.0]]))
    assert meter.read().peak_v == (3.0, 5.0)
    meter.feed(np.array([[0.5, -0.25]]))
    reading = meter.read()
    assert reading.peak_v == (0.5, 0.25)
    assert reading.hold_v == (3.0, 5.0)
    meter.clear_hold()
    assert meter.read().peak_v == (0.0, 0.0)
    meter.feed(np.array([[0.1, 0.2]]))
    assert meter.read().hold_v == (0.1, 0.2)


def test_a_peak_written_just_after_the_reading_was_taken_is_not_lost() -> None:
    meter = LevelMeter(RATE, 1)
    in_flight = meter._peak  # the feeding thread holds it while the reader exchanges it
    meter.feed(np.array([[0.5]]))
    assert meter.read().peak_v == (0.5,)
    np.maximum(in_flight, 0.9, out=in_flight)
    assert meter.read().peak_v == (0.9,)
    assert meter.read().peak_v == (0.0,)


def test_what_is_not_finite_counts_as_0_v_and_the_meter_recovers() -> None:
    meter = LevelMeter(RATE, 2)
    meter.feed(np.array([[np.nan, 1.0], [np.inf, -np.inf], [2.0, 0.0]]))
    clean = LevelMeter(RATE, 2)
    clean.feed(np.array([[0.0, 1.0], [0.0, 0.0], [2.0, 0.0]]))
    assert meter.non_finite_count == 3
    assert meter.read() == clean.read()


def test_nothing_and_silence_read_0_v() -> None:
    meter = LevelMeter(RATE, 2)
    meter.feed(np.empty((0, 2)))
    meter.feed(np.zeros((100, 2)))
    reading = meter.read()
    assert reading.peak_v == reading.hold_v == reading.rms_v == (0.0, 0.0)


def test_a_reset_is_silence() -> None:
    meter = LevelMeter(RATE, 1)
    meter.feed(np.ones((100, 1)))
    meter.reset()
    reading = meter.read()
    assert reading.peak_v == reading.hold_v == reading.rms_v == (0.0,)


def test_a_column_of_a_larger_array_is_read_rightly() -> None:
    volts = noise(1000, 3)
    meter = LevelMeter(RATE, 1)
    meter.feed(volts[:, 1:2])
    assert meter.read().peak_v[0] == np.abs(volts[:, 1]).max()
