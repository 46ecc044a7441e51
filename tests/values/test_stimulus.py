"""Test signals as text."""

from __future__ import annotations

import math

import pytest

from preview.errors import NotationError
from preview.values.stimulus import STIMULUS_EXAMPLES, Stimulus, Waveform, parse_stimulus


def test_a_sine_is_a_frequency_and_a_peak_in_volts():
    assert parse_stimulus("sine 1k 1V") == Stimulus(Waveform.SINE, 1.0, 1000.0)


def test_units_may_stand_apart():
    assert parse_stimulus("sine 1 kHz 500 mV") == parse_stimulus("sine 1k 0.5V")


def test_a_level_in_dbu_is_that_of_a_sine():
    # studio line level, +4 dBu, is printed as 1.228 V rms in handbooks (found = memory)
    assert parse_stimulus("sine 1k +4 dBu").level_v / math.sqrt(2) == pytest.approx(1.228, abs=0.0005)


def test_pink_noise_of_half_a_volt_rms_has_the_rms_of_a_sine_of_that_level():
    assert parse_stimulus("pink 0.5Vrms").level_v == pytest.approx(math.sqrt(2) * 0.5)


def test_a_burst_says_how_many_cycles_of_how_many():
    burst = parse_stimulus("burst 1k 10/100 1V")
    assert (burst.cycles_on, burst.cycles_period) == (10, 100)


def test_two_tones_without_a_ratio_are_equal():
    assert parse_stimulus("two-tone 19k 20k 1V").first_ratio == 1.0
    assert parse_stimulus("two-tone 60 7k 4:1 1V").first_ratio == 4.0


@pytest.mark.parametrize("text", [*STIMULUS_EXAMPLES.values(), "sweep 20k 20 2.5s 300mV", "sine 997 +4dBu"])
def test_the_text_of_a_signal_reads_back_as_the_same(text):
    read = parse_stimulus(text)
    again = parse_stimulus(read.text)
    assert again.waveform == read.waveform
    assert again.level_v == pytest.approx(read.level_v, rel=1e-8)
    assert (again.first_hz, again.second_hz, again.duration_s) == (
        read.first_hz,
        read.second_hz,
        read.duration_s,
    )
    assert (again.first_ratio, again.cycles_on, again.cycles_period) == (
        read.first_ratio,
        read.cycles_on,
        read.cycles_period,
    )


@pytest.mark.parametrize(
    ("text", "what"),
    [
        ("triangle 1k 1V", "no such test signal"),
        ("sine 1k", "1 figures after sine"),
        ("sine 1k 1V 2V", "3 figures after sine"),
        ("sine 1k 1", "no unit"),
        ("sine 30k 1V", "outside 0.1 Hz to 21600 Hz"),
        ("sine 0 1V", "sine 0 1V"),
        ("sweep 1k 1k 5s 1V", "both frequencies are the same"),
        ("sweep 20 20k 1000s 1V", "a sweep outside"),
        ("burst 1k 10/10 1V", "fewer cycles of more"),
        ("burst 1k ten 1V", "2 figures after burst"),
        ("two-tone 60 7k 4:0 1V", "not two numbers joined by :"),
        ("two-tone 60 7k 5000:1 1V", "a ratio outside"),
        ("square 100.05 1V", "not a multiple of 0.1 Hz"),
        ("pink 5kV", "outside 1 uV to 1 kV"),
        ("", "empty"),
    ],
)
def test_what_is_no_signal_is_refused_with_the_reason(text, what):
    with pytest.raises(NotationError, match=what):
        parse_stimulus(text)
