"""A howl that stands at a limit is told from a held note by its following the output."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal as reference

from preview.engine.spectrum import Tap
from preview.engine.standing import DUCK_DB, StandingGuard

RATE_HZ = 48_000
LOOK = RATE_HZ // 15
TIME_S = np.arange(12 * RATE_HZ) / RATE_HZ
NOTE = np.sin(2 * np.pi * 440 * TIME_S)
LIMIT_V = 10.0


class Room:
    """A stage that is cut off at 10 V, and a loudspeaker that the microphone hears with a resonance at 500 Hz."""

    def __init__(self, source: np.ndarray, *, gain: float, coupling: float, delay_s: float = 0.2) -> None:
        self.source, self.gain, self.coupling = source, gain, coupling
        self.delay = round(delay_s * RATE_HZ)
        self.played = np.zeros(len(source) + self.delay)
        self.guard = StandingGuard(RATE_HZ)
        self.ducked_looks = self.ducks = 0

    def howl_at_s(self) -> float | None:
        """When the guard hears a howl; None where it hears none."""
        taps = Tap(RATE_HZ, 1), Tap(RATE_HZ, 1)
        b, a = reference.iirpeak(500.0, 5.0, fs=RATE_HZ)
        state, duck = np.zeros(2), 1.0
        for first in range(0, len(self.source) - LOOK, LOOK):
            now = slice(first, first + LOOK)
            back, state = reference.lfilter(b, a, self.played[now], zi=state)
            volts_in = self.source[now] + self.coupling * back
            volts_out = np.clip(self.gain * volts_in, -LIMIT_V, LIMIT_V)
            self.played[first + self.delay : first + self.delay + LOOK] = duck * volts_out
            for tap, volts in zip(taps, (volts_in, volts_out), strict=True):
                tap.write(volts[:, None])
            was = self.guard.ducked
            if self.guard.hears(*taps, limited=False):
                return (first + LOOK) / RATE_HZ
            duck = 10.0 ** (DUCK_DB / 20.0) if self.guard.ducked else 1.0
            self.ducks += self.guard.ducked and not was
            self.ducked_looks += self.guard.ducked
        return None


@pytest.mark.parametrize("delay_s", [0.1, 0.2, 0.3])
@pytest.mark.parametrize("gain", [20.0, 100.0])
def test_a_howl_at_its_limit_is_heard_within_two_seconds(gain: float, delay_s: float) -> None:
    hiss = np.random.default_rng(3).normal(0.0, 1e-4, 4 * RATE_HZ)
    room = Room(hiss, gain=gain, coupling=0.1, delay_s=delay_s)
    tone = np.sin(2 * np.pi * 500 * np.arange(room.delay) / RATE_HZ)
    room.played[: room.delay] = LIMIT_V * np.sign(tone)  # it stands already
    at_s = room.howl_at_s()
    assert at_s is not None
    assert at_s < 2.0
    assert room.guard.frequency_hz == pytest.approx(500.0, abs=10.0)
    assert not room.guard.ducked


@pytest.mark.parametrize(
    "source",
    [
        3.0 * NOTE,
        3.0 * NOTE * (1.0 + 0.3 * np.sin(2 * np.pi * 5 * TIME_S)),
        3.0 * NOTE * np.exp(-0.5 * TIME_S),
        3.0 * NOTE * (np.sin(2 * np.pi * 2.5 * TIME_S) > -0.5),
        3.0 * NOTE * (0.5 + 0.5 * (np.sin(2 * np.pi * 0.8 * TIME_S) > 0.0)),
        3.0 * np.sign(NOTE),
        np.random.default_rng(4).normal(0.0, 3.0, len(TIME_S)),
    ],
    ids=["note", "tremolo", "decaying", "beats", "loud and soft", "square", "noise"],
)
@pytest.mark.parametrize("coupling", [0.0, 0.05])
def test_what_clips_without_coming_round_is_no_howl(source: np.ndarray, coupling: float) -> None:
    assert Room(source, gain=10.0, coupling=coupling).howl_at_s() is None


def test_a_steady_sound_below_every_limit_is_left_alone() -> None:
    room = Room(0.05 * NOTE, gain=10.0, coupling=0.05)
    assert room.howl_at_s() is None
    assert room.ducks == 0


@pytest.mark.parametrize("gap", [0.2, 0.5, 0.7])
@pytest.mark.parametrize("delay_s", [0.15, 0.2, 0.265])
def test_a_howl_that_comes_round_with_gaps_is_heard(gap: float, delay_s: float) -> None:
    hiss = np.random.default_rng(3).normal(0.0, 1e-6, 6 * RATE_HZ)
    room = Room(hiss, gain=20.0, coupling=0.1, delay_s=delay_s)
    tone = np.sin(2 * np.pi * 500 * np.arange(room.delay) / RATE_HZ)
    room.played[: room.delay] = LIMIT_V * np.sign(tone) * (np.arange(room.delay) >= gap * room.delay)
    at_s = room.howl_at_s()
    assert at_s is not None
    assert at_s < 3.0


def test_a_steady_sound_at_a_limit_is_tried_three_times_for_a_moment() -> None:
    room = Room(3.0 * np.tile(NOTE, 4), gain=10.0, coupling=0.05)
    assert room.howl_at_s() is None
    assert room.ducks == 3
    assert room.ducked_looks <= 3 * (15 + 5)
