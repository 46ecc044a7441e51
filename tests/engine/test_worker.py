"""Work beside the engine: what each job finds, and that jobs share a process, give way and end with it."""

from __future__ import annotations

import itertools
import math
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.audio.sink import FileSink
from preview.circuit.library import find_stage
from preview.circuit.netlist import netlist
from preview.engine.commands import Export
from preview.engine.jobs import DeviceJob, ExportJob, MarksJob, OverviewJob, ProbeJob, inner_nodes, run
from preview.engine.messages import ClipMarks, DeviceList, ExportState, Overview
from preview.engine.passages import Material
from preview.engine.render import open_source, render
from preview.engine.worker import Worker
from preview.errors import AudioFileError
from preview.network.operating import operating_point
from preview.network.transfer import response
from preview.session import Session
from preview.values.levels import parse_full_scale
from preview.values.stimulus import parse_stimulus

pytestmark = pytest.mark.slow


RATE_HZ = 48_000
DEADLINE_S = 60.0


def write(path: Path, samples: np.ndarray) -> Path:
    with FileSink(path, sample_rate_hz=RATE_HZ, channels=samples.shape[1]) as sink:
        sink.write(samples)
    return path


def session_of(audio: Path | None, **changes) -> Session:
    stage = find_stage("inverting-low-pass")
    return Session(audio, stage, stage.supply, parse_full_scale("10 V"), **changes)


def last(job):
    told = [one for one in run(job) if one is not None]
    return told[-1], told


@pytest.fixture
def worker() -> Iterator[Worker]:
    made = Worker()
    yield made
    made.close()


def wait_for(worker: Worker, wanted: Callable[[object], bool]):
    deadline = time.monotonic() + DEADLINE_S
    seen = []
    while time.monotonic() < deadline:
        for told in worker.told():
            seen.append(told)
            if wanted(told):
                return told, seen
        time.sleep(0.005)  # polling a process, with a deadline
    raise AssertionError(f"never came; {seen}")


@pytest.mark.parametrize("frames", [1, 7, 1999, 2000, 2001, 300_001])
def test_an_overview_has_the_extremes_of_each_column(tmp_path, frames):
    samples = np.random.default_rng(frames).uniform(-1, 1, (frames, 2))
    overview, told = last(OverviewJob(write(tmp_path / "noise.wav", samples)))
    assert overview.done_ratio == 1.0
    assert overview.frames == frames
    columns = min(2000, frames)
    assert overview.columns == len(overview.low) == len(overview.high) == columns
    edges = np.linspace(0, frames, columns + 1).round().astype(int)
    stored = samples.astype(np.float32).astype(np.float64)
    assert list(overview.low) == [stored[a:b].min() for a, b in itertools.pairwise(edges)]
    assert list(overview.high) == [stored[a:b].max() for a, b in itertools.pairwise(edges)]
    assert all(len(one.low) <= len(two.low) for one, two in itertools.pairwise(told))


def test_an_overview_of_a_long_recording_grows(tmp_path):
    samples = np.random.default_rng(1).uniform(-1, 1, (2_000_000, 1))
    _, told = last(OverviewJob(write(tmp_path / "long.wav", samples)))
    assert len(told) > 5
    assert 0.0 < told[0].done_ratio < 0.2


def test_clip_marks_are_where_the_output_reaches_a_rail(tmp_path):
    # 1 V passes with a gain of 10 at 200 Hz, 2 V does not; two bursts of 10 ms half a second apart
    samples = np.zeros((2 * RATE_HZ, 1))
    tone = 0.2 * np.sin(2 * np.pi * 200 * np.arange(480) / RATE_HZ)
    for first in (24_000, 60_000):
        samples[first : first + 480, 0] = tone
    audio = write(tmp_path / "bursts.wav", samples)
    marks, told = last(MarksJob("B", session_of(audio).netlist(), Material(path=audio, full_scale_v=10.0)))
    assert (marks.letter, marks.done_frames, marks.frames) == ("B", 96_000, 96_000)
    assert [one.designator for one in marks.opamps] == ["U1"]
    spans = marks.opamps[0].spans
    assert len(spans) == 2
    for (start, end), first in zip(spans, (24_000, 60_000), strict=True):
        # 15 V of 20 V are reached 0.7 ms after the burst begins; a mark is up to 356 frames wider on each side
        assert first - 360 <= start <= first + 34
        assert first + 400 <= end <= first + 480 + 400
    assert [one.opamps[0].asked_high_v is None for one in told[-2:]] == [True, False], "the marks come first"
    # without a rail 2 V leave with the gain at 200 Hz, 10 / sqrt(1 + (200 / 1591.5)^2): 19.84 V either way
    one = marks.opamps[0]
    assert one.asked_high_v == pytest.approx(19.84, rel=2e-3)
    assert one.asked_low_v == pytest.approx(-19.84, rel=2e-3)
    assert one.asked_slew_v_per_s == pytest.approx(2 * np.pi * 200 * 19.84, rel=1e-2)
    quiet, _ = last(MarksJob("A", session_of(audio).netlist(), Material(path=audio, full_scale_v=5.0)))
    assert quiet.opamps[0].spans == ()
    assert quiet.opamps[0].asked_high_v is None, "nothing is at a limit: nobody has to ask"


def test_an_op_amp_that_stays_at_a_rail_is_one_mark(tmp_path):
    audio = write(tmp_path / "step.wav", np.full((RATE_HZ, 1), 0.5))
    marks, _ = last(MarksJob("A", session_of(audio).netlist(), Material(path=audio, full_scale_v=10.0)))
    ((start, end),) = marks.opamps[0].spans
    assert start <= 100
    assert end == RATE_HZ


def test_an_export_of_the_whole_is_the_render_to_the_bit(tmp_path):
    audio = write(tmp_path / "noise.wav", np.random.default_rng(2).uniform(-0.3, 0.3, (30_000, 2)))
    session = session_of(audio)
    with open_source(audio) as source:
        render(session, source, tmp_path / "render.wav")
    order = Export(session, tmp_path / "export.wav")
    state, _ = last(ExportJob(order, Material(path=audio, full_scale_v=10.0)))
    assert (state.state, state.done_frames, state.frames) == ("done", 30_000, 30_000)
    assert (tmp_path / "export.wav").read_bytes() == (tmp_path / "render.wav").read_bytes()


def test_an_export_of_a_region_is_that_part_of_the_render(tmp_path):
    audio = write(tmp_path / "noise.wav", np.random.default_rng(3).uniform(-0.3, 0.3, (60_000, 1)))
    session = session_of(audio)
    for region, name in ((None, "all.wav"), ((20_000, 45_678), "part.wav")):
        list(
            run(
                ExportJob(
                    Export(session, tmp_path / name), Material(path=audio, full_scale_v=10.0, region=region)
                )
            )
        )
    whole, part = (soundfile.read(tmp_path / name)[0] for name in ("all.wav", "part.wav"))
    assert len(part) == 25_678
    # 0.2 s before it the circuit was at rest: 2000 time constants of 0.1 ms
    np.testing.assert_allclose(part, whole[20_000:45_678], atol=1e-7)


def test_a_test_signal_is_exported_in_volts(tmp_path):
    signal = parse_stimulus("sine 100 0.5V")
    session = session_of(None, stimulus=signal)
    list(run(ExportJob(Export(session, tmp_path / "sine.wav"), Material(stimulus=signal, full_scale_v=10.0))))
    samples = soundfile.read(tmp_path / "sine.wav")[0]
    assert len(samples) == 10 * RATE_HZ
    gain = 10 / math.sqrt(1 + (100 / 1591.549) ** 2)
    assert np.abs(samples[4800:]).max() * 10.0 == pytest.approx(0.5 * gain, rel=1e-3)


def test_an_export_that_is_given_up_leaves_nothing_behind(tmp_path):
    audio = write(tmp_path / "noise.wav", np.zeros((200_000, 1)))
    out = tmp_path / "out"
    out.mkdir()
    pieces = run(
        ExportJob(Export(session_of(audio), out / "export.wav"), Material(path=audio, full_scale_v=10.0))
    )
    next(pieces)
    assert list(out.iterdir()), "it is being written under another name"
    pieces.close()
    assert list(out.iterdir()) == []


def test_jobs_share_the_process_and_each_tells_what_it_finds(worker, tmp_path):
    audio = write(tmp_path / "noise.wav", np.random.default_rng(4).uniform(-1, 1, (480_000, 1)))
    material = Material(path=audio, full_scale_v=10.0)
    worker.submit("marks", MarksJob("A", session_of(audio).netlist(), material))
    worker.submit("overview", OverviewJob(audio))
    worker.submit("export", ExportJob(Export(session_of(audio), tmp_path / "out.wav"), material))
    _, seen = wait_for(worker, lambda t: isinstance(t, ClipMarks) and t.done_frames == t.frames)
    done = [t for t in seen if isinstance(t, ExportState) and t.state == "done"]
    if not done:
        wait_for(worker, lambda t: isinstance(t, ExportState) and t.state == "done")
    assert any(isinstance(t, Overview) and t.done_ratio == 1.0 for t in seen), "the short one does not wait"
    assert (tmp_path / "out.wav").exists()


def test_a_job_of_the_same_key_takes_the_place_of_the_one_before(worker, tmp_path):
    long = write(tmp_path / "long.wav", np.zeros((40 * RATE_HZ, 1)))
    short = write(tmp_path / "short.wav", np.zeros((RATE_HZ, 1)))
    for letter, audio in (("A", long), ("B", short)):
        worker.submit("marks", MarksJob(letter, session_of(audio).netlist(), Material(path=audio)))
    found, seen = wait_for(worker, lambda t: isinstance(t, ClipMarks) and t.done_frames == t.frames)
    assert found.letter == "B"
    worker.submit("overview", OverviewJob(short))
    _, more = wait_for(worker, lambda t: isinstance(t, Overview) and t.done_ratio == 1.0)
    assert not [
        t for t in seen + more if isinstance(t, ClipMarks) and t.letter == "A" and t.done_frames == t.frames
    ]


def test_what_cannot_be_done_is_told_and_the_rest_goes_on(worker, tmp_path):
    audio = write(tmp_path / "noise.wav", np.zeros((RATE_HZ, 1)))
    worker.submit(
        "export", ExportJob(Export(session_of(audio), tmp_path / "no" / "x.wav"), Material(path=audio))
    )
    state, _ = wait_for(worker, lambda t: isinstance(t, ExportState))
    assert state.state == "failed"
    assert "there is no folder" in state.text
    worker.submit("overview", OverviewJob(tmp_path / "missing.wav"))
    told, _ = wait_for(worker, lambda t: True)
    assert "no such file" in told.text
    worker.submit("overview", OverviewJob(audio))
    wait_for(worker, lambda t: isinstance(t, Overview))


def test_a_worker_that_was_killed_is_started_again(worker, tmp_path):
    audio = write(tmp_path / "noise.wav", np.zeros((RATE_HZ, 1)))
    worker.submit("overview", OverviewJob(audio))
    wait_for(worker, lambda t: isinstance(t, Overview))
    worker._process.kill()
    worker._process.join(5)
    worker.submit("overview", OverviewJob(audio))
    wait_for(worker, lambda t: isinstance(t, Overview))


def test_a_virtual_ground_leaves_ground_by_what_the_clipped_output_cannot_hold(tmp_path):
    """Millman's theorem at the node between R1 (10k) and R2 (100k): (3 V / R1 + 15 V / R2) / (1/R1 + 1/R2)."""
    tone = np.sin(2 * np.pi * 20 * np.arange(RATE_HZ) / RATE_HZ)[:, None]
    audio = write(tmp_path / "tone.wav", 0.3 * tone)
    probe = ProbeJob("A", session_of(audio).netlist(), Material(path=audio, full_scale_v=10.0))
    peaks, told = last(probe)
    assert (peaks.letter, peaks.nodes, peaks.done_ratio) == ("A", ("sum",), 1.0)
    assert 0.0 < told[0].done_ratio < 1.0, "known from the start on"
    expected_v = (3.0 / 10e3 - 15.0 / 100e3) / (1 / 10e3 + 1 / 100e3)
    assert peaks.high_v[0] == pytest.approx(expected_v, rel=2e-3)
    assert peaks.low_v[0] == pytest.approx(-expected_v, rel=2e-3)
    quiet = Material(path=audio, full_scale_v=1.0)
    assert max(last(ProbeJob("A", probe.netlist, quiet))[0].high_v) < 1e-9, "it holds below the rails"


@pytest.mark.parametrize("kind", ["ideal", "TL072"])
def test_peaks_at_inner_nodes_are_those_of_the_exact_circuit(kind):
    stage = find_stage("sallen-key-low-pass")
    stage = stage.with_part(replace(stage.opamps[0], type=kind))
    circuit = netlist(stage)
    tone = parse_stimulus("sine 2971 1V")
    peaks, _ = last(ProbeJob("A", circuit, Material(stimulus=tone, region=(24_000, 48_000))))
    rest_v = operating_point(circuit).volts
    for node, high_v, low_v in zip(peaks.nodes, peaks.high_v, peaks.low_v, strict=True):
        gain = abs(response(replace(circuit, output_node=node), np.array([2971.0]))[0])
        assert high_v - rest_v[node] == pytest.approx(gain, rel=2e-3)
        assert low_v - rest_v[node] == pytest.approx(-gain, rel=2e-3)


def test_what_is_held_or_metered_is_no_inner_node():
    assert inner_nodes(netlist(find_stage("single-supply-gain"))) == ("plus", "bias", "minus", "leg")
    driven = netlist(find_stage("inverting-low-pass"), source_ohm=600.0)
    assert inner_nodes(driven) == ("in", "sum"), "behind a source that is not ideal, in is not what is read"


def test_a_worker_is_closed_without_a_fault_in_the_thread_that_listens_to_it(worker, monkeypatch):
    faults = []
    monkeypatch.setattr(threading, "excepthook", faults.append)
    worker.submit("devices", DeviceJob())
    wait_for(worker, lambda t: isinstance(t, DeviceList))
    worker.close()
    assert not worker._reader.is_alive()
    assert not faults


def test_devices_are_listed_or_it_is_said_why_not(worker):
    worker.submit("devices", DeviceJob())
    told, _ = wait_for(worker, lambda t: isinstance(t, DeviceList))
    assert told.devices or told.trouble or told == DeviceList(())


def test_a_job_on_a_file_that_is_no_recording_fails_in_plain_words(tmp_path):
    bad = tmp_path / "bad.wav"
    bad.write_bytes(b"not audio at all" * 10)
    with pytest.raises(AudioFileError, match="looks like text"):
        next(run(OverviewJob(bad)))
