"""One recording checked: levels, visits, worst moments and the largest clean input against closed forms."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from numpy.typing import NDArray

from preview.circuit.library import find_stage, with_overrides
from preview.circuit.parts import Supply
from preview.dsp.stage import StageProcessor
from preview.engine.check.results import CheckPlan, FileCheck
from preview.engine.check.run import EVENTS_KEPT, Stages
from preview.engine.check.single import check_file
from preview.errors import AudioFileError
from preview.session import Session
from preview.values.levels import parse_full_scale
from preview.values.quality import Quality
from tests.dsp.test_events import recovering_low_pass

Real = NDArray[np.float64]
RATE = 48_000


def session(
    stage: str = "inverting-low-pass", opamp: str = "ideal", rail_v: float = 13.5, **parts: str
) -> Session:
    """A session with rails of 13.5 V and a full scale of 1 V."""
    changed, _ = with_overrides(find_stage(stage), parts, {None: opamp})
    return Session(
        audio=None,
        stage=changed,
        supply=Supply(rail_v, -rail_v),
        full_scale=parse_full_scale("1 V"),
    )


def check(
    folder: Path,
    volts: Real,
    made: Session,
    rate: int = RATE,
    *,
    full_scale: str = "20 V",
    margin: bool = True,
) -> FileCheck:
    """The check of a signal in volts, through a float file."""
    path = folder / "signal.wav"
    scale = parse_full_scale(full_scale)
    soundfile.write(path, volts / scale.volts, rate, subtype="DOUBLE")
    plan = CheckPlan(made, scale, margin=margin)
    return check_file(path, plan, Stages(made))


def faded(volts: Real, frames: int = 2400) -> Real:
    ramp = 0.5 - 0.5 * np.cos(np.pi * np.arange(frames) / frames)
    shape = np.ones(len(volts))
    shape[:frames], shape[-frames:] = ramp, ramp[::-1]
    return volts * (shape[:, None] if volts.ndim == 2 else shape)


def sine(f: float, peak_v: float, seconds: float = 0.5, rate: int = RATE) -> Real:
    return faded(peak_v * np.sin(2 * np.pi * f * np.arange(round(seconds * rate)) / rate))


def test_a_sine_has_the_levels_and_headroom_of_the_closed_form(tmp_path: Path) -> None:
    f, peak_v = 1000.0, 0.5
    gain = 10 / math.hypot(1, f / 1591.549)
    left = sine(f, peak_v, 2.0)
    found = check(tmp_path, np.stack([left, 0.5 * left], axis=1), session())
    assert (found.frames, found.channels, found.sample_rate_hz) == (2 * RATE, 2, RATE)
    assert found.full_scale_v == 20.0
    assert found.input.peak_v == pytest.approx(peak_v, rel=1e-3)
    assert found.input.true_peak_v == pytest.approx(peak_v, rel=1e-3)
    assert found.output.peak_v == pytest.approx(peak_v * gain, rel=1e-3)
    assert found.output.rms_v == pytest.approx(peak_v * gain / math.sqrt(2), rel=0.03)  # the fades are in it
    assert found.output.crest_db == pytest.approx(3.01, abs=0.3)
    assert found.output.dc_v == pytest.approx(0.0, abs=1e-4)
    # 1 kHz stereo: -3.01 LKFS at full scale for one channel of 997 Hz, two channels of which one is 6 dB lower
    level = 20 * math.log10(peak_v / 20) + 10 * math.log10(1 + 0.25)
    assert found.input.loudness_lufs == pytest.approx(level - 3.01, abs=0.25)
    (u1,) = found.opamps
    assert u1.peak_v == pytest.approx(peak_v * gain, rel=1e-4)
    assert u1.headroom_db == pytest.approx(20 * math.log10(13.5 / (peak_v * gain)), abs=1e-3)
    assert u1.slew_peak_v_per_s == pytest.approx(2 * math.pi * f * peak_v * gain, rel=1e-3)
    assert u1.current_peak_a == pytest.approx(peak_v / 10e3, rel=1e-3)
    assert (u1.clip_events, u1.clipped_s, u1.slew_events, found.events) == (0, 0.0, 0, ())
    assert found.margin is not None
    assert found.margin.gain_db == pytest.approx(u1.headroom_db, abs=0.02)
    assert (found.margin.limited_by, found.margin.limit, found.margin.proof) == ("U1", "rail", "linear")


@pytest.mark.parametrize("rate", [8_000, 44_100, 96_000])
def test_known_visits_to_the_rail_are_found_exactly_and_in_time(tmp_path: Path, rate: int) -> None:
    rng = np.random.default_rng(21)
    volts = np.zeros((round(3.0 * rate), 2))
    expected = []
    for channel in range(2):
        at_s = 0.05
        while at_s < 2.6:
            u, length_s = float(rng.uniform(1.0, 18.0)), float(rng.uniform(0.01, 0.06))
            first, last = round(at_s * rate), round((at_s + length_s) * rate)
            sign = float(rng.choice([-1.0, 1.0]))
            volts[first:last, channel] = sign * u
            if 10 * u * (1 - math.exp(-(last - first) / rate / 0.01)) > 13.5:
                enter, leave = recovering_low_pass(u, (last - first) / rate)
                edge_s = (first - 0.5) / rate  # the middle of a step between two samples
                expected.append((edge_s + enter, edge_s + leave, channel + 1, "low" if sign > 0 else "high"))
            at_s += length_s + 0.25
    expected.sort()
    found = check(tmp_path, volts, session(C1="100n"), rate, margin=False)
    assert 5 < len(expected) < 18  # some pulses are too weak
    assert [(e.channel, e.side, e.kind) for e in found.events] == [(c, s, "rail") for _, _, c, s in expected]
    np.testing.assert_allclose([e.start_s for e in found.events], [e[0] for e in expected], atol=0.5 / rate)
    np.testing.assert_allclose([e.end_s for e in found.events], [e[1] for e in expected], atol=0.5 / rate)
    (u1,) = found.opamps
    assert u1.clip_events == len(expected)
    assert u1.clipped_s == pytest.approx(sum(e[1] - e[0] for e in expected), abs=1e-5)
    longest = max(expected, key=lambda e: e[1] - e[0])
    assert u1.worst_s == pytest.approx(longest[0], abs=0.5 / rate)
    assert u1.headroom_db == 0.0


@pytest.mark.parametrize("at", [700, 5000, 30_011, 47_000])
def test_the_worst_moment_of_a_clean_signal_is_its_peak_to_a_sample(tmp_path: Path, at: int) -> None:
    volts = 0.001 * np.random.default_rng(1).normal(0, 1, RATE)
    n = np.arange(RATE)
    volts += 0.5 * np.exp(-(((n - at) / 20.0) ** 2))
    found = check(tmp_path, volts, session(), margin=False)
    out = np.empty((len(n) + 100, 1))
    StageProcessor(session().netlist(), sample_rate_hz=RATE, channels=1, quality=Quality.STANDARD).process(
        np.pad(volts, (0, 100))[:, None], out
    )
    assert found.opamps[0].worst_s == pytest.approx((np.abs(out[100:, 0]).argmax()) / RATE, abs=1 / RATE)


@pytest.mark.parametrize("opamp", ["ideal", "TL072"])
@pytest.mark.parametrize("peak_v", [0.2, 1.3, 6.0])
def test_the_largest_clean_input_is_just_clean_and_a_little_more_is_not(
    tmp_path: Path, opamp: str, peak_v: float
) -> None:
    rng = np.random.default_rng(8)
    volts = faded(rng.normal(0, 1, (3 * RATE, 2)).cumsum(axis=0) * 0.1)
    volts -= np.linspace(volts[0], volts[-1], len(volts))
    volts *= peak_v / np.abs(volts).max()
    made = session("inverting-band-pass", opamp)
    found = check(tmp_path, volts, made)
    assert found.margin is not None
    assert found.margin.proof == ("linear" if found.opamps[0].clip_events == 0 else "whole file")
    gain = 10 ** (found.margin.gain_db / 20)
    just = check(tmp_path, volts * gain, made, margin=False)
    over = check(tmp_path, volts * gain * 10 ** (0.03 / 20), made, margin=False)
    assert just.opamps[0].clip_events == 0
    assert over.opamps[0].clip_events > 0
    assert just.opamps[0].headroom_db < 0.03


def test_higher_peaks_than_in_the_passages_that_clip_longest_are_found_too(tmp_path: Path) -> None:
    # four long swells of 300 Hz, 6 dB over the rail; between them bursts of 3 kHz, each higher than the one before
    made = session("inverting-low-pass", "ideal", C1="1p")  # a gain of 10
    silence, volts = np.zeros(RATE), []
    burst = np.sin(2 * np.pi * 3e3 * np.arange(480) / RATE) * np.hanning(480)
    for extra_db in (7.0, 8.0, 9.0, 10.0):
        volts += [sine(300.0, 2 * 1.35), silence]
        volts += [1.35 * 10 ** (extra_db / 20) * burst, silence]
    signal = np.concatenate(volts)
    found = check(tmp_path, signal, made)
    assert found.margin is not None
    assert (found.margin.proof, found.margin.limit) == ("whole file", "rail")
    assert found.margin.gain_db == pytest.approx(20 * math.log10(1.35 / found.input.true_peak_v), abs=0.05)
    gain = 10 ** (found.margin.gain_db / 20)
    assert check(tmp_path, signal * gain, made, margin=False).opamps[0].clip_events == 0
    assert check(tmp_path, signal * gain * 10 ** (0.03 / 20), made, margin=False).opamps[0].clip_events > 0


def test_slew_rate_can_be_what_limits(tmp_path: Path) -> None:
    # 20 kHz and 0.5 V/us: 3.98 V peak, far from the rails
    made = session("non-inverting-gain", "LM741", C2="4p7", R2="2k2")
    volts = sine(20e3, 0.5, 0.3)
    found = check(tmp_path, volts, made)
    (u1,) = found.opamps
    assert found.margin is not None
    assert (found.margin.limit, found.margin.limited_by) == ("slew rate", "U1")
    assert found.margin.gain_db == pytest.approx(
        20 * math.log10(u1.slew_limit_v_per_s / u1.slew_peak_v_per_s), abs=0.1
    )
    loud = check(tmp_path, volts * 10 ** ((found.margin.gain_db + 3) / 20), made)
    assert loud.opamps[0].slew_events >= 1
    assert loud.opamps[0].slewed_s > 0.2  # whole frames: it slews in every one
    assert loud.opamps[0].clip_events == 0
    assert loud.margin is not None
    assert loud.margin.gain_db == pytest.approx(-3.0, abs=0.03)


def test_the_input_range_can_be_what_limits(tmp_path: Path) -> None:
    # a follower on +-13.5 V whose + input works up to 3 V from either rail: 10.5 V, well before its output's limit
    made = session("sallen-key-low-pass", "TL072", 13.5)
    (site,) = made.netlist().opamps
    room_v = min(site.input_high_v, -site.input_low_v)
    assert room_v < site.high_v
    found = check(tmp_path, sine(100.0, 1.0), made)
    assert found.margin is not None
    assert found.margin.limit == "input range"
    assert found.margin.gain_db == pytest.approx(20 * math.log10(room_v), abs=0.05)
    loud = check(tmp_path, sine(100.0, room_v + 0.5), made)
    (u1,) = loud.opamps
    assert u1.input_range_events > 10
    assert u1.input_range_s > 0.0
    assert {e.kind for e in loud.events} >= {"range"}


def test_a_single_supply_rests_between_its_rails(tmp_path: Path) -> None:
    made = replace(session(), supply=Supply(9.0, -1.0))
    found = check(tmp_path, sine(200.0, 0.05), made)
    (u1,) = found.opamps
    assert (u1.high_limit_v, u1.low_limit_v, u1.rest_v) == (9.0, -1.0, 0.0)
    assert found.margin is not None
    # the lower rail is the nearer: 1 V of room
    assert found.margin.gain_db == pytest.approx(20 * math.log10(1.0 / -u1.low_v), abs=0.02)


def test_silence_has_no_margin_and_no_worst_moment(tmp_path: Path) -> None:
    found = check(tmp_path, np.zeros(RATE), session())
    assert found.margin is None
    assert math.isnan(found.opamps[0].worst_s)
    assert found.opamps[0].headroom_db == math.inf
    assert found.input.loudness_lufs == -math.inf


def test_a_perfect_op_amp_has_no_limit_and_so_no_margin(tmp_path: Path) -> None:
    found = check(tmp_path, sine(100.0, 5.0), session(opamp="perfect"))
    assert found.margin is None
    assert found.opamps[0].headroom_db == math.inf


def test_every_visit_is_counted_but_only_so_many_are_kept(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("preview.engine.check.run.EVENTS_KEPT", 10)
    found = check(tmp_path, sine(200.0, 5.0), session(), margin=False)
    assert found.opamps[0].clip_events > 150
    assert found.event_count == found.opamps[0].clip_events
    assert len(found.events) == 10
    assert EVENTS_KEPT >= 1000


def test_the_trace_keeps_the_peaks_however_long_the_recording_is(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("preview.engine.check.trace.ENTRIES", 8)
    volts = np.zeros(40 * 2048 + 77)
    volts[30 * 2048 + 100] = 0.7
    found = check(tmp_path, volts, session(), margin=False)
    trace = found.trace
    assert 4 <= len(trace.input_peak_v) <= 8
    assert max(trace.input_peak_v) == pytest.approx(0.7)
    assert int(np.argmax(trace.input_peak_v)) == int((30 * 2048 + 100) / RATE / trace.step_s)
    assert len(trace.input_peak_v) * trace.step_s >= found.length_s
    assert min(trace.headroom_db[0]) == pytest.approx(found.opamps[0].headroom_db)
    assert sum(trace.headroom_s[0]) == pytest.approx(found.length_s)


def test_a_log_of_numbers_is_checked_in_its_own_volts(tmp_path: Path) -> None:
    t = np.arange(1000) / 50
    volts = 0.5 + 0.4 * np.sin(2 * np.pi * 2 * t)
    path = tmp_path / "pump.csv"
    path.write_text("time,g\n" + "".join(f"{a:.2f},{v / 0.1:.9g}\n" for a, v in zip(t, volts, strict=True)))
    made = session()
    plan = CheckPlan(made, None, per_unit=parse_full_scale("100 mV"))
    found = check_file(path, plan, Stages(made))
    assert found.sample_rate_hz == 50.0
    assert found.input.peak_v == pytest.approx(np.abs(volts).max(), rel=1e-8)
    assert found.input.dc_v == pytest.approx(0.5, rel=1e-3)
    assert found.opamps[0].peak_v == pytest.approx(9.0, rel=2e-3)
    assert math.isnan(found.input.loudness_lufs)
    assert found.margin is not None
    assert found.margin.gain_db == pytest.approx(20 * math.log10(13.5 / found.opamps[0].peak_v), abs=0.02)


def test_a_damaged_recording_raises_what_can_be_reported(tmp_path: Path) -> None:
    path = tmp_path / "bad.flac"
    soundfile.write(path, np.random.default_rng(2).uniform(-0.5, 0.5, 50_000), RATE)
    data = bytearray(path.read_bytes())
    data[60_000:60_400] = bytes(400)
    path.write_bytes(data)
    made = session()
    with pytest.raises(AudioFileError, match="damaged"):
        check_file(path, CheckPlan(made, None), Stages(made))
