"""Devices that come, go and are chosen while the engine runs, on a private sound server."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import pytest

import preview.dsp.kernels  # noqa: F401 - names the folder of compiled kernels, for the desks started here too
from tests.engine.test_sound import DESK, RATE_HZ, noise_file

pytestmark = [pytest.mark.sound, pytest.mark.slow]


def test_a_device_that_comes_after_the_start_is_taken_up(sound_server: Any, tmp_path: Path) -> None:
    audio = noise_file(tmp_path / "noise.wav", 20.0)
    then = """
assert first.output_name == "silent clock", first
print("ready", flush=True); sys.stdin.readline(); began = time.monotonic()
there = wait(lambda s: s.output_name != "silent clock" and s.playing)
print("there after", time.monotonic() - began, there.output_name, flush=True)
"""
    sound_server.unplug()
    desk = sound_server.start(DESK, str(audio), "loop", then, str(tmp_path / "log"))
    try:
        lines = []
        while (line := desk.stdout.readline()) and line != "ready\n":
            lines.append(line)
        assert any("no sound" in one for one in lines), (
            lines,
            desk.stderr.read()[-2000:] if not line else "",
        )
        sound_server.plug()
        out, trouble = desk.communicate("go\n", timeout=60)
        assert desk.returncode == 0, trouble[-2000:]
    finally:
        if desk.poll() is None:
            desk.kill()
    after = next(line for line in out.splitlines() if line.startswith("there after"))
    assert float(after.split()[2]) < 3.0


def test_another_device_is_played_through_at_the_same_place_and_one_that_is_not_there_is_said(
    sound_server: Any, tmp_path: Path
) -> None:
    audio = noise_file(tmp_path / "noise.wav", 30.0)
    then = """
engine.send(messages.RescanDevices())
deadline = time.monotonic() + 30
listed = []
while not listed and time.monotonic() < deadline:
    listed = [r for r in engine.reports() if type(r).__name__ == "DeviceList"]
    time.sleep(0.005)
print("listed", sorted(row.name for row in listed[0].devices), flush=True)
print("dropouts", wait(lambda s: True).dropouts, flush=True)
before = wait(lambda s: True)
engine.send(messages.SetDevice("feed"))
after = wait(lambda s: s.output_name == "feed" and s.playing and s.position_frame > before.position_frame)
print("moved on", (after.position_frame - before.position_frame) / after.sample_rate_hz, flush=True)
engine.send(messages.SetDevice("cellar"))
wait(lambda s: s.output_name == "default" and s.playing)
"""
    lines = []
    out = sound_server.run(DESK, str(audio), "loop", then, str(tmp_path / "log"), timeout_s=100)
    lines = out.splitlines()
    listed = next(line for line in lines if line.startswith("listed"))
    assert all(repr(name) in listed for name in ("ears", "ears_mon", "feed", "feed_mon", "default"))
    assert "dropouts 0" in lines, "listing does not disturb the sound"
    # the fade, the buffer still on its way when it waits, and what was played since: nothing is skipped
    assert 0.0 < float(next(line for line in lines if line.startswith("moved on")).split()[-1]) < 0.6
    assert any("output device cellar: there is none of that name" in line for line in lines), lines


def test_a_named_device_that_another_stands_in_for_is_taken_back_when_it_is_there(
    sound_server: Any, tmp_path: Path
) -> None:
    audio = noise_file(tmp_path / "noise.wav", 30.0)
    then = """
engine.send(messages.SetDevice("feed"))
wait(lambda s: s.output_name == "default" and s.playing)
print("stands in", flush=True); sys.stdin.readline()
before = wait(lambda s: True)
after = wait(lambda s: s.output_name == "feed" and s.playing and s.position_frame > before.position_frame)
tell()
"""
    sound_server.take_away("feed")
    with sound_server.start(DESK, str(audio), "loop", then, str(tmp_path / "log")) as desk:
        lines = []
        while (line := desk.stdout.readline()) and line != "stands in\n":
            lines.append(line)
        assert line, desk.stderr.read()[-2000:]
        assert any("using default" in one for one in lines), lines
        sound_server.bring("feed")
        out, trouble = desk.communicate("go\n", timeout=90)
    assert desk.returncode == 0, trouble[-2000:]
    assert "sound is back on feed" in out


def test_of_four_channels_the_first_two_are_played_and_that_is_said(
    sound_server: Any, tmp_path: Path
) -> None:
    import numpy as np

    from preview.audio.sink import FileSink

    path = tmp_path / "four.wav"
    with FileSink(path, sample_rate_hz=RATE_HZ, channels=4) as sink:
        sink.write(np.full((RATE_HZ, 4), 0.01))
    then = """
heard = wait(lambda s: s.heard_channels)
print("heard", heard.heard_channels, "of", heard.channels, flush=True)
engine.send(messages.SetHeardChannels((2, 3)))
print("heard", wait(lambda s: s.heard_channels == (2, 3)).heard_channels, flush=True)
"""
    out = sound_server.run(DESK, str(path), "loop", then, str(tmp_path / "log"), timeout_s=100)
    assert "heard (0, 1) of 4" in out
    assert "heard (2, 3)" in out
    assert "notice warning 4 channels: 1 and 2 heard on default" in out
    assert "notice warning 4 channels: 3 and 4 heard on default" in out


def test_an_engine_that_was_killed_is_replaced_at_the_same_place(sound_server: Any, tmp_path: Path) -> None:
    audio = noise_file(tmp_path / "noise.wav", 30.0)
    then = """
import os, signal
from dataclasses import replace
from preview.engine.spare import Spare
spare = Spare(0.0)
spare.keep_beside(engine)
while spare.waiting is None:
    time.sleep(0.01)
time.sleep(4.0)  # it loads meanwhile
before = wait(lambda s: s.position_frame > 96_000)
os.kill(engine.pid, signal.SIGKILL)
killed = time.monotonic()
while engine.alive:
    time.sleep(0.002)
print("seen after", time.monotonic() - killed, engine.ending, flush=True)
config = EngineConfig(session=session, start_volume_db=0.0, block_frames=512, play=True, log=Path(log),
                      start_frame=before.position_frame)
engine = spare.begin(config)
heard = wait(lambda s: s.playing and s.position_frame > before.position_frame)
print("heard after", time.monotonic() - killed, heard.output_name, flush=True)
assert heard.position_frame - before.position_frame < 24_000
spare.close()
"""
    out = sound_server.run(DESK, str(audio), "loop", then, str(tmp_path / "log"), timeout_s=100)
    seen, heard = (
        next(line for line in out.splitlines() if line.startswith(word)) for word in ("seen", "heard")
    )
    assert float(seen.split()[2]) < 1.0
    assert seen.endswith("the engine was ended by signal SIGKILL")
    after_s, load = float(heard.split()[2]), os.getloadavg()[0]
    if after_s >= 2.0 and load > (os.cpu_count() or 1):
        pytest.skip(f"the machine is too busy to judge: {after_s:.1f} s at a load of {load:.1f}")
    assert after_s < 2.0
