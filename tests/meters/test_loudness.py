"""The loudness meter against the test signals of EBU Tech 3341 and 3342."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.signal import sosfilt

from preview.errors import UsageError
from preview.meters.loudness import LoudnessMeter, channel_weights
from preview.meters.weighting import Weighting
from tests.meters.signals import FULL_SCALE_V, PUBLISHED, Real, feed, programme, row, sine, sos, tones

RATE = 48_000


def meter(rate: float = RATE, channels: int = 2) -> LoudnessMeter:
    return LoudnessMeter(rate, channels, full_scale_v=FULL_SCALE_V)


def case(number: str) -> dict:
    return row("ebu3341_case", case=number)


def segments(published: dict) -> list[tuple[float, float]]:
    return [tuple(s) for s in published["segments_dbfs_s"]] * published.get("repeats", 1)


def test_a_sine_of_997_hz_at_full_scale_reads_minus_3_01_lkfs() -> None:
    published = row("loudness", name="reference_reading")
    reading = feed(meter(channels=1), sine(RATE, 997, 20, FULL_SCALE_V))
    for got in (reading.momentary_lufs, reading.short_term_lufs, reading.integrated_lufs):
        assert got == pytest.approx(published["value"], abs=0.005)
    assert reading.full_scale_v == FULL_SCALE_V


def test_the_alignment_tone_reads_minus_18_lufs() -> None:
    published = row("loudness", name="alignment_tone_reading")
    reading = feed(meter(), tones(RATE, [(-18.0, 5.0)]))
    assert reading.integrated_lufs == pytest.approx(published["value"], abs=0.05)


@pytest.mark.parametrize("rate", [44_100, RATE, 96_000])
@pytest.mark.parametrize("number", ["1", "2", "3", "4", "5"])
def test_ebu_3341_cases_1_to_5(number: str, rate: int) -> None:
    published = case(number)
    reading = feed(meter(rate), tones(rate, segments(published)))
    got = {"M": reading.momentary_lufs, "S": reading.short_term_lufs, "I": reading.integrated_lufs}
    for name, wanted in published["expected"].items():
        assert got[name] == pytest.approx(wanted, abs=published["tolerance_lu"]), name


def test_ebu_3341_case_6_weights_five_channels() -> None:
    published = case("6")
    levels = (-28.0, -28.0, -24.0, -30.0, -30.0)
    assert "L,R -28.0; C -24.0; Ls,Rs -30.0" in published["signal"]
    volts = np.column_stack([sine(RATE, 1000, 20, FULL_SCALE_V * 10 ** (level / 20)) for level in levels])
    reading = feed(meter(channels=5), volts)
    assert reading.integrated_lufs == pytest.approx(published["expected"]["I"], abs=published["tolerance_lu"])
    with_low = np.insert(volts, 3, FULL_SCALE_V, axis=1)  # the low-frequency channel does not count
    assert feed(meter(channels=6), with_low).integrated_lufs == reading.integrated_lufs


@pytest.mark.parametrize(("number", "which"), [("9", "S"), ("12", "M")])
def test_ebu_3341_cases_9_and_12_stand_still_once_the_window_is_full(number: str, which: str) -> None:
    published = case(number)
    volts = tones(RATE, segments(published))
    loudness = meter()
    start = round(published["constant_after_s"] * RATE)
    loudness.feed(volts[:start])
    read = []
    for at in range(start, len(volts), RATE // 100):
        loudness.feed(volts[at : at + RATE // 100])
        reading = loudness.read()
        read.append(reading.short_term_lufs if which == "S" else reading.momentary_lufs)
    assert len(read) > 800
    assert max(read) == pytest.approx(published["expected"][which], abs=published["tolerance_lu"])
    assert min(read) == pytest.approx(published["expected"][which], abs=published["tolerance_lu"])


@pytest.mark.parametrize(
    ("number", "gap_s", "tone_s", "which"),
    [("10", 0.15, 3.0, "max_short_term_lufs"), ("13", 0.02, 0.4, "max_momentary_lufs")],
)
def test_ebu_3341_cases_10_and_13_find_the_maximum_wherever_the_tone_begins(
    number: str, gap_s: float, tone_s: float, which: str
) -> None:
    published = case(number)
    (wanted,) = published["expected"].values()
    for k in range(20):
        volts = tones(RATE, [(-400.0, k * gap_s), (wanted, tone_s), (-400.0, 1.0)])
        got = getattr(feed(meter(), volts), which)
        assert got == pytest.approx(wanted, abs=published["tolerance_lu"]), k


@pytest.mark.parametrize(
    ("number", "gap_s", "tone_s", "which"),
    [("11", 0.15, 3.0, "max_short_term_lufs"), ("14", 0.02, 0.4, "max_momentary_lufs")],
)
def test_ebu_3341_cases_11_and_14_find_each_maximum_live(
    number: str, gap_s: float, tone_s: float, which: str
) -> None:
    published = case(number)
    assert "-38.0 .. -19.0 in 1 LU steps" in published["expected"].values()
    loudness = meter()
    for k in range(20):
        level = -38.0 + k
        reading = feed(loudness, tones(RATE, [(-400.0, k * gap_s), (level, tone_s), (-400.0, 1.0)]))
        assert getattr(reading, which) == pytest.approx(level, abs=published["tolerance_lu"])


@pytest.mark.parametrize("published", PUBLISHED["ebu3342_case"], ids=lambda r: r["case"])
def test_ebu_3342_cases(published: dict) -> None:
    reading = feed(meter(), tones(RATE, segments(published)))
    wanted = published["expected_lra_lu"]
    assert reading.range_lu == pytest.approx(wanted, abs=published["tolerance_lu"])
    assert reading.range_lu == pytest.approx(wanted, abs=0.05)  # what it does reach


def gated(volts: Real, rate: int) -> float:
    """BS.1770-5 annex 1, equations (1) to (7), in so many words."""
    published = row("loudness", name="gating_blocks")
    weighted = sosfilt(sos(Weighting.K, rate), volts / FULL_SCALE_V, axis=0) ** 2
    length, hop = round(published["block_s"] * rate), round(published["block_s"] * rate / 4)
    assert published["overlap"] == 0.75
    power = np.array(
        [weighted[at : at + length].mean(axis=0).sum() for at in range(0, len(volts) - length + 1, hop)]
    )
    loud = power[-0.691 + 10 * np.log10(np.maximum(power, 1e-30)) > published["absolute_lkfs"]]
    gate = loud.mean() * 10 ** (published["relative_lu"] / 10)
    return float(-0.691 + 10 * np.log10(loud[loud > gate].mean()))


def test_integrated_loudness_is_the_standards_formula_in_spite_of_the_histogram() -> None:
    volts = programme(RATE, 60)
    reading = feed(meter(), volts)
    assert reading.integrated_lufs == pytest.approx(gated(volts, RATE), abs=1e-3)
    ungated = feed(meter(), volts[: RATE // 2]).integrated_lufs
    assert abs(ungated - reading.integrated_lufs) > 1.0  # so the gates did something


def test_range_is_the_standards_percentiles() -> None:
    # EBU Tech 3342 by its own words, from short-term loudness every 100 ms
    published = row("loudness", name="lra")
    volts = programme(RATE, 90)
    weighted = sosfilt(sos(Weighting.K, RATE), volts / FULL_SCALE_V, axis=0) ** 2
    length, hop = round(published["window_s"] * RATE), RATE // 10
    ends = np.concatenate([[0.0], np.cumsum(weighted.sum(axis=1))])
    power = np.array([(ends[at] - ends[at - length]) / length for at in range(length, len(volts) + 1, hop)])
    short = -0.691 + 10 * np.log10(np.maximum(power, 1e-30))
    loud = short > published["absolute_lufs"]
    gate = -0.691 + 10 * np.log10(power[loud].mean()) + published["relative_lu"]
    low, high = np.percentile(short[loud & (short >= gate)], published["percentiles"], method="nearest")
    assert feed(meter(), volts).range_lu == pytest.approx(high - low, abs=0.02)


def test_silence_and_too_little_signal_have_no_loudness() -> None:
    loudness = meter()
    reading = feed(loudness, np.zeros((RATE, 2)))
    assert reading.momentary_lufs == reading.integrated_lufs == reading.max_short_term_lufs == -math.inf
    assert reading.range_lu == 0.0
    loudness.reset()
    assert feed(loudness, tones(RATE, [(-20.0, 0.39)])).integrated_lufs == -math.inf


def test_a_reset_forgets() -> None:
    loudness, fresh = meter(), meter()
    feed(loudness, tones(RATE, [(-10.0, 4.0)]))
    loudness.reset()
    quiet = tones(RATE, [(-40.0, 4.0)])
    assert feed(loudness, quiet) == feed(fresh, quiet)


def test_a_rate_that_100_does_not_divide_keeps_its_windows() -> None:
    rate = 11_025  # blocks of 110 and 111 frames
    reading = feed(meter(rate), tones(rate, [(-23.0, 5.0)]))
    assert reading.integrated_lufs == pytest.approx(-23.0, abs=0.02)


def test_weights_must_fit_the_channels() -> None:
    assert channel_weights(2) == (1.0, 1.0)
    with pytest.raises(UsageError, match="3 weights for 2 channels"):
        LoudnessMeter(RATE, 2, full_scale_v=1.0, weights=(1.0, 1.0, 1.0))
