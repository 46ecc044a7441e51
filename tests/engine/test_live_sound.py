"""Live input through a real PortAudio: what comes in is heard through the stage, and a howl is muted."""

from __future__ import annotations

import math
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

import preview.dsp.kernels  # noqa: F401 - names the folder of compiled kernels, for the desks started here too

pytestmark = [pytest.mark.sound, pytest.mark.slow]

RATE_HZ = 48_000

DESK = """
import sys, time
from pathlib import Path
from preview.circuit.library import find_stage
from preview.engine import messages
from preview.engine.process import EngineConfig, EngineProcess
from preview.session import Session
from preview.values.levels import parse_full_scale

device, then, log = sys.argv[1:4]

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

stage = find_stage("inverting-low-pass")
session = Session(None, stage, stage.supply, parse_full_scale("10 V"), live=True,
                  live_device=device or None)
engine = EngineProcess.start(EngineConfig(session=session, start_volume_db=0.0, log=Path(log)))
wait(lambda s: s.playing and s.live_latency_s > 0 and s.position_frame > 0)
exec(then)
tell()
engine.close()
"""

PLAY = """
import sys, time
import numpy as np, sounddevice as sd
name, seconds, volts = sys.argv[1], float(sys.argv[2]), float(sys.argv[3])
at = 0
noise = np.random.default_rng(5).uniform(-1, 1, (480000, 1))
def fill(out, frames, times, status):
    global at
    n = at + np.arange(frames)
    out[:] = volts * (noise[n % 480000] if len(sys.argv) > 4 else np.sin(2 * np.pi * 200 * n / 48000)[:, None])
    at += frames
with sd.OutputStream(device=name, samplerate=48000, channels=2, dtype="float32", latency=0.2, callback=fill):
    print("playing", flush=True)
    time.sleep(seconds)
"""


@contextmanager
def playing(server: Any, *arguments: str) -> Iterator[subprocess.Popen[str]]:
    with server.start(PLAY, *arguments) as process:
        assert process.stdout.readline() == "playing\n"
        yield process
        process.kill()


RECORD = """
wait(lambda s: s.output.peak_v[0] > 1.9)
engine.send(messages.Export(session, Path({out!r})))
told = []
while not told or told[-1].done_frames < 48_000:
    told += engine.reports()
    time.sleep(0.01)
"""
# 0.2 V through a gain of 10 and the pole at 1591.5 Hz, of 10 V
HEARD = 0.02 * 10 / math.sqrt(1 + (200 / 1591.549) ** 2)


def test_live_input_begins_muted_and_is_heard_through_the_stage(sound_server: Any, tmp_path: Path) -> None:
    then = """
heard = wait(lambda s: s.input.peak_v[0] > 0.19)
assert heard.muted and heard.input_kind == "live", heard
print("latency", heard.live_latency_s, heard.input_name, flush=True)
sys.stdin.readline()
engine.send(messages.SetMute(False))
print("output", wait(lambda s: not s.muted and s.output.peak_v[0] > 1.9).output.peak_v, flush=True)
time.sleep(1.0)  # of sound, to be recorded
"""
    recording = sound_server.record(60 * RATE_HZ)
    with (
        playing(sound_server, "feed", "60", "0.02"),
        sound_server.start(DESK, "", then, str(tmp_path / "log")) as desk,
    ):
        line = desk.stdout.readline()
        assert line.startswith("latency"), desk.stderr.read()[-2000:] + line
        assert 0.01 < float(line.split()[1]) < 0.5
        desk.stdin.write("\n")
        desk.stdin.flush()
        assert desk.stdout.readline().startswith("output")
        assert desk.wait(20) == 0, desk.stderr.read()[-2000:]
    heard = recording.samples()
    first = int(np.flatnonzero(np.abs(heard).max(axis=1) > 0.1)[0])
    assert not heard[: first - 2 * RATE_HZ // 100].any(), "muted until it was told otherwise"
    whole = heard[first + 4800 : first + 9600, 0]
    assert np.abs(whole).max() == pytest.approx(HEARD, rel=2e-3)


def test_live_input_is_recorded_in_volts_also_while_it_is_muted(sound_server: Any, tmp_path: Path) -> None:
    then = RECORD.format(out=str(tmp_path / "live.wav"))
    then += """
engine.send(messages.CancelExport())
while told[-1].state == "running":
    told += engine.reports()
    time.sleep(0.01)
print(told[-1].text, flush=True)
"""
    with (
        playing(sound_server, "feed", "60", "0.02"),
        sound_server.start(DESK, "", then, str(tmp_path / "log")) as desk,
    ):
        out, trouble = desk.communicate(timeout=90)
    assert desk.returncode == 0, trouble[-2000:]
    assert "live.wav: 1." in out
    samples, _ = soundfile.read(tmp_path / "live.wav")
    assert np.abs(samples[:, 0]).max() == pytest.approx(HEARD, rel=2e-3)


def test_what_was_recorded_is_readable_although_the_engine_was_killed(
    sound_server: Any, tmp_path: Path
) -> None:
    then = RECORD.format(out=str(tmp_path / "live.wav"))
    then += """
import os, signal
os.kill(engine.pid, signal.SIGKILL)
print(told[-1].done_frames, told[-1].hidden, flush=True)
"""
    with (
        playing(sound_server, "feed", "60", "0.02"),
        sound_server.start(DESK, "", then, str(tmp_path / "log")) as desk,
    ):
        out, trouble = desk.communicate(timeout=90)
    assert desk.returncode == 0, trouble[-2000:]
    done, hidden = out.splitlines()[-1].split(maxsplit=1)
    assert not (tmp_path / "live.wav").exists()
    samples, _ = soundfile.read(hidden)
    assert len(samples) >= int(done) >= 48_000
    assert np.abs(samples[:, 0]).max() == pytest.approx(HEARD, rel=2e-3)


def test_a_howl_round_is_muted_and_said(sound_server: Any, tmp_path: Path) -> None:
    # what is played is recorded again: a loop with the stage's gain of 10 in it
    then = """
engine.send(messages.SetMute(False))
wait(lambda s: not s.muted)
print("open", flush=True)
began = time.monotonic()
heard = wait(lambda s: s.muted)
print("muted", time.monotonic() - began, heard.mute_reason, flush=True)
wait(lambda s: max(s.output.peak_v) < 1e-3)
print("quiet", flush=True)
"""
    with sound_server.start(DESK, "ears_mon", then, str(tmp_path / "log")) as desk:
        assert (line := desk.stdout.readline()) == "open\n", desk.stderr.read()[-2000:] + line
        with playing(sound_server, "ears", "5", "0.0001", "noise"):
            told = desk.stdout.readline()
        lines = [told, *desk.stdout, desk.stderr.read()]
    assert any(line.startswith("muted") and "howl-round at" in line for line in lines), lines
    assert "quiet\n" in lines
    assert any("lower the volume or move the microphone" in line for line in lines)


def test_a_howl_round_that_stands_at_its_limit_from_the_first_moment_is_muted(
    sound_server: Any, tmp_path: Path
) -> None:
    # a loud tone is being played while the loop is closed: it clips at once, and goes on without the tone
    then = """
wait(lambda s: s.input.peak_v[0] > 4.9)
engine.send(messages.SetMute(False))
wait(lambda s: not s.muted)
print("open", flush=True)
print("muted", wait(lambda s: s.muted).mute_reason, flush=True)
"""
    with (
        playing(sound_server, "ears", "60", "0.5") as tone,
        sound_server.start(DESK, "ears_mon", then, str(tmp_path / "log")) as desk,
    ):
        assert desk.stdout.readline() == "open\n", desk.stderr.read()[-2000:]
        tone.kill()
        out, trouble = desk.communicate(timeout=90)
    assert desk.returncode == 0, trouble[-2000:]
    assert "muted howl-round at" in out
