"""Live input is recorded as the stage puts it out, in volts, without a wait on the audio thread."""

from __future__ import annotations

import shutil
import time
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.circuit.library import find_stage
from preview.engine.messages import Export, ExportState
from preview.engine.recorder import ROOM_S, Recorder
from preview.errors import OutputFileError, UsageError
from preview.session import Session
from preview.values.levels import full_scale_in_comment, parse_full_scale

RATE_HZ = 8_000


def recorder_of(out: Path, depth="float", **more) -> Recorder:
    stage = find_stage("inverting-low-pass")
    session = Session(None, stage, stage.supply, parse_full_scale("10 V"), live=True)
    return Recorder(Export(session, out, depth), sample_rate_hz=RATE_HZ, channels=2, **more)


def ended(recorder: Recorder) -> ExportState:
    recorder.close()
    state = recorder.state()
    assert state is not None
    return state


def told_of(recorder: Recorder, frames: int) -> ExportState:
    """What it says once so many frames are written."""
    give_up_s = time.monotonic() + 30.0
    while (state := recorder.state()) is None or state.done_frames < frames:
        assert time.monotonic() < give_up_s
        time.sleep(0.01)  # another thread writes, with a deadline
    return state


def in_volts(path: Path) -> np.ndarray:
    with soundfile.SoundFile(path) as file:
        scale = full_scale_in_comment(file.comment)
        assert scale is not None
        return np.asarray(file.read() * scale.volts)


@pytest.mark.parametrize("block", [1, 17, 509, 4000])
def test_every_frame_is_in_the_file_in_volts(tmp_path: Path, block: int) -> None:
    volts = np.random.default_rng(block).uniform(-9.0, 9.0, (4000, 2))
    recorder = recorder_of(tmp_path / "out.wav")
    for first in range(0, len(volts), block):
        recorder.take(volts[first : first + block])
    assert not (tmp_path / "out.wav").exists(), "it comes to its place whole"
    state = ended(recorder)
    assert (state.state, state.done_frames) == ("done", 4000)
    assert state.text == "out.wav: 0.50 s recorded, peak 9.00 V"
    np.testing.assert_allclose(in_volts(tmp_path / "out.wav"), volts, rtol=1e-6, atol=1e-6)
    assert [path.name for path in tmp_path.iterdir()] == ["out.wav"]


@pytest.mark.parametrize("ending", [".wav", ".rf64"])
def test_what_is_recorded_so_far_can_be_read_should_the_engine_end(tmp_path: Path, ending: str) -> None:
    volts = np.random.default_rng(3).uniform(-9.0, 9.0, (4000, 2))
    recorder = recorder_of(tmp_path / f"out{ending}")
    recorder.take(volts[:3000])
    state = told_of(recorder, 3000)
    kept = tmp_path / f"kept{ending}"
    assert state.readable
    shutil.copy(state.hidden, kept)
    np.testing.assert_allclose(in_volts(kept), volts[:3000], rtol=1e-6, atol=1e-6)
    recorder.take(volts[3000:])
    ended(recorder)
    np.testing.assert_allclose(in_volts(tmp_path / f"out{ending}"), volts, rtol=1e-6, atol=1e-6)


def test_a_kind_of_file_that_is_readable_only_when_whole_says_so(tmp_path: Path) -> None:
    recorder = recorder_of(tmp_path / "out.flac", "24")
    recorder.take(np.ones((1000, 2)))
    state = told_of(recorder, 0)
    assert (state.state, state.readable) == ("running", False)
    assert Path(state.hidden).exists()
    ended(recorder)


def test_more_than_there_is_room_for_at_once_is_recorded_without_a_loss(tmp_path: Path) -> None:
    recorder = recorder_of(tmp_path / "out.wav")
    room = round(ROOM_S * RATE_HZ)
    ramp = np.arange(3 * room, dtype=float)[:, None] * np.array([1e-5, -1e-5])
    for piece in np.array_split(ramp, 12):
        while recorder.waiting_frames + len(piece) > room:
            pass  # until its thread has written
        recorder.take(piece)
    assert "lost" not in ended(recorder).text
    np.testing.assert_allclose(in_volts(tmp_path / "out.wav"), ramp, rtol=1e-6, atol=1e-9)


def test_integer_depths_hold_the_larger_rail(tmp_path: Path) -> None:
    recorder = recorder_of(tmp_path / "out.flac", "24")
    recorder.take(np.full((100, 2), 12.5))
    assert "full scale" not in ended(recorder).text
    np.testing.assert_allclose(in_volts(tmp_path / "out.flac"), 12.5, atol=15.0 / 2**23)


def test_it_ends_by_itself_at_its_longest(tmp_path: Path) -> None:
    recorder = recorder_of(tmp_path / "out.wav", most_s=0.25)
    recorder.take(np.ones((3000, 2)))
    recorder.join()
    recorder.take(np.ones((3000, 2)))
    state = ended(recorder)
    assert state.done_frames == 2000
    assert "the most of one recording" in state.text
    assert soundfile.info(tmp_path / "out.wav").frames == 2000


def test_what_there_is_no_room_for_is_counted(tmp_path: Path) -> None:
    recorder = recorder_of(tmp_path / "out.wav")
    recorder.take(np.zeros((round(ROOM_S * RATE_HZ) + 4000, 2)))
    recorder.take(np.ones((800, 2)))
    state = ended(recorder)
    assert state.done_frames == 800
    assert f"{ROOM_S + 0.5:.2f} s lost as the disk was busy" in state.text


def test_a_disk_that_is_full_leaves_nothing_behind_and_says_so(tmp_path: Path, monkeypatch) -> None:
    recorder = recorder_of(tmp_path / "out.wav")

    def full(samples: object) -> None:
        raise OutputFileError("out.wav: no space left on the disk")

    monkeypatch.setattr(recorder._sink, "write", full)
    recorder.take(np.ones((800, 2)))
    state = ended(recorder)
    assert (state.state, state.text) == ("failed", "out.wav: no space left on the disk")
    assert not list(tmp_path.iterdir())


def test_what_cannot_be_written_is_refused_at_once(tmp_path: Path) -> None:
    with pytest.raises(OutputFileError, match="nowhere"):
        recorder_of(tmp_path / "nowhere" / "out.wav")
    with pytest.raises(UsageError, match="xyz"):
        recorder_of(tmp_path / "out.xyz")
