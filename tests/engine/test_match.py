"""Candidates at matched loudness: what is measured in the background holds for what is heard."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.audio.sink import FileSink
from preview.circuit.library import find_stage, with_overrides
from preview.circuit.netlist import netlist
from preview.dsp.stage import StageProcessor
from preview.engine import messages
from preview.engine.jobs import Loudness, LoudnessJob, run
from preview.engine.passages import Material
from preview.engine.rack import Rack
from preview.meters.loudness import LoudnessMeter
from preview.values.quality import Quality
from preview.values.stimulus import parse_stimulus
from tests.engine.running import RATE_HZ, session_of, wait_for

FULL_SCALE_V = 10.0


def bursts(seconds: float) -> np.ndarray:
    """Noise that comes and goes, so that the gate has something to do; stereo, its channels of different level."""
    noise = np.random.default_rng(6).normal(0, 0.03, (round(seconds * RATE_HZ), 2)) * [1.0, 0.5]
    swell = 0.5 + 0.5 * np.sin(2 * np.pi * 0.3 * np.arange(len(noise)) / RATE_HZ)
    return noise * np.where(swell > 0.3, swell, 0.01)[:, None]


def measured(job: LoudnessJob) -> float:
    return next(found.lufs for found in run(job) if isinstance(found, Loudness))


def heard_lufs(circuit, volts: np.ndarray, gain: float) -> float:
    rack = Rack(
        "A",
        StageProcessor(circuit, sample_rate_hz=RATE_HZ, channels=2, quality=Quality.STANDARD),
        sample_rate_hz=RATE_HZ,
        channels=2,
    )
    rack.set_gains({"A": gain})
    rack.reset()
    meter = LoudnessMeter(RATE_HZ, 2, full_scale_v=FULL_SCALE_V)
    out = np.zeros((512, 2))
    for first in range(0, len(volts) - 512, 512):
        rack.process(volts[first : first + 512], out)
        meter.feed(out if rack.heard is None else rack.heard)
    return meter.read().integrated_lufs


@pytest.fixture
def recording(tmp_path):
    path = tmp_path / "bursts.wav"
    with FileSink(path, sample_rate_hz=RATE_HZ, channels=2) as sink:
        sink.write(bursts(12.0))
    return path


def candidates():
    low = find_stage("inverting-low-pass")
    return {
        "A": netlist(low),
        "B": netlist(find_stage("inverting-high-pass")),
        "C": netlist(with_overrides(low, {"R2": "680k"}, {None: "LM358"})[0]),  # clips, slews
    }


@pytest.mark.slow
def test_candidates_are_heard_within_a_tenth_of_a_loudness_unit_of_each_other(recording):
    material = Material(path=recording, full_scale_v=FULL_SCALE_V)
    lufs = {letter: measured(LoudnessJob(letter, one, material)) for letter, one in candidates().items()}
    assert max(lufs.values()) - min(lufs.values()) > 3.0, "there is something to match"
    quietest = min(lufs.values())
    volts = FULL_SCALE_V * bursts(12.0).astype(np.float32).astype(np.float64)
    heard = [
        heard_lufs(one, volts, 10 ** ((quietest - lufs[letter]) / 20)) for letter, one in candidates().items()
    ]
    assert max(heard) - min(heard) < 0.1
    assert heard == pytest.approx([quietest] * 3, abs=0.1)


def test_half_the_gain_is_6_02_lu_softer(recording):
    low = find_stage("inverting-low-pass")
    material = Material(path=recording, full_scale_v=FULL_SCALE_V)
    half = with_overrides(low, {"R1": "20k"}, {})[0]
    louder, softer = (measured(LoudnessJob("A", netlist(one), material)) for one in (low, half))
    assert louder - softer == pytest.approx(20 * math.log10(2), abs=0.01)


def test_a_sine_has_its_loudness_by_the_standard():
    # ITU-R BS.1770-4: 997 Hz at 0 dBFS in one channel is -3.01 LKFS (found = memory); R1 = R2 is a gain of one
    stage = with_overrides(find_stage("inverting-low-pass"), {"R1": "100k", "C1": "1p"}, {})[0]
    material = Material(stimulus=parse_stimulus("sine 997 0.5V"), full_scale_v=0.5)
    assert measured(LoudnessJob("A", netlist(stage), material)) == pytest.approx(-3.01, abs=0.02)


def test_of_a_long_recording_pieces_are_measured(tmp_path):
    long = tmp_path / "long.wav"
    with FileSink(long, sample_rate_hz=8000, channels=1) as sink:
        sink.write(np.random.default_rng(7).normal(0, 0.02, (300 * 8000, 1)))
    low = netlist(find_stage("inverting-low-pass"))
    whole = measured(LoudnessJob("A", low, Material(path=long, full_scale_v=1.0)))
    part = measured(LoudnessJob("A", low, Material(path=long, full_scale_v=1.0, region=(0, 50 * 8000))))
    assert whole == pytest.approx(part, abs=0.1)


def test_a_running_engine_matches_its_candidates_and_can_be_told_not_to(start, recording):
    engine = start(session_of(recording), play=True)
    low = find_stage("inverting-low-pass")
    engine.send(
        messages.KeepCandidate(
            "B", session_of(recording, stage=with_overrides(low, {"R1": "20k"}, {})[0]).netlist()
        )
    )
    engine.send(messages.SetMatch(True))
    matched = wait_for(engine, lambda s: all(c.loudness_lufs is not None for c in s.candidates), "loudness")
    assert [c.match_db for c in matched.candidates] == [pytest.approx(-6.02, abs=0.01), 0.0]
    wait_for(engine, lambda s: s.match and s.match_db == pytest.approx(-6.02, abs=0.01), "the match of A")
    engine.send(messages.SelectCandidate("B"))
    wait_for(engine, lambda s: s.letter == "B" and s.match_db == 0.0, "the match of B")
    engine.send(messages.SelectCandidate("A"))
    engine.send(messages.SetPart("R1", 5e3))
    wait_for(engine, lambda s: s.match_db == pytest.approx(-12.04, abs=0.1), "the match of the louder A")
    engine.send(messages.SetMatch(False))
    wait_for(engine, lambda s: not s.match and s.match_db == 0.0, "no match")
