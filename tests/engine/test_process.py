"""The engine process end to end on the silent clock."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from preview.audio.sink import FileSink
from preview.circuit.library import find_stage
from preview.dsp.oversample import design
from preview.engine import messages
from preview.engine.bench import Bench
from preview.session import AtEnd
from preview.values.quality import Quality
from tests.engine.running import DEADLINE_S, session_of, wait_for


def test_it_plays_reads_volts_and_takes_every_command(start, tone):
    engine = start(session_of(tone))
    waiting = wait_for(engine, lambda s: True, "a snapshot")
    assert not waiting.playing
    assert waiting.volume_db == -20.0
    assert waiting.output_name == "silent clock"
    engine.send(messages.Play())
    # 1 V through a gain of 10 and a pole at 1591.5 Hz: 10 / sqrt(1 + (200 / 1591.5)^2) = 9.922 V
    playing = wait_for(engine, lambda s: s.output.peak_v[0] > 9.9, "10 V at the output")
    assert playing.input.peak_v[0] == pytest.approx(1.0, rel=1e-3)
    assert playing.output.peak_v[0] == pytest.approx(9.922, rel=2e-3)
    assert playing.opamps[0].designator == "U1"
    assert playing.opamps[0].clip_events == 0

    engine.send(messages.SetPart("R1", 5000.0))
    clipping = wait_for(engine, lambda s: s.opamps[0].clip_events > 0, "clipping")
    assert clipping.opamps[0].headroom_db == 0.0
    engine.send(messages.SetPart("R1", 20000.0))
    wait_for(engine, lambda s: s.output.peak_v[0] < 5.1 and not s.gliding, "5 V at the output")
    engine.send(messages.ClearHolds())
    wait_for(engine, lambda s: s.opamps[0].clip_events == 0 and s.output.hold_v[0] < 5.1, "cleared holds")

    engine.send(messages.SetBypass(True))
    wait_for(engine, lambda s: s.bypass and s.output.peak_v[0] < 1.05, "bypass")
    engine.send(messages.SetBypass(False))
    engine.send(messages.SetQuality(Quality.FINE))
    wait_for(engine, lambda s: s.quality is Quality.FINE, "fine quality")
    engine.send(messages.SetVolume(-6.0))
    wait_for(engine, lambda s: s.volume_db == -6.0, "volume")
    engine.send(messages.SetFullScale(1.0))
    wait_for(engine, lambda s: s.full_scale_v == 1.0 and s.output.peak_v[0] < 0.6, "full scale")
    engine.send(messages.SetCircuit(session_of(tone, stage=find_stage("inverting-high-pass")).netlist()))
    wait_for(engine, lambda s: s.output.peak_v[0] > 0, "another circuit")
    engine.send(messages.SetRegion(1000, 5000))
    wait_for(engine, lambda s: s.region == (1000, 5000) and 1000 <= s.position_frame < 5000, "the region")
    engine.send(messages.SetRegion(None, None))
    engine.send(messages.Seek(60000))
    wait_for(engine, lambda s: s.region is None and s.position_frame >= 60000, "the seek")
    engine.send(messages.SetAtEnd(AtEnd.STOP))
    ended = wait_for(engine, lambda s: not s.playing, "the end")
    assert ended.position_frame == 0
    assert [n.text for n in engine.notices() if n.severity == "error"] == []


def test_pause_stops_and_play_goes_on(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 4800, "sound")
    engine.send(messages.Pause())
    paused = wait_for(engine, lambda s: not s.playing, "a pause")
    later = wait_for(engine, lambda s: True, "another snapshot")
    assert later.position_frame == paused.position_frame
    engine.send(messages.Play())
    wait_for(engine, lambda s: s.playing and s.position_frame > paused.position_frame, "going on")


def test_another_recording_of_another_rate_can_be_opened_and_a_bad_one_is_told(start, tone, tmp_path):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    bad = tmp_path / "noise.wav"
    bad.write_bytes(b"not audio at all" * 10)
    engine.send(messages.OpenFile(bad))
    other = tmp_path / "other.wav"
    with FileSink(other, sample_rate_hz=44100, channels=2) as sink:
        sink.write(np.full((44100, 2), 0.25))
    engine.send(messages.OpenFile(other))
    opened = wait_for(engine, lambda s: s.sample_rate_hz == 44100, "the other recording")
    assert (opened.frames, opened.position_frame, opened.playing) == (44100, 0, False)
    engine.send(messages.Play())
    wait_for(engine, lambda s: s.input.peak_v == (2.5, 2.5), "its level")
    assert any("noise.wav" in notice.text and notice.severity == "error" for notice in engine.notices())


def test_a_change_of_quality_finds_its_filters_designed(make_rig):
    # designing them takes 0.15 s of both cores, which a device does not wait for while it plays
    netlist = session_of(Path("none")).netlist()
    design.cache_clear()
    bench = Bench(make_rig().player, lambda: None)
    bench.build("A", netlist, Quality.STANDARD)
    missed = design.cache_info().misses
    for quality in (Quality.DRAFT, Quality.FINE):
        bench.build("A", netlist, quality)
    assert design.cache_info().misses == missed


def test_an_unknown_part_is_told_and_it_plays_on(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    engine.send(messages.SetPart("R99", 1.0))
    before = wait_for(engine, lambda s: True, "a snapshot").position_frame
    wait_for(engine, lambda s: s.position_frame != before, "going on")
    deadline = time.monotonic() + DEADLINE_S
    told: list[str] = []
    while not told and time.monotonic() < deadline:
        told = [n.text for n in engine.notices() if "R99" in n.text]
        time.sleep(0.005)  # polling a process, with a deadline
    assert told


def test_close_ends_the_process_and_can_be_called_twice(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    began = time.monotonic()
    engine.close()
    assert time.monotonic() - began < 2.0
    assert not engine.alive
    engine.close()
    engine.send(messages.Play())  # dropped without an error


def test_a_crashed_engine_is_seen_and_a_hung_one_is_ended_by_force(start, tone):
    crashed, hung = start(session_of(tone)), start(session_of(tone))
    wait_for(crashed, lambda s: True, "a snapshot")
    wait_for(hung, lambda s: True, "a snapshot")
    assert crashed.pid is not None
    assert hung.pid is not None
    os.kill(crashed.pid, signal.SIGKILL)
    deadline = time.monotonic() + DEADLINE_S
    while crashed.alive and time.monotonic() < deadline:
        time.sleep(0.005)  # polling a process, with a deadline
    assert not crashed.alive
    crashed.send(messages.Play())
    os.kill(hung.pid, signal.SIGSTOP)
    hung.close(timeout_s=0.2)
    assert not hung.alive


PARENT = """
import sys, time
from pathlib import Path
from tests_session import session
from preview.engine.process import EngineConfig, EngineProcess

if __name__ == "__main__":
    engine = EngineProcess.start(EngineConfig(session=session, silent=True, log=Path(sys.argv[1])))
    print(engine.pid, flush=True)
    while engine.latest() is None:
        time.sleep(0.01)
    print("up", flush=True)
    time.sleep(60)
"""


SESSION = """
from pathlib import Path
from preview.circuit.library import find_stage
from preview.session import Session
from preview.values.levels import parse_full_scale
stage = find_stage("inverting-low-pass")
session = Session(Path("{tone}"), stage, stage.supply, parse_full_scale("10 V"))
"""


@pytest.mark.slow
def test_the_engine_and_its_worker_end_within_a_second_when_the_desk_is_killed(tone, tmp_path):
    (tmp_path / "tests_session.py").write_text(SESSION.format(tone=str(tone)))
    script = tmp_path / "desk.py"
    script.write_text(PARENT)
    desk = subprocess.Popen(
        [sys.executable, str(script), str(tmp_path / "log")], stdout=subprocess.PIPE, text=True
    )
    assert desk.stdout is not None
    pid = int(desk.stdout.readline())
    assert desk.stdout.readline() == "up\n"
    deadline = time.monotonic() + DEADLINE_S
    while not (children := _children(pid)) and time.monotonic() < deadline:
        time.sleep(0.005)  # polling a process, with a deadline
    assert len(children) == 1, "its worker"
    began = time.monotonic()
    desk.kill()
    desk.wait()
    while (_runs(pid) or _runs(children[0])) and time.monotonic() < began + DEADLINE_S:
        time.sleep(0.005)  # polling a process, with a deadline
    assert time.monotonic() - began < 1.0


@pytest.mark.slow
def test_an_engine_that_is_compiling_ends_within_a_second_when_the_desk_is_killed(tone, tmp_path):
    (tmp_path / "tests_session.py").write_text(SESSION.format(tone=str(tone)))
    script = tmp_path / "desk.py"
    script.write_text(PARENT)
    empty = {"NUMBA_CACHE_DIR": str(tmp_path / "kernels")}
    desk = subprocess.Popen(
        [sys.executable, str(script), str(tmp_path / "log")],
        stdout=subprocess.PIPE,
        text=True,
        env={**os.environ, **empty},
    )
    assert desk.stdout is not None
    pid = int(desk.stdout.readline())
    assert desk.stdout.readline() == "up\n"  # its first circuit is still being compiled, for half a minute
    began = time.monotonic()
    desk.kill()
    desk.wait()
    while _runs(pid) and time.monotonic() < began + DEADLINE_S:
        time.sleep(0.005)  # polling a process, with a deadline
    assert time.monotonic() - began < 1.0


BUSY = """
import multiprocessing, sys, time
from preview.engine.door import end_with_parent

def busy():
    end_with_parent(0.1)
    print("busy", flush=True)
    while True:
        pass

if __name__ == "__main__":
    child = multiprocessing.get_context("spawn").Process(target=busy)
    child.start()
    print(child.pid, flush=True)
    time.sleep(60)
"""


def test_a_process_that_listens_to_nothing_ends_with_its_parent(tmp_path):
    script = tmp_path / "parent.py"
    script.write_text(BUSY)
    parent = subprocess.Popen([sys.executable, str(script)], stdout=subprocess.PIPE, text=True)
    assert parent.stdout is not None
    pid = int(parent.stdout.readline())
    assert parent.stdout.readline() == "busy\n"
    parent.kill()
    parent.wait()
    deadline = time.monotonic() + DEADLINE_S
    while _runs(pid) and time.monotonic() < deadline:
        time.sleep(0.005)  # polling a process, with a deadline
    assert not _runs(pid)


def _children(pid: int) -> list[int]:
    return [int(one) for one in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()]


def _runs(pid: int) -> bool:
    """Whether a process runs (a zombie that nobody has collected does not)."""
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0]
    except OSError:
        return False
    return state != "Z"


def test_the_terminals_signals_do_not_reach_the_engine(start, tone):
    engine = start(session_of(tone), play=True)
    for number in (signal.SIGINT, signal.SIGHUP):
        os.kill(engine.pid, number)  # also while it still starts
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    for number in (signal.SIGINT, signal.SIGHUP):
        os.kill(engine.pid, number)
    frame = wait_for(engine, lambda s: True, "a snapshot").position_frame
    wait_for(engine, lambda s: s.position_frame != frame, "going on")
    assert engine.ending == ""


def test_told_to_terminate_it_fades_out_and_ends_well(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    os.kill(engine.pid, signal.SIGTERM)
    engine._process.join(5)
    assert engine._process.exitcode == 0


def test_an_engine_that_was_killed_says_by_what(start, tone):
    engine = start(session_of(tone))
    wait_for(engine, lambda s: True, "a snapshot")
    os.kill(engine.pid, signal.SIGKILL)
    engine._process.join(5)
    assert engine.ending == "the engine was ended by signal SIGKILL"


def test_an_engine_can_begin_where_another_left_off(start, tone):
    candidate = session_of(tone, stage=find_stage("inverting-high-pass")).netlist()
    engine = start(
        session_of(tone),
        letter="B",
        candidates=(("A", candidate),),
        start_frame=60_000,
        region=(50_000, 90_000),
    )
    began = wait_for(engine, lambda s: s.region is not None and len(s.candidates) == 2, "the region")
    assert (began.region, began.position_frame, began.playing) == ((50_000, 90_000), 60_000, False)
    assert began.letter == "B"


def test_a_recording_of_a_few_frames_says_that_it_is_played_once(start, tmp_path):
    short = tmp_path / "short.wav"
    with FileSink(short, sample_rate_hz=48_000, channels=1) as sink:
        sink.write(np.full((3, 1), 0.5))
    engine = start(session_of(short))
    assert wait_for(engine, lambda s: True, "a snapshot").at_end is AtEnd.STOP
    assert any("shorter than 10 ms" in notice.text for notice in engine.notices())
