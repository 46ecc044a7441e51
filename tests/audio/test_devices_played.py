"""Through a real PortAudio: what is played arrives, and every way of losing a device is survived."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

pytestmark = pytest.mark.sound

PLAY = """
import gc, json, sys, time
import numpy as np
from preview.audio.stream import open_output
block, frames = int(sys.argv[1]), int(sys.argv[2])
samples = np.random.default_rng(7).uniform(-0.9, 0.9, (frames, 2)).astype(np.float32)
at = 0
def fill(out):
    global at
    n = min(len(out), frames - at)
    out[:n] = samples[at:at + n]
    out[n:] = 0
    at += n
gc.collect(); gc.freeze(); gc.disable()
stream = open_output(
    "ears", sample_rate_hz=48000, channels=2, block_frames=block, fill=fill, latency=0.2
)  # a long buffer: this is about the bits, also on a machine that is busy with other tests
stream.start()
deadline = time.monotonic() + frames / 48000 + 5
while at < frames and time.monotonic() < deadline:
    time.sleep(0.01)
stream.close()  # at once: what was computed must still be heard
print(json.dumps({"underflows": stream.underflows, "latency_s": stream.latency_s, "name": stream.name,
                  "limited": stream.guard.limited_blocks, "failed": stream.guard.failed_blocks}))
"""


@pytest.mark.parametrize("block_frames", [256, 512])
def test_what_is_played_arrives_bit_for_bit(sound_server: Any, block_frames: int) -> None:
    frames = 2 * 48_000
    sent = np.random.default_rng(7).uniform(-0.9, 0.9, (frames, 2)).astype(np.float32)
    recording = sound_server.record(frames + 20 * 48_000)
    told = json.loads(sound_server.run(PLAY, str(block_frames), str(frames)))
    heard = recording.samples()
    assert told["underflows"] == 0
    assert told["limited"] == told["failed"] == 0
    first = np.flatnonzero(heard.any(axis=1))[0]
    np.testing.assert_array_equal(heard[first : first + frames], sent)


def test_trouble_in_the_callback_is_silence_and_counted(sound_server: Any) -> None:
    script = """
import json, time
import numpy as np
from preview.audio.stream import open_output
calls = 0
def fill(out):
    global calls
    calls += 1
    out[:] = 0.25
    if calls % 3 == 0:
        out[5, 1] = np.nan; out[6, 0] = 4.0; out[7, 0] = -np.inf
    if calls % 3 == 1:
        raise RuntimeError("lost")
stream = open_output("ears", sample_rate_hz=48000, channels=2, block_frames=512, fill=fill)
stream.start()
deadline = time.monotonic() + 5
while calls < 60 and time.monotonic() < deadline:
    time.sleep(0.01)
stream.close()
print(json.dumps([calls, stream.guard.failed_blocks, stream.guard.limited_blocks, str(stream.guard.failure)]))
"""
    recording = sound_server.record(20 * 48_000)
    calls, failed, limited, failure = json.loads(sound_server.run(script))
    heard = recording.samples()
    assert calls >= 60
    assert failed == pytest.approx(calls / 3, abs=1)
    assert limited == pytest.approx(calls / 3, abs=1)
    assert failure == "lost"
    assert np.isfinite(heard).all()
    assert set(np.unique(heard)) == {0.0, 0.25, 1.0}


def test_a_device_that_is_taken_away_is_told_once_and_can_come_back(sound_server: Any) -> None:
    script = """
import sys, time
from preview.audio.devices import refresh
from preview.audio.stream import open_output
calls = ended = 0
def fill(out):
    global calls
    calls += 1
    out.fill(0)
def finished():
    global ended
    ended += 1
def wait(condition, seconds=8):
    deadline = time.monotonic() + seconds
    while not condition() and time.monotonic() < deadline:
        time.sleep(0.005)
    return condition()
def play():
    return open_output(
        "ears", sample_rate_hz=48000, channels=2, block_frames=512, fill=fill, finished=finished
    )
stream = play(); stream.start()
assert wait(lambda: calls > 10)
print("playing", flush=True)
assert wait(lambda: ended == 1), "nobody was told"
before = time.monotonic()
stream.close(); stream.close()
assert time.monotonic() - before < 2
print("lost", flush=True)
sys.stdin.readline()
refresh()
stream = play(); stream.start()
calls = 0
assert wait(lambda: calls > 10)
stream.close()
assert ended == 1, "closing is not losing"
print("well")
"""
    with sound_server.start(script) as process:
        assert process.stdout.readline() == "playing\n"
        sound_server.unplug()
        assert process.stdout.readline() == "lost\n"
        sound_server.plug()
        out, trouble = process.communicate("back\n", timeout=30)
    assert (out, process.returncode) == ("well\n", 0), trouble


def test_a_frozen_device_is_seen_by_the_age_of_its_last_block_and_closing_does_not_hang(
    sound_server: Any,
) -> None:
    script = """
import os, signal, sys, time
from preview.audio.stream import open_output
stream = open_output("ears", sample_rate_hz=48000, channels=2, block_frames=512, fill=lambda out: out.fill(0))
stream.start()
os.kill(int(sys.argv[1]), signal.SIGSTOP)
deadline = time.monotonic() + 5
while time.monotonic() - stream.last_callback_s < 0.5 and time.monotonic() < deadline:
    time.sleep(0.01)
assert time.monotonic() - stream.last_callback_s >= 0.5
before = time.monotonic()
stream.close()
print(round(time.monotonic() - before, 2), flush=True)
os._exit(0)
"""
    try:
        closed_s = float(sound_server.run(script, str(sound_server.pid)))
    finally:
        sound_server.thaw()
    assert closed_s < 1.0


def test_devices_are_listed_and_found_by_name(sound_server: Any) -> None:
    script = """
import json
from preview.audio.devices import find_output, output_devices
from preview.audio.stream import open_output
from preview.errors import DeviceError
rows = output_devices()
words = []
for wrong in ("cellar", "e"):
    try:
        find_output(wrong)
    except DeviceError as error:
        words.append(str(error))
try:
    open_output("ears", sample_rate_hz=48000, channels=64, block_frames=64, fill=lambda out: None)
except DeviceError as error:
    words.append(str(error))
print(json.dumps([[d.name for d in rows], [d.name for d in rows if d.is_default], find_output("EARS").name,
                  find_output("ALSA: feed").name, words]))
"""
    names, default, found, by_api, words = json.loads(sound_server.run(script))
    assert {"ears", "feed", "default"} <= set(names)
    assert default == ["default"]
    assert found == "ears"
    assert by_api == "feed"
    assert words[0].startswith("output device cellar: there is none of that name (there is ears, ")
    assert words[1].startswith("output device e: several fit (ALSA: ears; ")
    assert words[2] == "output device ears: it plays 32 channels, not 64"


def test_a_dead_default_device_gives_way_to_the_next(sound_server: Any) -> None:
    script = """
import time
import preview.audio.stream as devices
rows = {device.name: (number, device) for number, device in devices.table()}
devices._candidates = lambda wanted: (rows["default"], rows["ears"])
calls = 0
def fill(out):
    global calls
    calls += 1
    out.fill(0)
real = devices.OutputStream._callback
def deaf(self, *given):
    if self.name != "default":
        real(self, *given)
devices.OutputStream._callback = deaf
stream = devices.open_output(None, sample_rate_hz=48000, channels=2, block_frames=512, fill=fill)
assert stream.name == "default"
before = time.monotonic()
stream.start()
assert 0.6 < time.monotonic() - before < 3
assert stream.name == "ears" and calls > 0
stream.close()
print("well")
"""
    assert sound_server.run(script).strip() == "well"


def test_no_server_at_all_is_one_plain_line(sound_server: Any) -> None:
    script = """
from preview.audio.devices import output_devices
from preview.audio.stream import open_output
from preview.errors import DeviceError
assert output_devices() == ()
try:
    open_output(None, sample_rate_hz=48000, channels=2, block_frames=512, fill=lambda out: None)
except DeviceError as error:
    print(error)
"""
    sound_server.end()
    told = sound_server.run(script)
    assert told == "there is no output device (--silent runs without one)\n"
