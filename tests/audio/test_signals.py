"""Test signals against their closed forms."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy import signal as reference
from scipy.special import sici

from preview.audio.signals import ENDLESS_FRAMES, SignalSource, natural_frames
from preview.values.stimulus import STIMULUS_EXAMPLES, parse_stimulus

RATE_HZ = 48_000


def volts(text: str, frames: int, start: int = 0) -> np.ndarray:
    source = SignalSource(parse_stimulus(text))
    source.seek(start)
    out = np.full((frames, 1), np.nan)
    assert source.read(out) == frames
    return out[:, 0]


@pytest.mark.parametrize("text", STIMULUS_EXAMPLES.values())
def test_the_volts_at_a_frame_do_not_depend_on_how_it_is_reached(text):
    whole = volts(text, 3000, 12_345)
    source = SignalSource(parse_stimulus(text))
    source.seek(12_345)
    pieces = []
    for count in (1, 17, 509, 2473):
        piece = np.zeros((count, 1))
        source.read(piece)
        pieces.append(piece[:, 0])
    np.testing.assert_array_equal(np.concatenate(pieces), whole)


def test_a_sine_is_its_closed_form_also_after_a_week():
    week = 7 * 86_400 * RATE_HZ
    heard = volts("sine 997 2V", 4800, week)
    # 997 is whole, so a week is a whole number of cycles and the phase begins anew
    expected = 2.0 * np.sin(2 * np.pi * 997 * np.arange(4800) / RATE_HZ)
    np.testing.assert_allclose(heard, expected, atol=1e-11)


def test_two_tones_add_up_to_the_level_and_keep_their_ratio():
    # SMPTE RP 120 as commonly stated (found = memory): 60 Hz and 7 kHz, 4:1, peak of the sum as that of one sine
    spectrum = np.abs(np.fft.rfft(volts("two-tone 60 7k 4:1 1V", RATE_HZ))) * 2 / RATE_HZ
    assert spectrum[60] == pytest.approx(0.8, abs=1e-9)
    assert spectrum[7000] == pytest.approx(0.2, abs=1e-9)
    assert np.delete(spectrum, [60, 7000]).max() < 1e-9


def test_a_sweep_is_the_general_librarys_but_for_its_ends():
    heard = volts("sweep 20 20k 2s 1V", 2 * RATE_HZ)
    time_s = np.arange(2 * RATE_HZ) / RATE_HZ
    expected = reference.chirp(time_s, 20, 2.0, 20_000, method="logarithmic", phi=-90)
    inside = slice(240, -240)
    np.testing.assert_allclose(heard[inside], expected[inside], atol=1e-8)
    assert abs(heard[0]) < 1e-12
    assert abs(heard[-1]) < 1e-4


def test_a_sweep_takes_equal_time_an_octave():
    heard = volts("sweep 100 1600 4s 1V", 4 * RATE_HZ)
    crossings = np.flatnonzero((heard[:-1] < 0) & (heard[1:] >= 0)) / RATE_HZ
    for at_s, expected_hz in ((1.0, 200.0), (2.0, 400.0), (3.0, 800.0)):
        nearest = np.argsort(np.abs(crossings - at_s))[:9]
        cycles = np.sort(crossings[nearest])
        found_hz = (len(cycles) - 1) / (cycles[-1] - cycles[0])
        assert found_hz == pytest.approx(expected_hz * 2 ** (cycles.mean() - at_s), rel=0.005)


def test_a_burst_has_whole_cycles_and_exact_silence():
    heard = volts("burst 1k 10/100 1V", 9600)
    sine = np.sin(2 * np.pi * np.arange(480) / 48)
    np.testing.assert_allclose(heard[:480], sine, atol=1e-12)
    assert not heard[480:4800].any()
    np.testing.assert_allclose(heard[4800:5280], sine, atol=1e-12)


def test_a_square_has_the_fourier_series_and_nothing_else():
    # 4/pi, 4/(3 pi), ... in any table of Fourier series
    spectrum = np.abs(np.fft.rfft(volts("square 100 3V", RATE_HZ))) * 2 / RATE_HZ
    harmonic = np.arange(100, 24_000, 200)
    np.testing.assert_allclose(spectrum[harmonic], 3 * 4 / np.pi / (harmonic / 100), rtol=1e-9)
    assert np.delete(spectrum, harmonic).max() < 1e-9


def test_a_square_overshoots_by_the_gibbs_constant():
    # Wilbraham-Gibbs: the sum's first peak tends to 2/pi Si(pi) = 1.17898 of the flat top (found = memory: 1.178980)
    assert 2 / math.pi * sici(math.pi)[0] == pytest.approx(1.178980, abs=5e-7)
    # a period of 481.44 frames: every phase of the peak is met
    assert volts("square 99.7 1V", 480_000).max() == pytest.approx(1.178980, abs=2e-3)


def test_a_square_of_an_odd_period_comes_round_without_a_seam():
    source = SignalSource(parse_stimulus("square 99.7 1V"))
    heard = np.zeros((2 * 480_000, 1))
    source.read(heard)
    np.testing.assert_array_equal(heard[:480_000], heard[480_000:])
    spectrum = np.abs(np.fft.rfft(heard[:480_000, 0])) * 2 / 480_000
    assert spectrum[997] == pytest.approx(4 / math.pi, rel=1e-9)


def test_pink_noise_has_the_same_power_in_every_third_of_an_octave():
    noise = volts("pink 0.5Vrms", 1 << 19)
    assert math.sqrt(np.mean(noise**2)) == pytest.approx(0.5, rel=1e-12)
    power = np.abs(np.fft.rfft(noise)) ** 2
    frequency_hz = np.fft.rfftfreq(len(noise), 1 / RATE_HZ)
    edges_hz = 1000 * 10 ** (0.1 * (np.arange(-15, 13) + 0.5))
    bands = [power[(frequency_hz >= a) & (frequency_hz < b)].sum() for a, b in itertools.pairwise(edges_hz)]
    level_db = 10 * np.log10(np.array(bands) / bands[-1])
    # a line more or less at the edges of the lowest bands, 80 lines wide, is 0.05 dB
    assert np.abs(level_db).max() < 0.1


def test_pink_noise_falls_by_10_db_a_decade():
    noise = volts("pink 1Vrms", 1 << 19)
    power = np.abs(np.fft.rfft(noise)) ** 2
    # lines 1000 and 100,000: two decades apart
    assert 10 * math.log10(power[1000] / power[100_000]) == pytest.approx(20, abs=1e-9)


def test_a_signal_has_a_length_only_where_one_is_natural():
    assert natural_frames(parse_stimulus("sweep 20 20k 2.5s 1V")) == 120_000
    assert natural_frames(parse_stimulus("sine 1k 1V")) == 480_000
    assert SignalSource(parse_stimulus("sine 1k 1V")).frames == ENDLESS_FRAMES
