"""What the player does to the signal around the circuit: nothing, but for ramps, loops and safety."""

from __future__ import annotations

import math

import numpy as np
import pytest

from preview.engine.readings import FaultReading
from preview.session import AtEnd
from preview.values.quality import Quality

RAMP_FRAMES = 80  # 10 ms at the rig's 8 kHz
GAIN = 2.0  # the rig's circuit


def start_of_sound(heard):
    """Index of the first frame that is not silence."""
    return int(np.flatnonzero(np.abs(heard[:, 0]) > 0)[0])


def test_after_the_start_ramp_the_output_is_the_circuits_output_exactly(make_rig):
    rig = make_rig()
    rig.player.play()
    heard = rig.hear(2048)
    # the ramp's first gain is tiny but not 0: sound begins with the recording's first frame
    first = start_of_sound(heard)
    assert first % 64 == 0
    expected = (rig.samples * 4.0 * GAIN / 4.0).astype(np.float32)
    count = 2048 - first - RAMP_FRAMES
    assert np.array_equal(heard[first + RAMP_FRAMES :], expected[RAMP_FRAMES : RAMP_FRAMES + count])


def test_play_before_the_circuit_is_there_waits_and_starts_with_the_first_frame_too(make_rig):
    rig = make_rig(np.full((4000, 1), 0.25))
    rig.player.inbox.clear()
    rig.player.play()
    assert not rig.hear(512).any()
    rig.player.inbox.append(rig.take_circuit)
    heard = rig.hear(1024)
    first = start_of_sound(heard)
    assert first % 64 == 0
    assert heard[first + RAMP_FRAMES, 0] == np.float32(0.5)
    assert rig.player.report().position_frame == 1024 - first


def test_the_start_ramp_is_a_raised_cosine_of_10_ms(make_rig):
    rig = make_rig(np.full((4000, 1), 0.25))
    rig.player.play()
    heard = rig.hear(1024)
    first = start_of_sound(heard)
    ramp = 0.5 - 0.5 * np.cos(np.pi * np.arange(1, RAMP_FRAMES + 1) / RAMP_FRAMES)
    np.testing.assert_allclose(heard[first : first + RAMP_FRAMES, 0], 0.5 * ramp, atol=1e-7)


def test_before_play_and_after_pause_it_is_silent(make_rig):
    rig = make_rig()
    assert not rig.hear(512).any()
    rig.player.play()
    rig.hear(1024)
    rig.player.pause()
    faded = rig.hear(512)
    assert not faded[RAMP_FRAMES:].any()
    assert rig.player.silent


def test_pause_and_play_go_on_at_the_frame_that_was_reached(make_rig):
    rig = make_rig(np.linspace(0.1, 0.4, 4000)[:, np.newaxis])
    rig.player.play()
    rig.hear(1024)
    rig.player.pause()
    rig.hear(512)
    rig.player.snapshot = None
    rig.hear(512)
    position = rig.player.snapshot.position_frame
    rig.player.snapshot = None
    rig.player.play()
    heard = rig.hear(1024)
    first = start_of_sound(heard)
    after = first + RAMP_FRAMES
    expected = rig.samples[position + RAMP_FRAMES, 0] * GAIN
    assert heard[after, 0] == np.float32(expected)


def test_a_seek_fades_out_and_goes_on_at_the_wanted_frame_without_a_jump(make_rig):
    time_s = np.arange(40000) / 8000
    rig = make_rig(0.4 * np.sin(2 * np.pi * 50 * time_s)[:, np.newaxis])
    rig.player.play()
    before = rig.hear(1024)
    rig.player.seek(30000)
    heard = np.concatenate([before, rig.hear(2048)])[:, 0]
    # a 50 Hz sine of amplitude 0.8 moves at most 0.0314 a frame; the ramp adds at most 0.8 pi / 2 / 80
    assert np.abs(np.diff(heard)).max() <= 0.0315 + 0.8 * np.pi / 2 / RAMP_FRAMES
    wanted = (rig.samples[30000:, 0] * GAIN).astype(np.float32)
    silent = np.flatnonzero(np.convolve(heard[1024:] == 0.0, np.ones(32), "valid") == 32)
    first = 1024 + silent[-1] + 32
    tail = heard[first + RAMP_FRAMES + 64 :]
    assert np.array_equal(tail, wanted[RAMP_FRAMES + 64 :][: len(tail)])


@pytest.mark.parametrize("region", [(1000, 1500), (200, 280), (0, 4000)])
def test_a_region_loops_without_a_missing_or_doubled_frame(make_rig, region):
    rig = make_rig(loop=True)
    rig.player.set_region(*region)
    rig.player.play()
    heard = rig.hear(12032)
    first = start_of_sound(heard)
    start, end = region
    count = len(heard) - first
    frames = start + np.arange(count) % (end - start)
    expected = (rig.samples[frames] * GAIN).astype(np.float32)
    assert np.array_equal(heard[first + RAMP_FRAMES :], expected[RAMP_FRAMES:])


def test_a_region_set_around_what_plays_does_not_interrupt_it(make_rig):
    rig = make_rig(loop=True)
    rig.player.play()
    before = rig.hear(1024)
    first = start_of_sound(before)
    rig.player.set_region(100, 3000)
    heard = np.concatenate([before, rig.hear(4096)])
    frames = np.arange(len(heard) - first)
    frames = np.where(frames >= 3000, 100 + (frames - 3000) % 2900, frames)
    expected = (rig.samples[frames] * GAIN).astype(np.float32)
    assert np.array_equal(heard[first + RAMP_FRAMES :], expected[RAMP_FRAMES:])


def test_a_region_that_is_left_before_it_is_ready_is_entered_over_a_fade(make_rig):
    samples = np.linspace(0.0, 0.4, 4000)[:, None]
    rig = make_rig(samples, loop=True)
    rig.player.play()
    before = rig.hear(2048)
    rig.reader.set_region(100, 1500, True)  # as if playing had gone past its end while the disk was slow
    heard = np.concatenate([before, rig.hear(2048)])[:, 0]
    silent = 2048 + int(np.flatnonzero(heard[2048:] == 0.0)[-1])
    heard = heard[: silent + 1200]  # before it turns
    assert np.abs(np.diff(heard)).max() < 0.4 * GAIN * np.pi / 2 / RAMP_FRAMES + 0.001
    played = heard[silent + RAMP_FRAMES + 1 :] / GAIN
    np.testing.assert_allclose(np.diff(played), samples[1, 0], atol=1e-6)
    assert played[0] / samples[1, 0] == pytest.approx(100 + RAMP_FRAMES, abs=1)


def test_at_the_end_every_frame_is_heard_then_it_waits_at_the_start(make_rig):
    rig = make_rig(loop=False)
    rig.player.play()
    heard = rig.hear(6400)
    first = start_of_sound(heard)
    expected = (rig.samples * GAIN).astype(np.float32)
    assert np.array_equal(heard[first + RAMP_FRAMES : first + 4000], expected[RAMP_FRAMES:])
    assert not heard[first + 4000 :].any()
    rig.player.snapshot = None
    rig.hear(512)
    assert rig.player.snapshot is not None
    assert not rig.player.snapshot.playing
    assert rig.player.snapshot.position_frame == 0


def test_the_end_can_be_changed_to_loop_while_it_plays(make_rig):
    rig = make_rig(loop=False)
    rig.player.play()
    rig.hear(1024)
    rig.player.set_at_end(AtEnd.LOOP)
    heard = rig.hear(8192)
    assert np.abs(heard).reshape(-1, 64).max(axis=1).min() > 0


def test_a_recording_shorter_than_the_delay_is_heard_whole(make_rig):
    rig = make_rig(np.full((20, 1), 0.25), loop=False)
    rig.player.play()
    heard = rig.hear(1024)
    assert np.count_nonzero(heard) == 20
    assert rig.player.silent


def test_bypass_passes_the_input_on(make_rig):
    rig = make_rig(np.full((4000, 1), 0.25))
    rig.player.set_bypass(True)
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == np.float32(0.25)


def test_volume_starts_20_db_down_and_glides(make_rig):
    from preview.engine.monitor import START_VOLUME_DB

    assert START_VOLUME_DB == -20.0
    rig = make_rig(np.full((40000, 1), 0.25), loop=True, volume_db=START_VOLUME_DB)
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == pytest.approx(0.05, rel=1e-6)
    rig.player.set_volume(0.0)
    heard = rig.hear(512)
    assert heard[-1, 0] == np.float32(0.5)
    assert np.abs(np.diff(heard[:, 0])).max() <= 0.45 * np.pi / 2 / 160 + 1e-6  # 20 ms
    rig.player.set_volume(-math.inf)
    assert rig.hear(512)[-1, 0] == 0.0


def test_volume_above_0_db_and_not_a_number_are_refused(make_rig):
    rig = make_rig(np.full((4000, 1), 0.25))
    rig.player.set_volume(12.0)
    rig.player.set_volume(math.nan)
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == np.float32(0.5)


def test_samples_above_full_scale_are_limited_and_counted(make_rig):
    rig = make_rig(np.full((4000, 1), 0.9))
    rig.player.play()
    heard = rig.hear(1024)
    assert heard.max() == 1.0
    assert rig.player.report().limited_blocks > 0
    rig.player.clear_holds()
    rig.player.pause()
    rig.hear(256)
    rig.player.clear_holds()
    rig.hear(64)
    assert rig.player.report().limited_blocks == 0


def test_what_is_limited_is_quieter_too_for_a_moment(make_rig):
    rig = make_rig(np.full((40000, 1), 0.9), loop=True)
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == 1.0
    rig.player.duck(-6.0)
    heard = rig.hear(512)[:, 0]
    assert heard[-1] == pytest.approx(10 ** (-6 / 20), rel=1e-6)
    assert np.abs(np.diff(heard)).max() <= 0.5 * np.pi / 2 / 160 + 1e-6  # 20 ms
    rig.player.duck(0.0)
    assert rig.hear(512)[-1, 0] == 1.0


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_what_is_not_a_number_is_muted_reported_and_can_be_started_again(make_rig, value):
    rig = make_rig()
    rig.player.play()
    rig.hear(1024)
    rig.circuit.fail_with = value
    assert np.isfinite(rig.hear(512)).all()
    assert rig.player.silent
    assert "ran away" in rig.player.faults.popleft()
    rig.circuit.fail_with = None
    rig.player.play()
    assert rig.hear(1024).any()


def test_an_error_in_the_circuit_is_silence_and_a_notice_not_an_exception(make_rig):
    rig = make_rig()
    rig.player.play()
    rig.hear(1024)

    def broken(volts_in, volts_out):
        raise ZeroDivisionError("boom")

    rig.circuit.process = broken
    assert not rig.hear(128)[64:].any()
    assert "ZeroDivisionError" in rig.player.faults.popleft()


def test_full_scale_changes_in_a_short_silence(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.hear(1024)
    rig.player.set_full_scale(8.0)
    heard = rig.hear(1024)
    assert heard.min() == 0.0
    assert heard[-1, 0] == np.float32(0.5)
    assert rig.player.deck.full_scale_v == 8.0
    assert rig.player.report().output.peak_v[0] == pytest.approx(4.0)


def test_another_full_scale_begins_new_holds(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.hear(1024)
    rig.player.set_full_scale(0.4)
    rig.hear(1024)
    report = rig.player.report()
    assert report.input.hold_v == (pytest.approx(0.1),)
    assert report.output.hold_v == (pytest.approx(0.2),)


def test_bypass_and_another_circuit_begin_a_new_hold_at_the_output(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.hear(1024)
    assert rig.player.report().output.hold_v == (pytest.approx(2.0),)
    rig.player.set_bypass(True)
    rig.hear(1024)
    assert rig.player.report().output.hold_v == (pytest.approx(1.0),), "the input, nothing of the stage"
    rig.player.set_bypass(False)
    rig.hear(1024)
    rig.circuit.swapping = True
    rig.player.deck.circuit_changed(Quality.STANDARD)
    rig.hear(1024)
    rig.circuit.gain, rig.circuit.swapping = 0.5, False
    rig.hear(1024)
    report = rig.player.report()
    assert report.output.hold_v == (pytest.approx(0.5),), "nothing of the circuit before"
    assert report.input.hold_v == (pytest.approx(1.0),), "the input is the same signal"


def test_a_hold_begun_while_paused_has_the_first_peak_after_play(make_rig):
    samples = np.zeros((4000, 1))
    samples[3] = 0.25
    rig = make_rig(samples)
    rig.player.set_bypass(True)
    rig.hear(1024)
    rig.player.play()
    rig.hear(1024)
    assert rig.player.report().output.hold_v == (pytest.approx(1.0),)


def test_meters_read_volts_and_the_position_is_the_one_heard(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    heard = rig.hear(2048)
    report = rig.player.report()
    assert report.input.peak_v == (pytest.approx(1.0),)
    assert report.output.peak_v == (pytest.approx(2.0),)
    assert report.position_frame == 2048 - start_of_sound(heard)
    assert report.playing


def test_clip_counts_survive_pause_and_play(make_rig):
    rig = make_rig()
    rig.player.play()
    rig.hear(512)
    before = rig.player.report().opamps[0].clip_events
    assert before > 0, "the rig's circuit claims one event a block"
    rig.player.pause()
    rig.hear(512)
    rig.player.play()
    rig.hear(512)
    after = rig.player.report().opamps[0].clip_events
    assert after > before
    rig.player.clear_holds()
    rig.hear(64)
    assert rig.player.report().opamps[0].clip_events < before


def test_the_level_of_an_op_amp_is_held_and_also_told_as_it_is(make_rig):
    samples = np.full((40000, 1), 0.25)
    samples[2000:] = 0.05
    rig = make_rig(samples)
    rig.player.play()
    rig.hear(1024)
    first = rig.player.report()
    assert first.opamp_peaks_v == (pytest.approx(2.0),), "4 V of full scale, a gain of 2"
    rig.hear(4096)
    rig.player.report()
    rig.hear(1024)
    later = rig.player.report()
    assert later.opamp_peaks_v == (pytest.approx(0.4),)
    assert later.opamps[0].peak_v == pytest.approx(2.0)


def test_a_mono_recording_is_heard_on_both_channels_and_stereo_on_one_as_the_mean(make_rig):
    rig = make_rig()
    rig.player.play()
    heard = rig.hear(1024, channels=2)
    assert heard.any()
    assert np.array_equal(heard[:, 0], heard[:, 1])
    stereo = make_rig(np.tile([0.2, 0.4], (4000, 1)))
    stereo.player.play()
    assert stereo.hear(1024, channels=1)[-1, 0] == pytest.approx(0.6)


def test_blocks_longer_than_the_player_computes_at_once_are_filled_whole(make_rig):
    small, large = make_rig(), make_rig()
    small.player.play()
    large.player.play()
    one, other = small.hear(2048, block=64), large.hear(2048, block=1024)
    first, second = start_of_sound(one), start_of_sound(other)
    count = 2048 - max(first, second)
    assert np.array_equal(one[first : first + count], other[second : second + count])


def test_a_mute_fades_out_while_everything_goes_on_and_is_metered(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.hear(1024)
    rig.player.mute(True)
    faded = rig.hear(512)[:, 0]
    assert np.abs(np.diff(faded)).max() <= 0.5 * np.pi / 2 / RAMP_FRAMES + 1e-6
    assert not faded[RAMP_FRAMES:].any()
    report = rig.player.report()
    assert (report.muted, report.playing, report.mute_reason) == (True, True, "")
    assert report.output.peak_v == (pytest.approx(2.0),)
    rig.player.mute(False)
    assert rig.hear(512)[-1, 0] == np.float32(0.5)


def test_a_stage_that_gives_up_fades_is_told_once_and_recovers_from_rest(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.hear(1024)
    rig.circuit.fault = FaultReading("U1", 0.125, "its output grows without end")
    faded = rig.hear(1024)[:, 0]
    assert np.abs(np.diff(faded)).max() <= 0.5 * np.pi / 2 / RAMP_FRAMES + 1e-6
    assert not faded[RAMP_FRAMES:].any()
    report = rig.player.report()
    assert report.muted
    assert report.fault == FaultReading("U1", 0.125, "its output grows without end")
    assert list(rig.player.faults) == ["U1 at 0.125 s: its output grows without end; muted"]
    resets = rig.circuit.resets
    rig.player.recover()
    heard = rig.hear(1024)
    assert rig.circuit.resets > resets
    assert heard[-1, 0] == np.float32(0.5)
    report = rig.player.report()
    assert (report.muted, report.fault) == (False, None)
    assert len(rig.player.faults) == 1


def test_a_mute_that_was_asked_for_survives_a_recovery(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.player.play()
    rig.player.mute(True, "live input begins muted")
    rig.circuit.fail_with = math.nan
    rig.hear(1024)
    rig.circuit.fail_with = None
    rig.player.recover()
    assert not rig.hear(1024).any()
    report = rig.player.report()
    assert (report.muted, report.fault, report.playing) == (True, None, True)


def test_nobody_there_to_hear_keeps_the_place_until_released(make_rig):
    rig = make_rig(np.linspace(0.1, 0.4, 4000)[:, np.newaxis])
    rig.player.play()
    rig.hear(1024)
    rig.player.hold()
    rig.hear(512)
    held = rig.player.report()
    assert not held.playing
    rig.hear(2048)
    assert rig.player.report().position_frame == held.position_frame
    rig.player.release()
    heard = rig.hear(1024)
    after = start_of_sound(heard) + RAMP_FRAMES
    assert heard[after, 0] == np.float32(rig.samples[held.position_frame + RAMP_FRAMES, 0] * GAIN)


def test_what_was_paused_stays_paused_after_a_hold(make_rig):
    rig = make_rig()
    rig.player.play()
    rig.hear(1024)
    rig.player.hold()
    rig.player.pause()
    rig.hear(512)
    rig.player.release()
    assert not rig.hear(1024).any()


def test_play_ends_a_hold(make_rig):
    rig = make_rig()
    rig.player.hold()
    rig.player.play()
    assert rig.hear(1024).any()


@pytest.mark.parametrize("region", [(200, 201), (3999, 4000), (3990, None), (50, 50)])
def test_a_region_shorter_than_10_ms_is_made_that_long(make_rig, region):
    rig = make_rig(loop=True)
    rig.player.set_region(*region)
    rig.hear(64)
    start, end = rig.player.report().region
    assert end - start == RAMP_FRAMES
    assert start <= region[0] <= end <= 4000


def test_a_recording_of_a_few_frames_is_not_looped_into_a_direct_voltage(make_rig):
    rig = make_rig(np.full((3, 1), 0.25))
    rig.player.set_at_end(AtEnd.LOOP)
    rig.player.play()
    heard = rig.hear(4096)
    assert np.count_nonzero(heard) == 3
    assert rig.player.report().at_end is AtEnd.STOP


def test_of_more_channels_than_the_device_has_the_chosen_ones_are_heard_and_it_is_said(make_rig):
    rig = make_rig(np.tile([0.1, 0.2, 0.3, 0.4], (40000, 1)), loop=True)
    rig.player.play()
    assert rig.hear(1024, channels=2)[-1] == pytest.approx([0.2, 0.4])
    assert rig.player.report().heard_channels == (0, 1)
    rig.player.choose_channels((3, 2, 9))
    assert rig.hear(1024, channels=2)[-1] == pytest.approx([0.8, 0.6])
    assert rig.player.report().heard_channels == (3, 2)
    assert rig.hear(1024, channels=1)[-1] == pytest.approx([0.8])
    assert rig.hear(1024, channels=4)[-1] == pytest.approx([0.2, 0.4, 0.6, 0.8])
    assert rig.player.report().heard_channels == ()


def test_the_match_gain_is_heard_but_not_metered(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True)
    rig.circuit.match_gain = 0.5
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == np.float32(0.25)
    report = rig.player.report()
    assert report.output.peak_v == (pytest.approx(2.0),)
    assert report.match_db == pytest.approx(-6.0206, abs=1e-4)


def test_a_source_in_volts_does_not_depend_on_the_full_scale(make_rig):
    rig = make_rig(np.full((40000, 1), 0.25), loop=True, in_volts=True)
    rig.player.play()
    assert rig.hear(1024)[-1, 0] == np.float32(0.125)
    rig.player.set_full_scale(8.0)
    assert rig.hear(1024)[-1, 0] == np.float32(0.0625)
    assert rig.player.report().output.peak_v == (pytest.approx(0.5),)
