"""The engine process on a real PortAudio device: a private null sink whose monitor is recorded."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

import preview.dsp.kernels  # noqa: F401 - names the folder of compiled kernels, for the desks started here too
from preview.audio.sink import FileSink
from preview.cli import main

pytestmark = pytest.mark.sound

RATE_HZ = 48000
RAMP_FRAMES = 480

DESK = """
import sys, time
from pathlib import Path
from preview.circuit.library import find_stage
from preview.engine import messages
from preview.engine.process import EngineConfig, EngineProcess
from preview.session import AtEnd, Session
from preview.values.levels import parse_full_scale

audio, end, then, log = sys.argv[1:5]

def wait(until):
    deadline = time.monotonic() + 30
    line = None
    while time.monotonic() < deadline:
        line = engine.latest() or line
        tell()
        if line is not None and until(line):
            return line
        time.sleep(0.005)
    raise SystemExit("never came: " + repr(line))

def tell():
    for notice in engine.notices():
        print("notice", notice.severity, notice.text, flush=True)

def work(seconds):  # a desk that is busy in pure Python, garbage and all
    stop = time.monotonic() + seconds
    while time.monotonic() < stop:
        kept = [{"row": [i] * 5} for i in range(2000)]

began = time.monotonic()
stage = find_stage("inverting-low-pass")
session = Session(Path(audio), stage, stage.supply, parse_full_scale("10 V"), at_end=AtEnd(end))
engine = EngineProcess.start(
    EngineConfig(session=session, start_volume_db=0.0, block_frames=512, play=True, log=Path(log))
)
first = wait(lambda s: s.position_frame > 0)
print("sound", first.output_name, round(time.monotonic() - began, 2), flush=True)
exec(then)
tell()
engine.close()
"""


def noise_file(path: Path, seconds: float) -> Path:
    """Stereo noise that stays off the rails behind a gain of ten."""
    samples = np.random.default_rng(11).uniform(-0.05, 0.05, (round(seconds * RATE_HZ), 2))
    with FileSink(path, sample_rate_hz=RATE_HZ, channels=2) as sink:
        sink.write(samples)
    return path


def told(server: Any, audio: Path, end: str, then: str, *, timeout_s: float = 100.0) -> list[str]:
    """Lines that a desk printed which started an engine, waited for sound and did ``then``."""
    out = server.run(DESK, str(audio), end, then, str(audio.parent / "log"), timeout_s=timeout_s)
    return [line for line in out.splitlines() if line]


def test_the_devices_monitor_hears_the_rendered_samples(sound_server: Any, tmp_path: Path) -> None:
    audio = noise_file(tmp_path / "noise.wav", 2.0)
    out = tmp_path / "render.wav"
    assert main(["render", str(audio), str(out), "--full-scale", "10 V"]) == 0
    rendered = soundfile.read(out, dtype="float32")[0]
    recording = sound_server.record(10 * RATE_HZ)
    then = (
        "print('dropouts', wait(lambda s: not s.playing).dropouts); time.sleep(0.3)  # the device's own delay"
    )
    lines = told(sound_server, audio, "stop", then)
    heard = recording.samples()
    assert "dropouts 0" in lines
    first = int(np.flatnonzero(heard.any(axis=1))[0])
    whole = heard[first : first + len(rendered)]
    # the start ramp of 10 ms is the only difference; to 24 bits would be 6e-8, it is to the last bit
    np.testing.assert_array_equal(whole[RAMP_FRAMES:], rendered[RAMP_FRAMES:])
    assert not heard[first + len(rendered) + RAMP_FRAMES + 512 :].any()


@pytest.mark.slow
def test_no_block_is_missed_in_60_s_while_the_desk_is_busy(sound_server: Any, tmp_path: Path) -> None:
    audio = noise_file(tmp_path / "noise.wav", 3.0)
    lines = told(sound_server, audio, "loop", "work(60); print('dropouts', wait(lambda s: True).dropouts)")
    assert "dropouts 0" in lines


@pytest.mark.slow
@pytest.mark.parametrize("how", ["unplug", "freeze", "end"])
def test_a_lost_device_is_told_within_a_second_and_taken_up_again_at_the_same_place(
    sound_server: Any, tmp_path: Path, how: str
) -> None:
    audio = noise_file(tmp_path / "noise.wav", 20.0)
    then = """
print("ready", flush=True); sys.stdin.readline(); gone = time.monotonic()
lost = wait(lambda s: s.output_name == "silent clock")
print("lost after", time.monotonic() - gone, flush=True)
held = wait(lambda s: not s.playing)
for _ in range(20):
    assert wait(lambda s: True).position_frame == held.position_frame
print("held", flush=True); sys.stdin.readline(); back = time.monotonic()
wait(lambda s: s.output_name != "silent clock" and s.playing and s.position_frame > held.position_frame)
print("back after", time.monotonic() - back, flush=True)
"""
    desk = sound_server.start(DESK, str(audio), "loop", then, str(tmp_path / "log"))
    try:
        seen: list[str] = []

        def read_until(word: str) -> str:
            while not (line := desk.stdout.readline()).startswith(word):
                assert line, (seen, desk.stderr.read()[-2000:])
                seen.append(line)
            return str(line)

        def go() -> None:
            desk.stdin.write("\n")
            desk.stdin.flush()

        read_until("ready")
        getattr(sound_server, how)()
        go()
        assert float(read_until("lost after").split()[-1]) < 1.0
        read_until("held")
        {"unplug": sound_server.plug, "freeze": sound_server.thaw, "end": sound_server.restart}[how]()
        go()
        assert float(read_until("back after").split()[-1]) < 2.0
        assert any("has stopped" in line for line in seen)
        assert desk.wait(20) == 0
    finally:
        if desk.poll() is None:
            desk.kill()
        desk.communicate()
