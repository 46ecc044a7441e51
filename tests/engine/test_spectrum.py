"""The live spectrum against the standard's frequencies, sines and noise of known level."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.engine.spectrum import Spectrum, Tap, band_centers_hz

RATE_HZ = 48_000


def spectrum_of(volts: np.ndarray, rate_hz: float = RATE_HZ, chunk: int = 509):
    tap, silent = Tap(rate_hz, volts.shape[1]), Tap(rate_hz, volts.shape[1])
    for first in range(0, len(volts), chunk):
        tap.write(volts[first : first + chunk])
    reading = Spectrum(rate_hz).read(tap, silent)
    assert not any(reading.output_vrms)
    return np.array(reading.center_hz), np.array(reading.input_vrms)


def sine(frequency_hz: float, vrms: float, seconds: float = 1.5) -> np.ndarray:
    return (
        vrms
        * math.sqrt(2)
        * np.sin(2 * np.pi * frequency_hz * np.arange(round(seconds * RATE_HZ)) / RATE_HZ)[:, None]
    )


def test_mid_band_frequencies_are_the_standards():
    # IEC 61260-1:2014, 5.4, formula (3), even number of bands: f = 1000 G^((2x+1)/2b), G = 10^(3/10), b = 6:
    # x = 0 gives 1059.25 Hz, x = -1 944.06 Hz (found = memory of the formula)
    centers = np.array(band_centers_hz(RATE_HZ))
    assert centers[np.searchsorted(centers, 1000)] == pytest.approx(1059.25, abs=0.005)
    assert centers[np.searchsorted(centers, 1000) - 1] == pytest.approx(944.06, abs=0.005)
    assert centers[0] >= 10
    assert centers[-1] * 10 ** (0.3 / 12) <= RATE_HZ / 2
    np.testing.assert_allclose(centers[6:] / centers[:-6], 10**0.3)


@pytest.mark.parametrize("frequency_hz", [59.57, 106, 211.3, 422.0, 1059.25, 5308.8, 15_000.0])
def test_a_sine_in_the_middle_of_a_band_reads_its_rms_there(frequency_hz):
    centers = np.array(band_centers_hz(RATE_HZ))
    band = int(np.argmin(np.abs(np.log(centers / frequency_hz))))
    exact = spectrum_of(sine(centers[band], 0.7))[1]
    assert 20 * math.log10(exact[band] / 0.7) == pytest.approx(0.0, abs=0.1)
    assert np.delete(exact, [band - 1, band, band + 1]).max() < 0.7e-2


def test_a_low_sine_reads_low_by_less_than_stated():
    centers, _ = spectrum_of(sine(20.0, 1.0))
    for center_hz in centers[(centers > 18) & (centers < 50)]:
        vrms = spectrum_of(sine(center_hz, 1.0))[1]
        assert -2.0 < 20 * math.log10(vrms.max()) < 0.05


def test_the_bands_together_hold_the_power_of_the_signal():
    volts = sine(80, 0.5) + sine(1234, 0.2) + sine(9000, 0.1)
    _, vrms = spectrum_of(volts)
    assert np.sum(vrms**2) == pytest.approx(0.25 + 0.04 + 0.01, rel=0.002)


def test_white_noise_rises_by_3_db_an_octave():
    noise = np.random.default_rng(8).normal(0, 0.1, (40 * RATE_HZ, 1))
    power = np.mean(
        [spectrum_of(noise[k : k + 65_536])[1] ** 2 for k in range(0, len(noise) - 65_536, 24_000)], axis=0
    )
    centers = np.array(band_centers_hz(RATE_HZ))
    half = 10 ** (0.3 / 12)
    expected = 0.01 * centers * (half - 1 / half) / (RATE_HZ / 2)
    wide = centers > 200
    np.testing.assert_allclose(10 * np.log10(power[wide] / expected[wide]), 0.0, atol=0.7)
    assert 10 * np.log10(power[wide].sum() / expected[wide].sum()) == pytest.approx(0.0, abs=0.1)


def test_of_two_channels_the_louder_counts_in_each_band():
    volts = np.concatenate([sine(1059.25, 0.5), sine(5308.8, 0.25)], axis=1)
    centers, vrms = spectrum_of(volts)
    assert vrms[np.argmin(np.abs(centers - 1059.25))] == pytest.approx(0.5, rel=0.01)
    assert vrms[np.argmin(np.abs(centers - 5308.8))] == pytest.approx(0.25, rel=0.03)


@pytest.mark.parametrize("rate_hz", [8000, 44_100, 192_000])
def test_other_rates_have_bands_up_to_half_of_them(rate_hz):
    time_s = np.arange(rate_hz * 2) / rate_hz
    volts = np.sin(2 * np.pi * 1059.25 * time_s)[:, None]
    centers, vrms = spectrum_of(volts, rate_hz)
    assert vrms.max() == pytest.approx(math.sqrt(0.5), rel=0.01)
    assert centers[-1] > 0.4 * rate_hz


def test_the_tap_holds_the_last_frames_in_order_however_they_come():
    tap = Tap(8000, 2)
    frames = np.arange(20_000.0)[:, None] * [1, -1]
    for first, last in ((0, 1), (1, 18), (18, 9000), (9000, 20_000)):
        tap.write(frames[first:last])
    np.testing.assert_array_equal(tap.last(), frames[-tap.frames :])
