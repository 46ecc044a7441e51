"""Reading ahead: the same samples, exact turns, seeks that do not block."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path
from time import monotonic

import numpy as np
import pytest
import soundfile

from preview.audio.prefetch import Prefetch
from preview.audio.source import FileSource
from preview.errors import AudioFileError

RATE = 48_000
FRAMES = 5 * RATE


class CountingSource:
    """A source whose sample is its frame number; can be short, slow or damaged."""

    channels = 2
    sample_rate_hz = RATE

    def __init__(
        self, frames: int = FRAMES, *, holds: int | None = None, damaged_at: int | None = None
    ) -> None:
        self.frames = frames
        self.at = 0
        self.seeks = 0
        self.closed = False
        self.gate = threading.Event()
        self.gate.set()
        self._holds = frames if holds is None else holds
        self._damaged_at = damaged_at

    def read(self, samples_out: np.ndarray) -> int:
        self.gate.wait(5)
        stop = self._holds if self._damaged_at is None else min(self._holds, self._damaged_at)
        count = max(0, min(len(samples_out), stop - self.at))
        if count == 0 and self._damaged_at is not None:
            raise AudioFileError(f"damaged at frame {self._damaged_at}")
        samples_out[:count] = np.arange(self.at, self.at + count)[:, None]
        self.at += count
        return count

    def seek(self, frame: int) -> None:
        if frame != self.at:
            self.seeks += 1
        self.at = frame

    def close(self) -> None:
        self.closed = True


def take(prefetch: Prefetch, frames: int, block_frames: int = 512) -> np.ndarray:
    """That many frames as numbers, or all up to the end; each block's place is checked on the way."""
    parts, got = [], 0
    block = np.full((block_frames, 2), -1.0)
    deadline = monotonic() + 20
    while got < frames and not prefetch.at_end:
        count = prefetch.read(block[: min(block_frames, frames - got)])
        if count:
            assert block[0, 0] == prefetch.began_at
            assert (block[:count, 0] == block[:count, 1]).all()
            parts.append(block[:count, 0].copy())
            got += count
        else:
            assert prefetch.wait_ready(5) or prefetch.at_end
        assert monotonic() < deadline
    return np.concatenate(parts) if parts else np.empty(0)


@pytest.fixture
def counting() -> Iterator[tuple[CountingSource, Prefetch]]:
    source = CountingSource()
    with Prefetch(source) as prefetch:
        yield source, prefetch
    assert source.closed


@pytest.mark.parametrize("block_frames", [17, 509, 4096, 60_000])
def test_every_block_size_gives_the_whole_file_and_then_the_end(
    counting: tuple[CountingSource, Prefetch], block_frames: int
) -> None:
    _, prefetch = counting
    np.testing.assert_array_equal(take(prefetch, FRAMES + 1, block_frames), np.arange(FRAMES))
    assert prefetch.at_end
    assert prefetch.position == FRAMES
    assert prefetch.read(np.empty((10, 2))) == 0


@pytest.mark.parametrize("region", [(1000, 1001), (1000, 1777), (900, 20_000), (1000, FRAMES)])
def test_a_loop_turns_on_the_very_frame(
    counting: tuple[CountingSource, Prefetch], region: tuple[int, int]
) -> None:
    source, prefetch = counting
    start, end = region
    prefetch.set_region(start, end, True)
    prefetch.seek(950)
    got = take(prefetch, 2 * (end - 950) + 3000)
    turns = np.concatenate(
        [np.arange(950, end), np.tile(np.arange(start, end), 1 + len(got) // (end - start))]
    )
    np.testing.assert_array_equal(got, turns[: len(got)])
    assert not prefetch.at_end
    assert source.seeks < 6, "a short region goes round in memory"


def test_a_loop_longer_than_memory_holds_turns_without_a_gap() -> None:
    source = CountingSource(frames=(17 << 20) // 16)
    with Prefetch(source, loop=True) as prefetch:
        prefetch.seek(source.frames - 700)
        got = take(prefetch, 1500)
    np.testing.assert_array_equal(got, np.r_[source.frames - 700 : source.frames, 0:800])


def test_a_region_without_a_loop_ends_at_its_end(counting: tuple[CountingSource, Prefetch]) -> None:
    _, prefetch = counting
    prefetch.set_region(100, 5000, False)
    prefetch.seek(100)
    np.testing.assert_array_equal(take(prefetch, 99_999), np.arange(100, 5000))
    assert prefetch.at_end
    assert prefetch.position == 5000


def test_a_seek_returns_at_once_and_gives_nothing_old(counting: tuple[CountingSource, Prefetch]) -> None:
    source, prefetch = counting
    take(prefetch, 5000)
    source.gate.clear()  # the disk sleeps
    prefetch.seek(123_456)
    assert not prefetch.ready
    assert prefetch.position == 123_456
    assert prefetch.read(np.empty((64, 2))) == 0
    assert not prefetch.at_end
    assert not prefetch.wait_ready(0.05)
    source.gate.set()
    assert prefetch.wait_ready(5)
    np.testing.assert_array_equal(take(prefetch, 1000), np.arange(123_456, 124_456))


def test_many_seeks_end_at_the_last(counting: tuple[CountingSource, Prefetch]) -> None:
    _, prefetch = counting
    for frame in np.random.default_rng(2).integers(0, FRAMES, 200):
        prefetch.seek(int(frame))
    prefetch.seek(777)
    assert take(prefetch, 1)[0] == 777
    prefetch.seek(FRAMES + 10)
    assert prefetch.wait_ready(5)
    assert prefetch.at_end
    prefetch.seek(-5)
    assert take(prefetch, 1)[0] == 0


def test_a_new_region_around_the_present_frame_is_not_heard(
    counting: tuple[CountingSource, Prefetch],
) -> None:
    _, prefetch = counting
    prefetch.set_region(None, None, True)
    prefetch.seek(100_000)
    assert prefetch.wait_ready(5)
    heard = [take(prefetch, 512)]
    for step in range(1, 60):
        now = prefetch.position
        prefetch.set_region(now - 10 * step, now + 2000 + step, step % 2 == 0)
        heard.append(take(prefetch, 512))
        assert prefetch.wait_ready(5)
        heard.append(take(prefetch, 700))
    got = np.concatenate(heard)
    np.testing.assert_array_equal(got, np.arange(100_000, 100_000 + len(got)))


def test_a_region_that_lies_before_the_present_frame_is_entered_by_a_seek(
    counting: tuple[CountingSource, Prefetch],
) -> None:
    _, prefetch = counting
    prefetch.seek(100_000)
    take(prefetch, 512)
    assert not prefetch.strays
    prefetch.set_region(5000, 9000, True)
    assert prefetch.wait_ready(5)
    assert prefetch.strays
    np.testing.assert_array_equal(take(prefetch, 1000), np.arange(100_512, 101_512))  # no jump by itself
    prefetch.seek(8000)
    assert not prefetch.strays
    np.testing.assert_array_equal(take(prefetch, 5000), np.r_[8000:9000, 5000:9000])


@pytest.mark.parametrize(
    ("region", "played", "strays"),
    [
        ((1000, 21_000), 3000, False),  # it has gone round the old region
        ((None, None), 3000, False),
        ((1000, 20_500), 600, True),  # it has left the new one
    ],
)
def test_what_plays_on_while_a_new_region_is_read_does_not_jump(
    counting: tuple[CountingSource, Prefetch],
    region: tuple[int | None, int | None],
    played: int,
    strays: bool,
) -> None:
    source, prefetch = counting
    prefetch.set_region(1000, 22_000, True)
    prefetch.seek(20_000)
    assert prefetch.wait_ready(5, frames=30_000)
    got = [take(prefetch, 100)]
    source.gate.clear()  # the disk is busy
    prefetch.set_region(*region, True)
    got.append(take(prefetch, played))
    assert not prefetch.strays, "nobody knows yet"
    source.gate.set()
    assert prefetch.wait_ready(5)
    assert prefetch.strays == strays
    got.append(take(prefetch, 500))
    whole = np.r_[20_000:22_000, 1000:22_000]
    np.testing.assert_array_equal(np.concatenate(got), whole[: 600 + played])


@pytest.mark.parametrize("start", [0, 30_000, 70_000])
def test_a_file_shorter_than_promised_ends_where_it_ends_and_loops_from_there(start: int) -> None:
    source = CountingSource(frames=(40 << 20) // 16, holds=50_000)
    with Prefetch(source, loop=True) as prefetch:
        prefetch.seek(start)
        got = take(prefetch, 120_000)
        first = np.arange(start, max(start, 50_000))
        np.testing.assert_array_equal(got, np.concatenate([first, np.tile(np.arange(50_000), 3)])[: len(got)])
        assert prefetch.frames == 50_000


def test_damage_is_kept_for_the_caller_and_ends_the_sound() -> None:
    source = CountingSource(damaged_at=10_000)
    with Prefetch(source) as prefetch:
        np.testing.assert_array_equal(take(prefetch, 99_999), np.arange(10_000))
        assert prefetch.at_end
        assert str(prefetch.error) == "damaged at frame 10000"
        prefetch.seek(40)
        np.testing.assert_array_equal(take(prefetch, 100), np.arange(40, 140))


def test_damage_at_once_is_an_end_and_not_a_hang() -> None:
    with Prefetch(CountingSource(damaged_at=0), loop=True) as prefetch:
        assert prefetch.wait_ready(5)
        assert prefetch.read(np.empty((10, 2))) == 0
        assert prefetch.at_end
        assert prefetch.error is not None


def test_a_broken_source_is_an_end_and_not_a_hang() -> None:
    source = CountingSource()
    source.read = lambda samples_out: 1 // 0  # type: ignore[method-assign]  # the fault under test
    with Prefetch(source) as prefetch:
        assert prefetch.wait_ready(5)
        assert "reading ahead failed" in str(prefetch.error)
        assert prefetch.at_end


def test_a_starved_reader_gets_what_there_is_and_is_counted() -> None:
    source = CountingSource()
    with Prefetch(source) as prefetch:
        assert prefetch.wait_ready(5, frames=40_000)
        source.gate.clear()
        block = np.empty((60_000, 2))
        assert 0 < prefetch.read(block) <= 60_000
        assert prefetch.read(block) < 60_000
        assert prefetch.starved >= 1
        source.gate.set()


def test_a_real_file_comes_through_unchanged(tmp_path: Path) -> None:
    samples = np.random.default_rng(1).uniform(-1, 1, (FRAMES, 2)).astype(np.float32).astype(np.float64)
    soundfile.write(tmp_path / "x.wav", samples, RATE, subtype="FLOAT")
    with Prefetch(FileSource(tmp_path / "x.wav")) as prefetch:
        block, parts = np.empty((512, 2)), []
        while not prefetch.at_end:
            if count := prefetch.read(block):
                parts.append(block[:count].copy())
            else:
                assert prefetch.wait_ready(5)
    np.testing.assert_array_equal(np.concatenate(parts), samples)


def test_memory_does_not_depend_on_the_length() -> None:
    with Prefetch(CountingSource(frames=1000 * RATE)) as long, Prefetch(CountingSource(frames=RATE)) as short:
        assert long.memory_bytes == short.memory_bytes < 2 << 20
