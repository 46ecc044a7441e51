"""Candidates, signals and background work through a running engine."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.audio.sink import FileSink
from preview.circuit.library import find_stage, with_overrides
from preview.engine import messages
from preview.engine.messages import ClipMarks, DeviceList, ExportState, InputKind, NodePeaks, Overview
from preview.values.stimulus import parse_stimulus
from tests.engine.running import RATE_HZ, session_of, wait_for, wait_for_report

pytestmark = pytest.mark.slow


def gain_of(frequency_hz: float, gain: float = 10.0) -> float:
    return gain / math.sqrt(1 + (frequency_hz / 1591.549) ** 2)


def with_parts(**values: str):
    return with_overrides(find_stage("inverting-low-pass"), values, {})[0]


def is_close(volts: float):
    return lambda s: not s.gliding and s.output.peak_v[0] == pytest.approx(volts, rel=2e-3)


def test_a_test_signal_is_heard_in_volts_whatever_the_full_scale(start, tone):
    engine = start(session_of(tone))
    engine.send(messages.UseSignal(parse_stimulus("sine 100 0.5V")))
    engine.send(messages.Play())
    heard = wait_for(engine, is_close(0.5 * gain_of(100)), "the sine")
    assert (heard.input_kind, heard.input_name) == (InputKind.SIGNAL, "sine 100 Hz 500 mV")
    assert heard.frames == 0
    assert heard.input.peak_v[0] == pytest.approx(0.5, rel=1e-3)
    engine.send(messages.SetFullScale(20.0))
    wait_for(engine, lambda s: s.full_scale_v == 20.0 and is_close(0.5 * gain_of(100))(s), "the same volts")
    engine.send(messages.OpenFile(tone))
    opened = wait_for(engine, lambda s: s.input_kind is InputKind.FILE, "the recording")
    assert (opened.input_name, opened.frames) == ("tone.wav", 96_000)


def test_an_engine_can_begin_with_a_test_signal(start):
    engine = start(session_of(None, stimulus=parse_stimulus("square 100 0.2V")), play=True)
    wait_for(engine, lambda s: s.output.peak_v[0] > 1.9, "the square")


def test_the_spectrum_comes_with_the_snapshot(start):
    engine = start(session_of(None, stimulus=parse_stimulus("sine 1059.25 1V")), play=True)
    heard = wait_for(engine, lambda s: s.spectrum is not None and max(s.spectrum.input_vrms) > 0.7, "a line")
    band = int(np.argmax(heard.spectrum.input_vrms))
    assert heard.spectrum.center_hz[band] == pytest.approx(1059.25, abs=0.01)
    ratio = heard.spectrum.output_vrms[band] / heard.spectrum.input_vrms[band]
    assert ratio == pytest.approx(gain_of(1059.25), rel=0.01)


def test_each_candidate_keeps_its_own_parts(start, tone):
    engine = start(session_of(tone), play=True)
    at_200 = gain_of(200)
    wait_for(engine, is_close(at_200), "A")
    engine.send(messages.KeepCandidate("B", session_of(tone, stage=with_parts(R1="20k")).netlist()))
    ready = wait_for(
        engine, lambda s: [c.letter for c in s.candidates if c.ready] == ["A", "B"], "B prepared"
    )
    assert ready.letter == "A"
    engine.send(messages.SelectCandidate("B"))
    heard = wait_for(engine, is_close(0.5 * at_200), "B")
    assert heard.letter == "B"
    engine.send(messages.SetPart("R1", 40e3))
    wait_for(engine, is_close(0.25 * at_200), "B with another part")
    engine.send(messages.SelectCandidate("A"))
    wait_for(engine, lambda s: s.letter == "A" and is_close(at_200)(s), "A as it was")
    engine.send(messages.SelectCandidate("B"))
    wait_for(engine, lambda s: s.letter == "B" and is_close(0.25 * at_200)(s), "B as it was left")
    engine.send(messages.DropCandidate("A"))
    wait_for(engine, lambda s: [c.letter for c in s.candidates] == ["B"], "A gone")
    engine.send(messages.SelectCandidate("A"))
    wait_for(engine, lambda s: any("no candidate A" in n.text for n in engine.notices()), "a notice")


def test_a_part_that_moves_while_another_candidate_is_chosen_is_not_lost(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, is_close(gain_of(200)), "A")
    engine.send(messages.KeepCandidate("B", session_of(tone).netlist()))
    engine.send(messages.SetPart("R1", 20e3))
    engine.send(messages.SelectCandidate("B"))
    wait_for(engine, lambda s: s.letter == "B" and is_close(gain_of(200))(s), "B")
    engine.send(messages.SelectCandidate("A"))
    wait_for(engine, lambda s: s.letter == "A" and is_close(0.5 * gain_of(200))(s), "A with its part")


def test_the_null_of_two_candidates_is_their_difference_and_ends(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, is_close(gain_of(200)), "A")
    engine.send(messages.KeepCandidate("B", session_of(tone).netlist()))
    engine.send(messages.KeepCandidate("C", session_of(tone, stage=with_parts(R1="20k")).netlist()))
    engine.send(messages.ListenNull(("A", "B")))
    heard = wait_for(engine, lambda s: s.null == ("A", "B") and s.output.peak_v[0] < 1e-9, "silence")
    assert heard.letter == "A"
    engine.send(messages.ListenNull(("A", "C")))
    wait_for(engine, is_close(0.5 * gain_of(200)), "the difference")
    engine.send(messages.ListenNull(None))
    wait_for(engine, lambda s: s.null is None and is_close(gain_of(200))(s), "A")


def test_an_op_amp_without_its_slew_is_heard_after_a_change_of_circuit(start):
    stage = with_overrides(find_stage("inverting-low-pass"), {"C1": "1p"}, {None: "LM358"})[0]
    session = session_of(None, stage=stage, stimulus=parse_stimulus("sine 15k 1V"))
    engine = start(session, play=True)
    slewing = wait_for(engine, lambda s: 1.0 < s.output.peak_v[0] < 7.0, "slewing")
    assert slewing.output.peak_v[0] < 0.8 * 10.0
    freed = replace(session, without=("slew", "speed"))
    engine.send(messages.SetCircuit(freed.netlist()))
    wait_for(engine, lambda s: s.output.peak_v[0] > 9.5, "all of the gain")


def test_the_waveform_and_the_clips_are_looked_for_in_the_background(start, tmp_path):
    samples = np.zeros((RATE_HZ, 1))
    samples[24_000:24_480, 0] = 0.3 * np.sin(2 * np.pi * 200 * np.arange(480) / RATE_HZ)
    audio = tmp_path / "burst.wav"
    with FileSink(audio, sample_rate_hz=RATE_HZ, channels=1) as sink:
        sink.write(samples)
    engine = start(session_of(audio))
    overview = wait_for_report(
        engine, lambda r: isinstance(r, Overview) and r.done_ratio == 1.0, "the overview"
    )
    assert max(overview.high) == pytest.approx(0.3, abs=1e-3)
    marks = wait_for_report(
        engine, lambda r: isinstance(r, ClipMarks) and r.done_frames == r.frames, "the marks"
    )
    ((start_frame, end_frame),) = marks.opamps[0].spans
    assert 23_600 < start_frame < 24_100 < end_frame < 25_000
    engine.send(messages.SetPart("R1", 100e3))
    quiet = wait_for_report(
        engine,
        lambda r: isinstance(r, ClipMarks) and r.done_frames == r.frames and not r.opamps[0].spans,
        "new marks",
    )
    assert quiet.opamps[0].spans == ()


def test_inner_nodes_are_probed_when_asked_and_anew_when_the_circuit_changes(start, tone):
    engine = start(session_of(tone))
    wait_for(engine, lambda s: True, "a snapshot")
    engine.send(messages.ProbeNodes(True))
    first = wait_for_report(engine, lambda r: isinstance(r, NodePeaks) and r.done_ratio == 1.0, "peaks")
    assert first.nodes == ("sum",)
    assert first.high_v[0] < 1e-9
    engine.send(messages.SetPart("R1", 2e3))  # 1 V times 50 clips
    clipped = wait_for_report(
        engine, lambda r: isinstance(r, NodePeaks) and r.done_ratio == 1.0 and r.high_v[0] > 0.1, "new peaks"
    )
    assert clipped.low_v[0] < -0.1


def test_what_is_heard_is_exported_while_it_plays(start, tone, tmp_path):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    out = tmp_path / "loop.wav"
    engine.send(messages.Export(session_of(tone), out, region=(10_000, 30_000)))
    done = wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.state == "done", "the file")
    assert done.frames == 20_000
    samples, rate_hz = soundfile.read(out)
    assert (len(samples), rate_hz) == (20_000, RATE_HZ)
    assert 10.0 * np.abs(samples).max() == pytest.approx(gain_of(200), rel=1e-3)
    assert wait_for(engine, lambda s: True, "a snapshot").dropouts == 0


def test_live_input_is_recorded_until_it_is_told_to_end_or_the_engine_is(start, tmp_path):
    session = session_of(None, live=True)
    engine = start(session)
    wait_for(engine, lambda s: s.playing and s.position_frame > 0, "input")
    out = tmp_path / "out"
    out.mkdir()
    engine.send(messages.Export(session, out / "x.wav"))
    told = wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.done_frames > 0, "progress")
    assert (told.state, told.frames) == ("running", 0)
    engine.send(messages.Export(session, out / "z.wav"))
    wait_for(engine, lambda s: any("still being written" in n.text for n in engine.notices()), "a refusal")
    engine.send(messages.CancelExport())
    done = wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.state == "done", "the end")
    assert soundfile.info(out / "x.wav").frames == done.done_frames > 0
    engine.send(messages.Export(session, out / "y.wav"))
    wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.done_frames > 0, "progress")
    engine.close()
    assert soundfile.info(out / "y.wav").frames > 0
    assert sorted(path.name for path in out.iterdir()) == ["x.wav", "y.wav"]


def test_an_export_onto_the_recording_itself_is_refused_and_one_can_be_cancelled(start, tone, tmp_path):
    long = tmp_path / "long.wav"
    with FileSink(long, sample_rate_hz=RATE_HZ, channels=2) as sink:
        sink.write(np.zeros((60 * RATE_HZ, 2)))
    engine = start(session_of(long))
    engine.send(messages.Export(session_of(long), Path(long)))
    wait_for(engine, lambda s: any("also the recording" in n.text for n in engine.notices()), "a refusal")
    out = tmp_path / "out"
    out.mkdir()
    engine.send(messages.Export(session_of(long), out / "x.wav"))
    wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.state == "running", "progress")
    engine.send(messages.CancelExport())
    wait_for_report(engine, lambda r: isinstance(r, ExportState) and r.state == "cancelled", "the end")
    engine.close()
    assert list(out.iterdir()) == []


def test_the_devices_are_listed_without_touching_the_sound(start, tone):
    engine = start(session_of(tone), play=True)
    wait_for(engine, lambda s: s.position_frame > 0, "sound")
    engine.send(messages.RescanDevices())
    wait_for_report(engine, lambda r: isinstance(r, DeviceList), "the list")
    assert wait_for(engine, lambda s: True, "a snapshot").playing


def test_live_input_without_a_device_is_silence_begun_muted(start, tone):
    engine = start(session_of(tone))
    engine.send(messages.UseLive())
    heard = wait_for(engine, lambda s: s.input_kind is InputKind.LIVE, "live input")
    assert heard.frames == 0
    playing = wait_for(engine, lambda s: s.playing and s.muted, "it runs, muted")
    assert "begins muted" in playing.mute_reason
    engine.send(messages.SetMute(False))
    wait_for(engine, lambda s: not s.muted, "the end of the mute")
    engine.send(messages.SetMute(True))
    wait_for(engine, lambda s: s.muted and s.mute_reason == "", "a mute that was asked for")
