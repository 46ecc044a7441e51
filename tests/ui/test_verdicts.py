"""Verdicts on the op-amps: figures, grade, reason, cure; and how the panel shows them."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from preview.circuit.library import find_stage
from preview.circuit.opamp import OpAmpReading
from preview.circuit.parts import Supply
from preview.engine.messages import ClipMarks, OpAmpMarks, SetCircuit
from preview.meters.reading import LevelReading
from preview.ui.app import DeskApp
from preview.ui.desk import Desk
from preview.ui.figures import Figures, compute_figures, job_of
from preview.ui.opamps import with_opamp_type
from preview.ui.panels.opamps import OpAmpsPanel
from preview.ui.theme import Look
from preview.ui.verdicts import Grade, Verdict, verdicts
from preview.values.levels import parse_full_scale


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    """TL072 on ±15 V: it swings to ±14 V and slews at 13 V/µs (Motorola data sheet p. 3)."""
    desk = Desk(session, engine)
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    desk.take(engine.snapshot)
    return desk


def say(desk: Desk, engine, **fields: object) -> None:
    site = desk.sites()[0]
    reading = OpAmpReading("U1", 0.0, 0.0, 0.0, math.inf, 0, 0.0, 0.0)
    slew = min(site.model.slew_up_v_per_s, site.model.slew_down_v_per_s)
    reading = replace(reading, slew_limit_v_per_s=slew, **fields)
    desk.take(replace(engine.snapshot, opamps=(reading,)))


def verdict(desk: Desk, aspect: str) -> Verdict:
    return next(v for v in verdicts(desk) if v.aspect == aspect)


def asked(desk: Desk, high_v: float, low_v: float, slew: float = 1e6, done: int = 600_000) -> None:
    marks = OpAmpMarks("U1", ((0, 480),), high_v, low_v, slew)
    desk.hear_report(ClipMarks("A", 600_000, done, (marks,)))


# ---- swing ----


def test_without_a_signal_there_is_nothing_to_judge(desk, engine) -> None:
    say(desk, engine)
    assert verdict(desk, "swing").grade is Grade.OPEN
    assert "no signal yet" in verdict(desk, "swing").line


def test_room_enough_is_fine(desk, engine) -> None:
    say(desk, engine, peak_v=7.0, headroom_db=6.02)
    assert verdict(desk, "swing").line == "swing 7.00 V of 14.0 V, 6.0 dB left: fine"
    assert verdict(desk, "swing").grade is Grade.FINE


def test_less_than_3_db_is_tight_and_says_what_gives_3_db(desk, engine) -> None:
    say(desk, engine, peak_v=12.478, headroom_db=1.0)  # 14 V less 1 dB
    found = verdict(desk, "swing")
    assert found.grade is Grade.TIGHT
    # 12.478 V and 3 dB are 17.63 V: 3.63 V more than 14 V
    assert found.cure == "for 3 dB of room 3.63 V more supply or 2.0 dB less gain"


def test_clipping_says_how_often_and_what_the_recording_needs(desk, engine) -> None:
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=41, clipped_s=0.034)
    asked(desk, 16.1, -15.2)
    found = verdict(desk, "swing")
    assert found.grade is Grade.LIMITS
    # 16.1 - 14 V; 20 log10(16.1 / 14) = 1.21 dB
    assert found.line == (
        "swing clips 41 times, 34 ms in all, at ±14.0 V: needs 2.10 V more supply or 1.2 dB less gain"
    )


def test_the_lower_side_counts_too(desk, engine) -> None:
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=1, clipped_s=0.001)
    asked(desk, 13.0, -28.0)
    assert verdict(desk, "swing").cure == "needs 14.0 V more supply or 6.0 dB less gain"
    assert "clips once" in verdict(desk, "swing").text


def test_while_the_recording_is_looked_through_the_amount_is_not_guessed(desk, engine) -> None:
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=3, clipped_s=0.001)
    assert verdict(desk, "swing").cure == "more supply or less gain"
    desk.hear_report(ClipMarks("A", 600_000, 270_000, (OpAmpMarks("U1", ()),)))
    assert "how much is known when the recording is looked through (45 %)" in verdict(desk, "swing").cure


def test_a_single_supply_without_bias_is_told_to_rest_between_the_rails(session, engine) -> None:
    desk = Desk(replace(session, supply=Supply(9.0, 0.0)), engine)
    say(desk, engine, peak_v=9.0, headroom_db=0.0, clip_events=500, clipped_s=2.0)
    asked(desk, 8.0, -8.0)
    assert "a bias between the rails" in verdict(desk, "swing").cure


def test_on_a_biased_single_supply_the_gain_is_counted_from_the_bias(session, engine) -> None:
    desk = Desk(replace(session, supply=Supply(9.0, 0.0)), engine)
    desk.figures.now = Figures(rest_v={"out": 4.5})
    say(desk, engine, peak_v=9.0, headroom_db=0.0, clip_events=5, clipped_s=0.1)
    asked(desk, 13.5, 1.0)
    # 9 V about 4.5 V are asked where 4.5 V are there: 6.0 dB
    assert verdict(desk, "swing").cure == "needs 4.50 V more supply or 6.0 dB less gain"


def test_counts_from_before_a_change_are_said_to_be_old(desk, engine) -> None:
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=3, clipped_s=0.001)
    asked(desk, 9.0, -9.0)
    assert "clear the counts" in verdict(desk, "swing").cure


def test_an_op_amp_without_a_limit_is_fine(desk, engine) -> None:
    desk.change(with_opamp_type(desk.session, "perfect")[0])
    assert verdict(desk, "swing").line == "swing has no limit: fine"


# ---- slew, current ----


def test_slew_is_told_against_its_limit(desk, engine) -> None:
    say(desk, engine, slew_peak_v_per_s=1.9e6)
    assert verdict(desk, "slew").line == "slew 1.9 of 13 V/µs: fine"
    say(desk, engine, slew_peak_v_per_s=12e6)
    assert verdict(desk, "slew").grade is Grade.TIGHT


def test_slewing_names_the_rate_that_would_be_enough(desk, engine) -> None:
    say(desk, engine, slew_peak_v_per_s=13e6)
    assert verdict(desk, "slew").grade is Grade.LIMITS
    asked(desk, 1.0, -1.0, slew=26e6)
    # 20 log10(26 / 13) = 6.0 dB
    assert verdict(desk, "slew").line == (
        "slew 13.0 of 13 V/µs, at its limit: a type with 26 V/µs or more, or 6.0 dB less level"
    )


def test_current_is_told_against_its_limit(desk, engine) -> None:
    say(desk, engine, current_peak_a=2.5e-3, current_limit_a=25e-3)
    assert verdict(desk, "current").line == "current 2.50 mA of 25.0 mA: fine"
    say(desk, engine, current_peak_a=25e-3, current_limit_a=25e-3, current_limited_s=0.0012)
    assert verdict(desk, "current").text == "25.0 mA of 25.0 mA, at its limit for 1.2 ms"
    assert "a buffer" in verdict(desk, "current").cure
    say(desk, engine)
    assert not [v for v in verdicts(desk) if v.aspect == "current"], "no limit, no line"


def test_an_input_outside_of_its_range_says_how_often_and_what_helps(desk, engine) -> None:
    say(desk, engine)
    assert verdict(desk, "input range").grade is Grade.FINE
    say(desk, engine, input_range_events=12, input_range_s=0.003)
    found = verdict(desk, "input range")
    assert found.grade is Grade.LIMITS
    assert "left 12 times for 3.0 ms" in found.text
    assert "less signal at its inputs" in found.cure
    desk.change(with_opamp_type(desk.session, "ideal")[0])
    say(desk, engine)
    assert not [v for v in verdicts(desk) if v.aspect in ("input range", "speed", "offset")]


# ---- speed, offset, noise: from the exact circuit ----


def test_speed_offset_and_noise_come_from_the_exact_circuit(desk, engine) -> None:
    desk.figures.now = found = compute_figures(job_of(desk.session, 48e3))
    say(desk, engine, peak_v=5.0, headroom_db=9.0)
    # Direct voltage at the output: 3 mV of offset (the type's) times 1 + R2 / R1 = 11, bias currents aside.
    offset_v = desk.sites()[0].model.offset_v
    assert found.offset_v["out"] == pytest.approx(11.0 * offset_v, rel=0.01)
    assert verdict(desk, "offset").line == "offset 33.0 mV of direct voltage at its output: fine"
    # Of 4 MHz a noise gain of 11 at low frequencies leaves 364 kHz; the corner moves by less than a per cent.
    assert found.speed_db < 0.1
    assert verdict(desk, "speed").grade is Grade.FINE
    assert "20 Hz to 20 kHz" in verdict(desk, "noise").text


def test_a_slow_type_is_told_to_be_slow(desk, engine) -> None:
    stage = desk.session.stage
    desk.change(replace(desk.session, stage=stage.with_part(replace(stage.part("C1"), value=10e-12))))
    desk.change(with_opamp_type(desk.session, "LM741")[0])
    desk.figures.now = found = compute_figures(job_of(desk.session, 48e3))
    # Noise gain 11 leaves 1 MHz / 11 = 91 kHz beside a corner of 159 kHz: 0.2 dB and more at 20 kHz.
    assert found.speed_db > 0.15
    assert verdict(desk, "speed").grade is not Grade.FINE
    assert "gain-bandwidth" in verdict(desk, "speed").cure


def test_noise_is_judged_against_the_loudest_moment(desk, engine) -> None:
    desk.figures.now = Figures(noise_vrms=1e-3)
    desk.take(replace(engine.snapshot, output=LevelReading((1.0,), (math.sqrt(2.0),), (0.5,))))
    assert "60 dB below the loudest" in verdict(desk, "noise").text
    assert verdict(desk, "noise").grade is Grade.TIGHT


# ---- the panel ----


def _lines(desk: Desk, width: int = 80, height: int = 16) -> list[str]:
    return [text_of(r) for r in OpAmpsPanel(desk, Look()).rows(width, height)]


def test_the_worst_comes_first_and_has_a_mark(desk, engine) -> None:
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=2, clipped_s=0.01, slew_peak_v_per_s=1e6)
    lines = _lines(desk)
    assert lines[1].startswith(" U1 TL072")
    assert "output ±14 V" in lines[1]
    assert lines[2].startswith(" ‼ swing clips 2 times")
    assert any(line.startswith(" · slew") for line in lines)


def test_where_space_is_scarce_what_is_fine_goes_first_and_is_counted(desk, engine) -> None:
    desk.figures.now = compute_figures(job_of(desk.session, 48e3))
    say(desk, engine, peak_v=14.0, headroom_db=0.0, clip_events=2, clipped_s=0.01, slew_peak_v_per_s=1e6)
    lines = _lines(desk, 44, 6)
    assert any("‼ swing" in line for line in lines)
    assert "more fine" in lines[1]
    assert not any("slew" in line for line in lines)


def test_limits_that_are_taken_away_are_named(desk) -> None:
    desk.method("opamp_limits")().take("slew")
    assert "without slew" in _lines(desk)[0]


def test_a_stage_without_an_op_amp_says_so(desk) -> None:
    passive = tuple(part for part in desk.session.stage.parts if part.designator != "U1")
    desk.session = replace(desk.session, stage=replace(desk.session.stage, parts=passive))
    assert "no op-amp" in _lines(desk)[1]


@pytest.mark.parametrize("width", [30, 44, 58, 80, 110])
@pytest.mark.parametrize("height", [2, 5, 9, 16])
def test_the_panel_fits(two_opamps, engine, width, height) -> None:
    desk = two_opamps
    desk.change(with_opamp_type(desk.session, "LM358")[0])
    reading = OpAmpReading("U1", 13.0, 13.0, -13.0, 0.0, 7, 0.1, 0.3e6, 0.3e6, 0.02)
    desk.take(replace(engine.snapshot, opamps=(reading, replace(reading, designator="U2"))))
    lines = _lines(desk, width, height)
    assert len(lines) <= height
    assert all(len(line) <= width for line in lines[1:] if not line.startswith(" U")), width


async def test_a_click_on_an_op_amp_selects_it_for_the_type(make_app, session, engine) -> None:
    app: DeskApp = make_app(session=session.with_stage(find_stage("non-inverting-gain")))
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("f4")
        await pilot.pause()
        await pilot.click("#opamps", offset=(2, 1))
        await pilot.pause()
        assert app.desk.view.opamp == "U1"
        await pilot.click("#path", offset=(2, 3))
        await pilot.pause()
        assert app.desk.view.opamp is None, "a second click is for all of them again"


# ---- supply ----


def test_the_usual_supplies_go_round_within_the_range_of_the_type(desk, engine) -> None:
    said = [desk.method("next_supply")() for _ in range(5)]
    # TL072: 36 V at most in all, so ±18 V is taken (data sheet: maximum ratings)
    assert said == ["supply ±18 V", "supply ±5 V", "supply ±9 V", "supply ±12 V", "supply ±15 V"]
    assert isinstance(engine.sent[-1], SetCircuit)
    desk.change(replace(desk.session, supply=Supply(9.0, 0.0)))
    assert desk.method("next_supply")() == "supply +12 V / 0 V"


def test_a_supply_outside_the_range_of_the_type_is_passed_over(session, engine) -> None:
    desk = Desk(replace(session, supply=Supply(2.5, -2.5), full_scale=parse_full_scale("1 V")), engine)
    desk.change(with_opamp_type(desk.session, "MCP6002")[0])  # 6 V at most in all
    assert "no other usual supply suits" in desk.method("next_supply")()
