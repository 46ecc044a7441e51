"""The guard before every output, the silent clock, and a machine without PortAudio."""

from __future__ import annotations

import subprocess
import sys
import threading
from time import monotonic

import numpy as np
import pytest

from preview.audio.clock import SilentClock
from preview.audio.output import Guard


def test_the_guard_passes_what_is_harmless_untouched() -> None:
    samples = np.random.default_rng(1).uniform(-1, 1, (64, 2)).astype(np.float32)
    samples[0] = [1.0, -1.0]

    def fill(out: np.ndarray) -> None:
        out[:] = samples

    guard, out = Guard(fill, 64, 2), np.zeros((64, 2), np.float32)
    guard(out)
    np.testing.assert_array_equal(out, samples)
    assert (guard.limited_blocks, guard.failed_blocks, guard.failure) == (0, 0, None)


@pytest.mark.parametrize(
    ("bad", "becomes"),
    [
        (np.nan, 0.0),
        (np.inf, 0.0),
        (-np.inf, 0.0),
        (1.5, 1.0),
        (-3e38, -1.0),
        (np.nextafter(np.float32(1), np.float32(2)), 1.0),
    ],
)
def test_the_guard_lets_nothing_non_finite_or_above_full_scale_through(bad: float, becomes: float) -> None:
    def fill(out: np.ndarray) -> None:
        out[:] = 0.5
        out[3, 1] = bad

    guard, out = Guard(fill, 64, 2), np.zeros((8, 2), np.float32)  # another size than announced
    guard(out)
    guard(out)
    assert out[3, 1] == becomes
    out[3, 1] = 0.5
    assert (out == 0.5).all()
    assert guard.limited_blocks == 2


def test_the_guard_turns_any_error_into_silence() -> None:
    def fill(out: np.ndarray) -> None:
        out[:] = 0.7
        raise KeyError("gone")

    guard, out = Guard(fill, 8, 1), np.ones((8, 1), np.float32)
    guard(out)
    assert not out.any()
    assert guard.failed_blocks == 1
    assert isinstance(guard.failure, KeyError)


def test_the_silent_clock_keeps_real_time_without_drift() -> None:
    times: list[float] = []
    enough = threading.Event()

    def fill(out: np.ndarray) -> None:
        assert out.shape == (480, 2)
        assert out.dtype == np.float32
        times.append(monotonic())
        if len(times) == 60:
            enough.set()

    clock = SilentClock(48_000, 2, 480, fill)
    assert clock.name == "silent clock"
    assert clock.latency_s == 0.01
    clock.start()
    clock.start()
    assert enough.wait(10)
    clock.close()
    clock.close()
    blocks = len(times) + clock.underflows
    # Block k is due at k x 10 ms after the first; none may come early, and the last not later than the
    # lateness (4 blocks) at which the clock skips.
    lag_s = times[-1] - times[0] - (blocks - 1) * 0.01
    assert -0.002 <= lag_s < 0.05
    assert clock.last_callback_s <= times[-1]
    count = len(times)
    clock.start()
    assert len(times) == count, "closed is closed"


def test_the_silent_clock_skips_what_it_cannot_catch_up_and_counts_it() -> None:
    calls = 0
    hold, go = threading.Event(), threading.Event()
    enough = threading.Event()

    def fill(out: np.ndarray) -> None:
        nonlocal calls
        calls += 1
        if calls == 3:
            hold.set()
            go.wait(5)
        if calls == 10:
            enough.set()

    clock = SilentClock(48_000, 1, 48, fill)
    clock.start()
    assert hold.wait(5)
    begin = monotonic()
    while monotonic() - begin < 0.03:  # the block takes 30 of its milliseconds
        pass
    go.set()
    assert enough.wait(5)
    clock.close()
    assert clock.underflows >= 25


def test_trouble_in_a_silent_block_does_not_stop_the_clock() -> None:
    calls = 0
    enough = threading.Event()

    def fill(out: np.ndarray) -> None:
        nonlocal calls
        calls += 1
        if calls == 5:
            enough.set()
        raise RuntimeError("lost")

    clock = SilentClock(48_000, 1, 48, fill)
    clock.start()
    assert enough.wait(5)
    clock.close()
    assert clock.guard.failed_blocks >= 5


WITHOUT = """
import ctypes.util, sys
real = ctypes.util.find_library
ctypes.util.find_library = lambda name: None if "portaudio" in name else real(name)
import preview.audio.devices as devices, preview.audio.stream as stream
import preview.audio.clock, preview.audio.source, preview.audio.sink
assert "sounddevice" not in sys.modules
from preview.errors import DeviceError
for action in (devices.output_devices, devices.refresh, lambda: stream.open_output(
        None, sample_rate_hz=48000, channels=2, block_frames=512, fill=lambda out: None)):
    try:
        action()
    except DeviceError as error:
        print(error, error.exit_code)
"""


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere the package brings its own PortAudio")
def test_without_portaudio_the_message_names_the_package() -> None:
    done = subprocess.run([sys.executable, "-c", WITHOUT], capture_output=True, text=True, timeout=60)
    line = (
        "the audio library PortAudio is not installed (Debian and Ubuntu: apt install libportaudio2; "
        "macOS: brew install portaudio) 4\n"
    )
    assert done.stdout == 3 * line, done.stderr


def test_the_audio_room_loads_no_slow_library() -> None:
    script = (
        "import sys, preview.audio.stream, preview.audio.live, preview.audio.clock\n"
        "import preview.audio.source, preview.audio.sink\n"
        "import preview.audio.prefetch, preview.audio.signals, preview.meters.level\n"
        "print([m for m in ('sounddevice', 'numba', 'scipy', 'soxr', 'textual') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60)
    assert done.stdout == "[]\n", done.stderr
