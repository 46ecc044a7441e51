"""The clip log: each visit to a limit, from its first frame to its last."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.errors import UsageError
from preview.meters.clip_log import ClipLog, full_scale_log
from preview.meters.reading import ClipEvent
from tests.meters.signals import feed, sine

RATE = 1000


def test_visits_are_logged_with_time_side_and_farthest_voltage() -> None:
    left = [0, 5, 6, 5, 0, -7, -5, 0, 0, 4.9]
    right = [0, 0, 0, 0, 0, 0, 0, 0, 9, 0]
    reading = feed(ClipLog(RATE, 2, high_v=5.0), np.column_stack([left, right]))
    assert reading.events == (
        ClipEvent(0, 1, 3, 0.001, 0.003, True, 6.0),
        ClipEvent(0, 5, 2, 0.005, 0.002, False, -7.0),
        ClipEvent(1, 8, 1, 0.008, 0.001, True, 9.0),
    )
    assert reading.count == (2, 1)
    assert reading.clipped_s == (0.005, 0.001)
    assert (reading.high_v, reading.low_v) == (5.0, -5.0)


def test_a_swing_from_limit_to_limit_is_two_visits() -> None:
    reading = feed(ClipLog(RATE, 1, high_v=1.0, low_v=-2.0), np.array([1.0, 1.0, -2.0, 0.0]))
    assert [(e.start_frame, e.frames, e.at_high) for e in reading.events] == [(0, 2, True), (2, 1, False)]


def test_a_visit_under_way_is_in_the_reading_and_goes_on() -> None:
    log = ClipLog(RATE, 1, high_v=1.0)
    assert feed(log, np.array([0.0, 2.0, 3.0])).events == (ClipEvent(0, 1, 2, 0.001, 0.002, True, 3.0),)
    reading = feed(log, np.array([4.0, 0.0]))
    assert reading.events == (ClipEvent(0, 1, 3, 0.001, 0.003, True, 4.0),)
    assert reading.count == (1,)


def test_a_clipped_sine_is_at_its_limits_for_the_time_of_the_closed_form() -> None:
    # |sin| >= 0.8 for 1 - asin(0.8) 2 / pi of the time, in two visits a period
    rate, seconds = 48_000, 1.0
    volts = np.clip(sine(rate, 100, seconds, 1.0), -0.8, 0.8)
    reading = feed(ClipLog(rate, 1, high_v=0.8), volts)
    assert reading.count == (200,)
    share = 1 - math.asin(0.8) * 2 / math.pi
    assert reading.clipped_s[0] == pytest.approx(share * seconds, abs=200 / rate)
    starts = np.array([event.start_s for event in reading.events])
    exact = math.asin(0.8) / (2 * math.pi * 100) + np.arange(200) / 200
    assert np.abs(starts - exact).max() <= 1 / rate  # within one sample


def test_short_visits_can_be_left_out() -> None:
    volts = np.array([0, 1, 0, 1, 1, 1, 0], dtype=float)
    reading = feed(ClipLog(RATE, 1, high_v=1.0, min_frames=3), volts)
    assert [(e.start_frame, e.frames) for e in reading.events] == [(3, 3)]
    assert reading.count == (1,)


def test_beyond_its_capacity_the_log_goes_on_counting() -> None:
    volts = np.tile([0.0, 1.0], 50)
    reading = feed(ClipLog(RATE, 1, high_v=1.0, capacity=10), volts)
    assert len(reading.events) == 10
    assert reading.events[-1].start_frame == 19
    assert reading.count == (50,)
    assert reading.clipped_s[0] == pytest.approx(0.05)


def test_the_largest_sample_of_16_bits_is_a_visit_to_full_scale() -> None:
    log = full_scale_log(RATE, 1, full_scale_v=10.0)
    reading = feed(log, np.array([32766, 32767, 0, -32767, -32768, 0]) / 32768 * 10.0)
    assert [(e.start_frame, e.frames) for e in reading.events] == [(1, 1), (3, 2)]


def test_limits_the_wrong_way_round_are_refused() -> None:
    with pytest.raises(UsageError, match="lower limit 2 V is not below the upper, 1 V"):
        ClipLog(RATE, 1, high_v=1.0, low_v=2.0)
