"""Live input between the callback that recorded it and the player."""

from __future__ import annotations

import numpy as np

from preview.audio.live import LiveReader


def block(value: float, frames: int = 256) -> np.ndarray:
    return np.full((frames, 2), value, np.float32)


def read(live: LiveReader, frames: int = 256) -> np.ndarray:
    out = np.full((frames, 2), np.nan)
    assert live.read(out) == frames
    return out


def test_what_was_just_recorded_is_read_at_once_to_the_bit():
    live = LiveReader(48_000, 2)
    noise = np.random.default_rng(1).uniform(-1, 1, (1024, 2)).astype(np.float32)
    for first in range(0, 1024, 256):
        live.take(noise[first : first + 256])
        np.testing.assert_array_equal(read(live), noise[first : first + 256])
    assert live.position == 1024


def test_without_a_device_it_reads_silence_and_never_ends():
    live = LiveReader(48_000, 2)
    assert not read(live).any()
    assert (live.at_end, live.ready, live.position) == (False, True, 256)


def test_what_is_read_in_pieces_stays_in_order():
    live = LiveReader(48_000, 1)
    live.take(np.arange(100, dtype=np.float32)[:, None])
    out = np.zeros((40, 1))
    live.read(out)
    live.take(np.arange(100, 130, dtype=np.float32)[:, None])
    rest = np.zeros((100, 1))
    live.read(rest)
    np.testing.assert_array_equal(np.concatenate([out, rest])[:130, 0], np.arange(130))
    assert not rest[90:].any()


def test_what_was_recorded_while_nobody_read_does_not_delay_what_comes():
    live = LiveReader(48_000, 2)
    for _ in range(1000):
        live.take(block(0.5))
    live.seek(0)
    live.take(block(0.25))
    assert (read(live) == 0.25).all()


def test_samples_that_are_no_numbers_are_silence():
    live = LiveReader(48_000, 2)
    bad = block(0.5)
    bad[3, 0], bad[4, 1] = np.nan, np.inf
    live.take(bad)
    heard = read(live)
    assert heard[3, 0] == heard[4, 1] == 0.0
    assert np.count_nonzero(heard == 0.5) == heard.size - 2


def test_the_last_ten_seconds_are_kept_in_order():
    live = LiveReader(1000, 1)
    count = np.arange(25_000, dtype=np.float32)[:, None]
    live.take(count[:100])
    np.testing.assert_array_equal(live.history(), count[:100])
    for first in range(100, 25_000, 300):
        live.take(count[first : first + 300])
    np.testing.assert_array_equal(live.history(), count[-10_000:])
