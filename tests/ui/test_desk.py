"""The state behind the desk, without a screen."""

from __future__ import annotations

import math
import shlex
from dataclasses import replace
from pathlib import Path

import pytest

from preview.circuit.drive import LoadModel
from preview.circuit.library import find_stage, open_stages
from preview.circuit.parts import Supply
from preview.circuit.reader import parse_stage
from preview.cli import _parser
from preview.engine.messages import (
    DeviceList,
    DeviceRow,
    KeepCandidate,
    Pause,
    Play,
    Seek,
    SelectCandidate,
    SetAtEnd,
    SetBypass,
    SetCircuit,
    SetDevice,
    SetHeardChannels,
    SetMatch,
    SetMute,
    SetPart,
    SetRegion,
    SetVolume,
)
from preview.engine.options import session_from, with_running
from preview.errors import PartValueError
from preview.session import AtEnd
from preview.ui.changes import commands_between, render_command, with_setting
from preview.ui.desk import Desk
from preview.ui.opamps import with_opamp_type
from preview.values.noise import NoiseSetting
from preview.values.notation import parse_value
from preview.values.quality import Quality


class Clock:
    """A clock that is set by hand."""

    def __init__(self) -> None:
        self.now_s = 100.0

    def __call__(self) -> float:
        return self.now_s


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture
def desk(session, engine, clock) -> Desk:
    desk = Desk(session, engine, now_s=clock)
    desk.take(engine.snapshot)
    return desk


def test_only_the_changed_part_is_sent(session) -> None:
    changed = with_setting(session, "R2", 47e3)
    assert commands_between(session, changed) == [SetPart("R2", 47e3)]
    assert commands_between(session, session) == []


TONE = """
title = "Tone"
supply = { positive = "9 V", negative = "0 V" }
outputs = ["w"]
[parts]
R1 = { kind = "resistor", nodes = ["in", "out"], value = "4k7" }
P1 = { kind = "potentiometer", ends = ["gnd", "out"], wiper = "w", value = "10k", taper = "log" }
R2 = { kind = "resistor", nodes = ["w", "bias"], value = "100k" }
S1 = { kind = "switch", nodes = ["w", "gnd"], closed = true }
V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V" }
"""


def test_a_turned_potentiometer_and_a_thrown_switch_are_sent_like_values(session) -> None:
    old = session.with_stage(parse_stage(TONE, name="tone", file="tone.toml"))
    turned, thrown = (old.stage.part(name) for name in ("P1", "S1"))
    stage = old.stage.with_part(turned.with_setting(0.0)).with_part(thrown.with_setting(0.0))
    assert commands_between(old, replace(old, stage=stage)) == [SetPart("P1", 0.0), SetPart("S1", 0.0)]
    (command,) = commands_between(old, replace(old, output="w"))
    assert isinstance(command, SetCircuit)
    other = old.stage.with_part(replace(turned, taper="linear"))
    assert isinstance(commands_between(old, replace(old, stage=other))[0], SetCircuit)


def test_the_render_command_names_positions_switches_bias_and_output(session) -> None:
    opened = parse_stage(TONE, name="tone", file="tone.toml")
    stage = opened.with_part(replace(opened.part("P1"), position=0.1)).with_part(
        replace(opened.part("S1"), closed=False)
    )
    now = replace(session.with_stage(stage.with_part(replace(stage.part("V1"), value=4.0))), output="w")
    words = shlex.split(render_command(now, opened))
    assert [w for w in words if "=" in w] == ["P1=0.1", "S1=open", "V1=4.0"]
    assert words[words.index("--output") + 1] == "w"
    assert "--part" not in render_command(session.with_stage(opened), opened)


def test_another_supply_is_another_circuit(session) -> None:
    changed = replace(session, supply=Supply(12.0, -12.0))
    (command,) = commands_between(session, changed)
    assert isinstance(command, SetCircuit)
    assert command.netlist.opamps[0].high_v == 12.0


def test_a_value_out_of_range_changes_nothing(desk, engine, session) -> None:
    with pytest.raises(PartValueError, match="out of range"):
        desk.parts.set(1e15)
    assert desk.session == session
    assert engine.sent == []
    assert desk.method("undo")() == "nothing to take back"


def test_stepping_from_an_odd_value_reaches_the_next_standard_value(desk, engine) -> None:
    desk.parts.set(4321.0)
    desk.method("value_up")()
    assert engine.sent[-1] == SetPart("R1", 4700.0)  # E24, IEC 60063: 4.3, 4.7
    desk.method("value_down")()
    assert engine.sent[-1] == SetPart("R1", 4300.0)


def test_the_series_of_a_part_is_kept_and_used(desk, engine) -> None:
    for _ in range(3):  # E24 -> E48 -> E96 -> E192
        desk.method("next_series")()
    desk.method("value_up")()
    assert engine.sent[-1] == SetPart("R1", 10.1e3)  # E192, IEC 60063: 1.00, 1.01
    desk.method("next_series")()
    assert desk.parts.part.series == "E3"


def test_undo_walks_back_over_a_change_of_stage_and_redo_forward(desk, engine) -> None:
    desk.parts.set(22e3)
    desk.open_stage(find_stage("inverting-high-pass"))
    assert desk.before.stage.name == "inverting-high-pass"
    desk.method("undo")()
    assert desk.session.stage.part("R1").value == 22e3
    assert desk.before.stage.part("R1").value == 10e3, "'before' is the low-pass as it was opened"
    desk.method("undo")()
    assert engine.sent[-1] == SetPart("R1", 10e3)
    desk.method("redo")()
    desk.method("redo")()
    assert desk.session.stage.name == "inverting-high-pass"
    assert desk.method("redo")() == "nothing to make again"


def test_undo_leaves_quality_and_end_as_they_are(desk) -> None:
    desk.parts.set(22e3)
    desk.method("next_quality")()
    desk.method("at_end")()
    desk.method("undo")()
    assert desk.session.quality is Quality.FINE
    assert desk.session.at_end is AtEnd.STOP
    assert desk.session.stage.part("R1").value == 10e3


def test_quick_seeks_add_up_before_the_engine_has_answered(desk, engine) -> None:
    for _ in range(3):
        desk.method("forward_small")()
    assert engine.sent[-1] == Seek(144_000)


def test_the_engine_has_the_last_word_on_where_the_playhead_is(desk, engine, clock) -> None:
    desk.method("forward_small")()
    assert desk.listening.position_frame == 48_000
    clock.now_s += 1.0
    desk.take(replace(engine.snapshot, position_frame=1234))
    assert desk.listening.position_frame == 1234


def test_playing_follows_the_engine_when_the_file_has_ended(desk, engine, clock) -> None:
    desk.method("play_pause")()
    assert engine.sent == [Play()]
    desk.take(replace(engine.snapshot, playing=False))  # an older word: not believed yet
    assert desk.listening.playing
    clock.now_s += 1.0
    desk.take(replace(engine.snapshot, playing=False))
    assert not desk.listening.playing
    desk.listening.play(True)
    desk.method("play_pause")()
    assert engine.sent[-1] == Pause()


def test_a_region_never_ends_before_it_starts(desk, engine) -> None:
    desk.listening.seek(300_000)
    desk.method("region_end")()
    assert engine.sent[-1] == SetRegion(0, 300_000)
    desk.listening.seek(400_000)
    desk.method("region_start")()
    assert engine.sent[-1] == SetRegion(400_000, 600_000)
    desk.listening.seek(100_000)
    desk.method("region_end")()
    assert engine.sent[-1] == SetRegion(0, 100_000)


def test_a_region_at_the_very_start_or_end_holds_at_least_50_ms(desk, engine) -> None:
    # looped, two frames of a recording are a direct voltage on the headphones
    desk.listening.seek(0)
    desk.method("region_end")()
    assert engine.sent[-1] == SetRegion(0, 2400)
    desk.method("region_clear")()
    desk.listening.seek(10**9)
    assert engine.sent[-1] == Seek(599_999)
    desk.method("region_start")()
    assert engine.sent[-1] == SetRegion(597_600, 600_000)
    desk.listening.seek(597_700)
    desk.method("region_end")()
    assert engine.sent[-1] == SetRegion(0, 597_700)


def test_a_recording_shorter_than_the_shortest_region_is_its_own_region(session, engine) -> None:
    short = type(engine)(frames=1000)
    desk = Desk(session, short)
    desk.take(short.snapshot)
    for action in (desk.method("region_start"), desk.method("region_end")):
        action()
        assert short.sent[-1] == SetRegion(0, 1000)


def test_keys_do_nothing_harmful_before_the_engine_has_spoken(session, engine) -> None:
    desk = Desk(session, engine)
    for action in (
        desk.method("forward_small"),
        desk.method("back_large"),
        desk.method("region_start"),
        desk.method("region_end"),
    ):
        action()
    assert engine.sent == []


def test_the_volume_starts_low_ends_at_0_db_and_goes_off_below_60_db(desk, engine) -> None:
    assert desk.listening.volume_db == -20.0
    for _ in range(25):
        desk.method("volume_up")()
    assert engine.sent[-1] == SetVolume(0.0)
    for _ in range(61):
        desk.method("volume_down")()
    assert engine.sent[-1] == SetVolume(-math.inf)
    desk.method("volume_down")()
    assert engine.sent[-1] == SetVolume(-math.inf)
    desk.method("volume_up")()
    assert engine.sent[-1] == SetVolume(-60.0)


def test_a_new_engine_is_brought_to_where_the_old_one_was(desk, engine, clock) -> None:
    desk.parts.set(22e3)
    desk.method("bypass")()
    desk.method("at_end")()
    desk.method("volume_up")()
    desk.listening.seek(96_000)
    desk.method("region_start")()
    began = desk.as_left()
    assert began.session.netlist().values["R1"] == 22e3
    assert began.session.at_end is AtEnd.STOP
    assert (began.start_volume_db, began.region, began.start_frame) == (-19.0, (96_000, 600_000), 96_000)
    new = type(engine)()
    desk.resume(new, began)
    assert new.sent == [SetBypass(True)], "it has all else already"
    assert not desk.listening.playing, "sound starts by hand after a stop"


def test_what_is_done_while_a_new_engine_starts_is_not_lost(desk, engine, clock) -> None:
    began = desk.as_left()
    desk.parts.set(22e3)
    desk.method("candidate_keep")()
    desk.parts.set(47e3)
    desk.method("volume_up")()
    desk.method("at_end")()
    desk.method("match")()
    desk.listening.seek(96_000)
    desk.method("region_start")()
    new = type(engine)()
    desk.resume(new, began)
    kept = {c.letter: c.netlist.values["R1"] for c in new.sent if isinstance(c, KeepCandidate)}
    assert kept == {"A": 22e3, "B": 47e3}
    assert new.sent.index(SelectCandidate("B")) > 1
    for command in (
        *(SetVolume(-19.0), SetAtEnd(AtEnd.STOP), SetMatch(True)),
        *(SetRegion(96_000, 600_000), Seek(96_000)),
    ):
        assert command in new.sent
    desk.parts.set(10e3)
    assert new.sent[-1] == SetPart("R1", 10e3)


def test_a_new_engine_is_as_mute_as_the_old_one_and_on_the_same_device(desk, engine, clock) -> None:
    engine.say(muted=True, heard_channels=(2, 3))
    desk.take(engine.snapshot)
    row = DeviceRow("cellar", "ALSA", 0, 2, 48e3, False, False)
    desk.hear_report(DeviceList((row,)))
    desk.method("device")().take("cellar")
    new = type(engine)()
    desk.resume(new, desk.as_left())
    assert new.sent == [SetDevice("cellar"), SetHeardChannels((2, 3)), SetMute(True)]


def test_the_wall_of_the_output_is_the_nearer_rail(desk) -> None:
    assert desk.output_wall() == (15.0, "U1")
    desk.change(replace(desk.session, supply=Supply(12.0, -5.0)))
    assert desk.output_wall() == (5.0, "U1")
    desk.change(replace(desk.session, supply=Supply(9.0, 0.0)))
    assert desk.output_wall() == (9.0, "U1")
    desk.change(with_opamp_type(desk.session, "perfect")[0])
    assert desk.output_wall() == (None, None)


def test_the_wall_of_a_real_op_amp_is_where_it_stops_short_of_the_rail(desk) -> None:
    # TL072 data sheet, Motorola p. 3: ±14 V into 10 kilohm on ±15 V.
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    assert desk.output_wall() == (14.0, "U1")
    # LM358 on a single supply: the lower limit, some mV above gnd, is no wall for a large signal.
    desk.change(with_opamp_type(replace(desk.session, supply=Supply(9.0, 0.0)), "LM358")[0])
    (site,) = desk.sites()
    assert 0.0 < site.low_v < 0.5
    assert desk.output_wall() == (site.high_v, "U1")


def test_limits_are_worked_out_once_for_each_session(desk) -> None:
    first = desk.sites()
    assert desk.sites() is first
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    assert [site.type for site in desk.sites()] == ["TL072"]


def test_the_render_command_repeats_the_session_to_the_last_digit(session) -> None:
    opened = session.stage
    session = with_setting(with_setting(session, "R1", 4700.0), "C1", 1.23456789e-9)
    session = replace(session, audio=Path("a b.wav"), load=LoadModel(600.0), supply=Supply(12.0, -12.0))
    words = shlex.split(render_command(session, opened))
    assert words[:4] == ["preview", "render", "a b.wav", "OUT.wav"]
    options = list(zip(words[4::2], words[5::2], strict=True))
    parts = dict(text.split("=", 1) for option, text in options if option == "--part")
    assert parse_value(parts["R1"], "resistance") == 4700.0
    assert parse_value(parts["C1"], "capacitance") == 1.23456789e-9
    assert "R2" not in parts
    assert ("--full-scale", "+18 dBu") in options
    assert ("--load", "600R") in options
    assert ("--supply", "12.0 -12.0") in options


def test_the_render_command_carries_limits_taken_away_noise_and_power_on(session, tmp_path) -> None:
    now = replace(session, without=("slew", "input range"), noise=NoiseSetting(40.0, 7), power_on=True)
    words = shlex.split(render_command(now, session.stage))
    options = _parser().parse_args(words[1:])
    again = with_running(session_from(options), options)
    assert (again.without, again.noise, again.power_on) == (now.without, now.noise, now.power_on)


def test_the_render_command_names_every_stage_of_a_cascade(session) -> None:
    opened = open_stages(["inverting-high-pass", "inverting-low-pass"])
    session = with_setting(replace(session, stage=opened), "2.R1", 4700.0)
    words = shlex.split(render_command(session, open_stages(session.stage.opened_as)))
    options = list(zip(words[4::2], words[5::2], strict=True))
    assert [name for option, name in options if option == "--stage"] == list(opened.opened_as)
    assert [text for option, text in options if option == "--part"] == ["2.R1=4k7"]


def test_parts_of_a_cascade_are_turned_by_their_number(session, engine, clock) -> None:
    opened = open_stages(["inverting-high-pass", "inverting-low-pass"])
    desk = Desk(replace(session, stage=opened), engine, now_s=clock)
    assert desk.parts.choose_named("2.R1")
    desk.method("value_up")()
    assert engine.sent[-1] == SetPart("2.R1", 11e3)
    desk.method("reset_part")()
    assert engine.sent[-1] == SetPart("2.R1", 10e3)
