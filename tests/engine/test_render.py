"""Rendering: the samples are the stage's own, aligned, whole, whatever the chunk."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.audio.source import FileSource
from preview.circuit.library import find_stage, with_overrides
from preview.dsp.stage import StageProcessor
from preview.engine.render import output_scale_v, render
from preview.errors import CircuitError
from preview.session import Session
from preview.values.levels import parse_full_scale
from preview.values.quality import Quality

RATE_HZ = 48000


def session_of(stage_name: str = "inverting-low-pass", opamp: str | None = None, full_scale: str = "5 V"):
    stage = find_stage(stage_name)
    if opamp is not None:
        stage, _ = with_overrides(stage, {}, {None: opamp})
    return Session(None, stage, stage.supply, parse_full_scale(full_scale), quality=Quality.DRAFT)


@pytest.fixture
def noise(tmp_path: Path) -> Path:
    path = tmp_path / "noise.wav"
    samples = np.random.default_rng(3).uniform(-0.5, 0.5, (5000, 3))
    soundfile.write(path, samples, RATE_HZ, subtype="DOUBLE")
    return path


def test_the_file_is_the_processors_output_with_its_delay_taken_out(noise, tmp_path):
    session = session_of()
    samples = soundfile.read(noise)[0]
    processor = StageProcessor(session.netlist(), sample_rate_hz=RATE_HZ, channels=3, quality=Quality.DRAFT)
    late = processor.latency_frames
    volts_in = np.concatenate([samples * 5.0, np.zeros((late, 3))])
    volts_out = np.zeros_like(volts_in)
    processor.process(volts_in, volts_out)
    out = tmp_path / "out.wav"
    with FileSource(noise) as source:
        result = render(session, source, out)
    rendered, rate = soundfile.read(out, dtype="float32", always_2d=True)
    assert rate == RATE_HZ
    assert np.array_equal(rendered, (volts_out[late:] / 5.0).astype(np.float32))
    assert result.frames == len(samples) == len(rendered)
    assert result.input_peak_v == 5.0 * np.abs(samples).max()
    assert result.output_peak_v == np.abs(volts_out[late:]).max()
    assert result.opamps[0].clip_events > 0


@pytest.mark.parametrize("chunk_frames", [1, 17, 509])
def test_the_samples_do_not_depend_on_the_chunk(noise, tmp_path, chunk_frames):
    files = []
    for chunk in (chunk_frames, 8192):
        with FileSource(noise) as source:
            render(session_of(), source, tmp_path / f"{chunk}.wav", chunk_frames=chunk)
        files.append((tmp_path / f"{chunk}.wav").read_bytes())
    assert files[0] == files[1]


@pytest.mark.parametrize("frames", [1, 97, 98, 99, 8192])
def test_the_output_is_as_long_as_the_input(tmp_path, frames):
    path = tmp_path / "short.wav"
    soundfile.write(path, np.full(frames, 0.25), RATE_HZ, subtype="FLOAT")
    with FileSource(path) as source:
        assert render(session_of(), source, tmp_path / "out.wav").frames == frames
    assert soundfile.info(tmp_path / "out.wav").frames == frames


def test_a_step_is_time_aligned_with_its_input(tmp_path):
    path = tmp_path / "step.wav"
    samples = np.zeros(4000)
    samples[2000:] = 0.1
    soundfile.write(path, samples, RATE_HZ, subtype="FLOAT")
    with FileSource(path) as source:
        render(session_of(full_scale="1 V"), source, tmp_path / "out.wav")
    out = soundfile.read(tmp_path / "out.wav")[0]
    # the area between a step and its filtered self is the first moment of the impulse response, so the group
    # delay at DC: R2 C1 = 100 us = 4.8 frames for the drawn values; a delay left in would show frame for frame
    missing = np.sum(1.0 + out[1900:2400]) - 100
    assert missing == pytest.approx(4.8, abs=1e-4)


@pytest.mark.parametrize(
    ("opamp", "depth", "full_scale", "scale_v"),
    [
        ("ideal", "float", "5 V", 5.0),
        ("ideal", "16", "5 V", 15.0),
        ("ideal", "24", "20 V", 15.0),
        ("perfect", "24", "5 V", 15.0),
        ("perfect", "24", "20 V", 20.0),
    ],
)
def test_integer_files_are_scaled_to_the_larger_rail(opamp, depth, full_scale, scale_v):
    session = session_of(opamp=opamp, full_scale=full_scale)
    assert output_scale_v(session.netlist(), session, depth) == scale_v


def test_the_scale_is_in_the_comment_and_is_understood_again(noise, tmp_path):
    from preview.values.levels import full_scale_in_comment

    with FileSource(noise) as source:
        render(session_of(), source, tmp_path / "out.flac", depth="24")
    with FileSource(tmp_path / "out.flac") as source:
        comment = source.info.comment
    stated = full_scale_in_comment(comment)
    assert stated is not None
    assert stated.volts == 15.0
    assert "preview 0.1.0" in comment
    assert "inverting-low-pass" in comment


def test_a_computation_that_runs_away_is_an_error_and_leaves_no_file(noise, tmp_path, monkeypatch):
    def process(self, volts_in, volts_out):
        volts_out[:] = math.inf

    monkeypatch.setattr(StageProcessor, "process", process)
    out = tmp_path / "out.wav"
    with FileSource(noise) as source, pytest.raises(CircuitError, match="ran away"):
        render(session_of(), source, out)
    assert [path.name for path in tmp_path.iterdir()] == ["noise.wav"]
