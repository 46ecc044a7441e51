"""Frequency weighting against the standards' tables and formulas, at every rate, up to 20 kHz."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import sosfilt, sosfreqz, unit_impulse

from preview.errors import UsageError
from preview.meters import kernels
from preview.meters.rms import RmsMeter
from preview.meters.weighting import Weighting, sections, standard_gain_db
from tests.meters.signals import PUBLISHED, db, feed, row, sine, sos

RATES = [44_100, 48_000, 88_200, 96_000, 176_400, 192_000]


def gain_db(weighting: Weighting, rate: float, frequency_hz: NDArray[np.float64]) -> NDArray[np.float64]:
    _, h = sosfreqz(sos(weighting, rate), frequency_hz, fs=rate)
    return np.asarray(20 * np.log10(np.abs(h)))


def formula_db(name: str, f: NDArray[np.float64]) -> NDArray[np.float64]:
    """IEC 61672-1, annex E, formulas (E.6) and (E.1), with the poles as printed."""
    p = PUBLISHED["weighting_poles"][0]
    c = p["f4"] ** 2 * f**2 / ((f**2 + p["f1"] ** 2) * (f**2 + p["f4"] ** 2))
    if name == "C":
        return np.asarray(20 * np.log10(c) - p["c1000_db"])
    a = c * f**2 / np.sqrt((f**2 + p["f2"] ** 2) * (f**2 + p["f3"] ** 2))
    return np.asarray(20 * np.log10(a) - p["a1000_db"])


def exact_hz(name: str) -> NDArray[np.float64]:
    """The table's frequencies are the exact ones of base 10, written nominally; A's row gives them."""
    assert len(row("weighting", name=name)["db"]) == len(row("weighting", name="A")["exact_hz"])
    return np.array(row("weighting", name="A")["exact_hz"])


@pytest.mark.parametrize("name", ["A", "C"])
def test_the_printed_formula_gives_the_printed_table(name: str) -> None:
    # A check of the published rows against each other: half the last digit, and for A at 5 kHz 0.0003 dB of rounding
    # in A1000 = -2.000 dB (-1.9997).
    difference = formula_db(name, exact_hz(name)) - np.array(row("weighting", name=name)["db"])
    assert np.abs(difference).max() < 0.0505


@pytest.mark.parametrize("name", ["A", "C"])
@pytest.mark.parametrize("rate", RATES)
def test_a_and_c_are_within_0_05_db_of_the_formula_up_to_20_khz(name: str, rate: int) -> None:
    f = np.concatenate([np.geomspace(10, 20_000, 2000), exact_hz(name)])
    assert np.abs(gain_db(Weighting(name), rate, f) - formula_db(name, f)).max() < 0.05


@pytest.mark.parametrize("name", ["A", "C"])
@pytest.mark.parametrize("rate", RATES)
def test_a_and_c_are_within_a_tenth_of_the_limits_of_class_1(name: str, rate: int) -> None:
    limits = row("weighting_tolerance", name="class1")
    difference = gain_db(Weighting(name), rate, exact_hz(name)) - np.array(row("weighting", name=name)["db"])
    rounding = 0.05  # of the table
    assert (difference < np.array(limits["plus_db"]) / 10 + rounding).all()
    assert (-difference < np.array(limits["minus_db"]) / 10 + rounding).all()


@pytest.mark.parametrize("rate", RATES)
def test_468_gives_the_table_within_a_tenth_of_a_db(rate: int) -> None:
    # The table is printed to 0.1 dB and the network of figure 1a meets it within 0.05 dB; the filter adds 0.03 dB. The
    # standard's own limits are 0.5 to 2 dB but for 6.3 kHz, where they are 0 in print, which no circuit can meet.
    table = row("weighting", name="ITU-R 468")
    f, wanted, limits = (np.array(table[key]) for key in ("nominal_hz", "db", "tolerance_db"))
    there = f < 0.4536 * rate
    assert there.sum() >= 20
    difference = np.abs(gain_db(Weighting.ITU_468, rate, f) - wanted)[there]
    assert difference.max() < 0.08
    assert (difference < np.maximum(limits[there], 0.05)).all()


@pytest.mark.parametrize("rate", RATES)
def test_468_is_within_0_03_db_of_its_network_up_to_20_khz(rate: int) -> None:
    f = np.geomspace(10, 20_000, 1000)
    assert np.abs(gain_db(Weighting.ITU_468, rate, f) - standard_gain_db(Weighting.ITU_468, f)).max() < 0.03


def test_the_ladder_of_468_equals_its_nodal_solution() -> None:
    # BS.468 figure 1a by admittances at one frequency: nodes 1, 2 and 3 behind the source, the coils and the capacitors
    for f in (100.0, 6300.0, 14_000.0):
        s = 2j * math.pi * f
        y1, y2, y3 = 1 / (s * 12.88e-3), s * 33.06e-9, 1 / (s * 26.49e-3)
        nodes = np.array(
            [
                [1 / 600 + s * 13.85e-9 + y1, -y1, 0, 0],
                [-y1, y1 + s * 26.82e-9 + y2, -y2, 0],
                [0, -y2, y2 + s * 9.21e-9 + y3, -y3],
                [0, 0, -y3, y3 + s * 31.47e-9 + 1 / 600],
            ]
        )
        gain = abs(np.linalg.solve(nodes, [1 / 600, 0, 0, 0])[3])
        if f == 100.0:
            reference, at = gain, f
        else:
            rise = float(standard_gain_db(Weighting.ITU_468, f) - standard_gain_db(Weighting.ITU_468, at))
            assert db(gain / reference) == pytest.approx(rise, abs=1e-9)


def test_the_noise_weighting_of_aes17_is_the_same_5_63_db_lower_with_unity_at_2_khz() -> None:
    published = row("weighting", name="AES17 CCIR-RMS")
    f = np.array([1000.0, published["unity_at_hz"]])
    got = gain_db(Weighting.AES17, 48_000, f)
    assert got[0] == pytest.approx(published["offset_db"], abs=1e-9)
    assert got[1] == pytest.approx(0.0, abs=0.03)


def test_k_at_48_khz_has_the_printed_coefficients() -> None:
    for got, published in zip(sections(Weighting.K, 48_000), PUBLISHED["k_weighting"], strict=True):
        assert published["sample_rate"] == 48_000
        np.testing.assert_array_equal(got, [*published["b"], *published["a"][1:]])


@pytest.mark.parametrize("rate", [8_000, 22_050, 44_100, 88_200, 96_000, 192_000])
def test_k_at_other_rates_has_the_gain_that_it_has_at_48_khz(rate: int) -> None:
    f = np.geomspace(10, min(20_000, 0.4536 * rate), 1000)
    assert np.abs(gain_db(Weighting.K, rate, f) - gain_db(Weighting.K, 48_000, f)).max() < 0.005


@pytest.mark.parametrize("weighting", list(Weighting))
@pytest.mark.parametrize("rate", [8_000, *RATES])
def test_the_filters_are_stable_and_of_minimum_phase(weighting: Weighting, rate: int) -> None:
    for r in sections(weighting, rate):
        assert np.abs(np.roots([1.0, *r[3:]])).max(initial=0.0) < 1.0
        assert np.abs(np.roots(r[:3])).max(initial=0.0) <= 1.0 + 1e-9


def test_a_rate_below_8_khz_has_no_weighting() -> None:
    with pytest.raises(UsageError, match="A weighting at 4000 Hz: sample rates from 8 kHz on have one"):
        sections(Weighting.A, 4000)


@pytest.mark.parametrize("weighting", list(Weighting))
def test_the_running_filter_is_that_filter(weighting: Weighting) -> None:
    # scipy's own sections on the same coefficients
    volts = np.random.default_rng(2).standard_normal((2, 3000))
    rows = volts.copy()
    coefficients = sections(weighting, 48_000)
    kernels.weight_rows(rows, 0, 3000, coefficients, np.zeros((2, len(coefficients), 2)))
    np.testing.assert_allclose(rows, sosfilt(sos(weighting, 48_000), volts, axis=1), rtol=1e-9, atol=1e-11)


def test_a_filter_at_rest_after_long_silence_costs_no_slow_arithmetic() -> None:
    state = np.zeros((1, len(sections(Weighting.A, 48_000)), 2))
    kernels.weight_rows(unit_impulse(10).reshape(1, 10), 0, 10, sections(Weighting.A, 48_000), state)
    rows = np.zeros((1, 48_000 * 10))
    kernels.weight_rows(rows, 0, rows.shape[1], sections(Weighting.A, 48_000), state)
    assert (state == 0.0).all()


@pytest.mark.parametrize(("frequency_hz", "wanted_db"), [(100.0, -19.1), (1000.0, 0.0), (10_000.0, -2.5)])
def test_a_sine_reads_its_weighted_rms(frequency_hz: float, wanted_db: float) -> None:
    # IEC 61672-1 table 3, by running the meter
    meter = RmsMeter(48_000, 1, weighting=Weighting.A)
    reading = feed(meter, sine(48_000, frequency_hz, 3.0, math.sqrt(2)))
    assert db(reading.rms_v[0]) == pytest.approx(wanted_db, abs=0.06)
    assert reading.weighting == "A"
