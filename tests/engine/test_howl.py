"""The feedback guard on simulated rooms, on programme, and on what might be taken for a howl."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import soundfile
from scipy import signal as reference

import preview
from preview.engine.howl import HowlGuard
from preview.engine.spectrum import Tap

RATE_HZ = 48_000
LOOK = RATE_HZ // 15
DEMO = Path(preview.__file__).parent.parent / "demo_audio"


def howl_at_s(volts: np.ndarray) -> tuple[float, float] | None:
    """When the guard hears a howl, and at which frequency; None where it hears none."""
    tap, guard = Tap(RATE_HZ, 1), HowlGuard(RATE_HZ)
    for first in range(0, len(volts), LOOK):
        tap.write(volts[first : first + LOOK, None])
        if guard.hears(tap):
            return (first + LOOK) / RATE_HZ, guard.frequency_hz
    return None


def room(source: np.ndarray, gain: float, delay_s: float, resonance_hz: float | None = None) -> np.ndarray:
    """A microphone that hears its loudspeaker: a delay, perhaps a resonance, a gain, a limit at 10 V."""
    delay = round(delay_s * RATE_HZ)
    out = np.zeros(len(source) + delay)
    b, a = reference.iirpeak(resonance_hz, 30, fs=RATE_HZ) if resonance_hz else (np.ones(1), np.ones(1))
    state = np.zeros(max(len(a), len(b)) - 1)
    for first in range(0, len(source), delay):
        heard = out[first : first + min(delay, len(source) - first)]
        if resonance_hz:
            heard, state = reference.lfilter(b, a, heard, zi=state)
        out[first + delay : first + delay + len(heard)] = np.clip(
            gain * heard + source[first : first + delay], -10, 10
        )
    return out[delay:]


def hiss(seconds: float, volts: float = 1e-4) -> np.ndarray:
    return np.random.default_rng(1).normal(0, volts, round(seconds * RATE_HZ))


def programme(name: str) -> np.ndarray:
    samples = soundfile.read(DEMO / name, always_2d=True)[0][:, 0]
    return np.tile(samples, 3)


NAMES = ["announcement.flac", "bilge-pump.flac", "guitar-phrase.flac"]


@pytest.mark.parametrize("delay_s", [0.1, 0.2])
@pytest.mark.parametrize("gain", [1.3, 2.0, 10.0, -1.3, -10.0])
def test_a_loop_gain_above_one_is_heard_before_it_reaches_the_limit_of_the_device(gain, delay_s):
    found = howl_at_s(room(hiss(6), gain, delay_s))
    assert found is not None
    rounds = math.log(10.0 / 1e-4) / math.log(abs(gain))
    assert found[0] <= rounds * delay_s + 0.1


def test_a_resonance_howls_at_its_frequency():
    found = howl_at_s(room(hiss(6), 2.0, 0.2, resonance_hz=500.0))
    assert found is not None
    assert found[1] == pytest.approx(500.0, abs=5.0)


@pytest.mark.parametrize("gain", [0.5, 0.8, 0.95])
def test_a_loop_gain_below_one_is_no_howl(gain):
    assert howl_at_s(room(hiss(6), gain, 0.2)) is None


@pytest.mark.parametrize("name", NAMES)
def test_programme_is_no_howl_alone_or_in_a_room_that_stays_stable(name):
    assert howl_at_s(programme(name)) is None
    assert howl_at_s(room(programme(name), 0.7, 0.2)) is None


@pytest.mark.parametrize("name", NAMES)
def test_a_howl_is_heard_under_programme(name):
    found = howl_at_s(room(0.3 * programme(name), 1.3, 0.2, resonance_hz=500.0))
    assert found is not None
    assert found[1] == pytest.approx(500.0, abs=5.0)


TIME_S = np.arange(4 * RATE_HZ) / RATE_HZ
NOTE = np.sin(2 * np.pi * 440 * TIME_S)


@pytest.mark.parametrize(
    "volts",
    [
        NOTE,
        np.sin(2 * np.pi * 440 * TIME_S + 3 * np.sin(2 * np.pi * 5 * TIME_S)),
        NOTE * (1 + 0.5 * np.sin(2 * np.pi * 5 * TIME_S)),
        NOTE * np.exp(-TIME_S),
        NOTE * np.minimum(TIME_S / 0.3, 1),
        np.clip(20 * NOTE, -10, 10),
        np.zeros(4 * RATE_HZ),
        hiss(4, 1.0),
    ],
    ids=["note", "vibrato", "tremolo", "plucked", "bowed", "clipped", "silence", "noise"],
)
def test_what_is_held_swings_fades_or_clips_is_no_howl(volts):
    assert howl_at_s(volts) is None
