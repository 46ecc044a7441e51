"""Passband in words, as drawn against as driven, and stages in their places."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from preview.analysis.answers import Answers, answers
from preview.analysis.passband import passband
from preview.circuit.cascade import cascade
from preview.circuit.drive import parse_load, parse_source
from preview.circuit.library import find_stage, open_stages, with_overrides
from preview.circuit.netlist import netlist
from preview.circuit.parts import OpAmp, Part, PartKind, Stage, Supply, TwoTerminal
from preview.engine.jsontext import json_text
from preview.network.transfer import response
from preview.session import Session
from preview.values.levels import parse_full_scale
from tests.circuit.test_cascade import low_pass
from tests.nets import ALL, HIGH_PASS, LOW_PASS, net


def made(*parts: Part) -> Stage:
    return Stage("made", "Made", "", Supply(15.0, -15.0), parts)


def asked(stage: Stage, frequency_hz: list[float], source: str = "none", load: str = "none") -> Answers:
    session = Session(
        audio=Path("x.wav"),
        stage=stage,
        supply=stage.supply,
        full_scale=parse_full_scale("5 V"),
        source=parse_source(source),
        load=parse_load(load),
    )
    return answers(session, frequency_hz)


def test_the_passband_is_said_in_db_as_a_factor_and_with_its_sign() -> None:
    low = passband(LOW_PASS)
    assert low.gain == pytest.approx(-10.0)
    assert low.said() == "20.00 dB, x 10, inverting"
    assert passband(HIGH_PASS).gain == pytest.approx(-10.0)
    assert passband(ALL["sallen-key"]).said() == "0.00 dB, x 1, non-inverting"
    # two inverting sections do not invert: the sign is that of the middle of the band
    assert passband(ALL["two-sections"]).polarity == "non-inverting"


def test_a_resonance_is_no_change_of_sign() -> None:
    # series R-L-C of Q 31.6: the largest gain is at resonance, at -90 degrees; far below the gain is +1
    circuit = net([("R1", "in", "a", 10.0), ("L1", "a", "out", 10e-3), ("C1", "out", "gnd", 100e-9)], [])
    found = passband(circuit)
    assert found.gain_db == pytest.approx(30.0, abs=0.01)
    assert abs(found.phase_deg) == pytest.approx(90.0, abs=2.0)
    assert found.polarity == "turning"
    assert found.said() == f"30.00 dB, x 31.63, phase {found.phase_deg:.0f} deg at 5.03 kHz"


def test_an_all_pass_turns_the_sign_over_its_passband() -> None:
    for kind in ("ideal", "TL072"):
        found = passband(netlist(with_overrides(find_stage("all-pass"), {}, {None: kind})[0]))
        assert found.gain == pytest.approx(1.0, abs=1e-3)
        assert found.polarity == "turning"


@pytest.mark.parametrize(
    "name", ["sallen-key-high-pass", "rc-high-pass", "tone-control", "multiple-feedback-high-pass"]
)
def test_a_crest_that_the_op_amp_adds_in_the_megahertz_is_not_the_passband(name: str) -> None:
    stage = find_stage(name)
    ideal = passband(netlist(with_overrides(stage, {}, {None: "ideal"})[0]))
    real = passband(netlist(stage))
    crest_db = 20 * np.log10(np.abs(response(netlist(stage), np.geomspace(1e5, 1e8, 400))).max())
    assert crest_db > ideal.gain_db + 0.25
    assert real.gain_db == pytest.approx(ideal.gain_db, abs=0.02)
    assert real.polarity == ideal.polarity


def test_a_high_pass_has_its_gain_at_the_end_of_its_rise() -> None:
    # a corner of 20 kHz: at 100 kHz the gain is still 0.17 dB below what it comes to
    circuit = net([("C1", "in", "out", 1e-9), ("R1", "out", "gnd", 7957.747)], [])
    found = passband(circuit)
    assert found.gain_db == pytest.approx(0.0, abs=1e-4)
    assert found.corners_hz == pytest.approx((20e3,), rel=1e-4)
    wide = net([("C1", "in", "out", 10e-12), ("R1", "out", "gnd", 7957.747)], [])
    assert passband(wide).corners_hz == pytest.approx((2e6,), rel=1e-3)


def test_a_gain_without_a_corner_has_a_sign_too() -> None:
    follower = net([("R1", "in", "s", 1e3), ("R2", "s", "out", 5e3)], [("gnd", "s", "out")])
    assert passband(follower).gain == pytest.approx(-5.0)


def test_as_drawn_stands_beside_as_driven_and_loaded() -> None:
    # 47 ohm into 1 uF: 3386.28 Hz as drawn; 430 ohm before it: 333.66 Hz; nothing lost at 0 Hz
    found = asked(low_pass(47.0, 1e-6), [1.0, 1000.0], source="430")
    assert found.drawn is not None
    assert found.drawn.corners_hz == pytest.approx((3386.28,), abs=0.005)
    assert found.driven.corners_hz == pytest.approx((333.66,), abs=0.005)
    report = found.as_object()["as_drawn"]
    assert isinstance(report, dict)
    x = 2 * np.pi * 1000.0 * 1e-6
    change_db = 10 * np.log10((1 + (47 * x) ** 2) / (1 + (477 * x) ** 2))
    assert report["gain_change_db"] == pytest.approx([0.0, change_db], abs=1e-3)
    assert report["passband_gain_change_db"] == pytest.approx(0.0, abs=1e-6)
    lines = "\n".join(found.as_lines())
    for words in ("as drawn", "driven, loaded", "3.386 kHz", "333.7 Hz", "-90.15 %", f"{change_db:+.2f} dB"):
        assert words in lines
    assert set(found.columns) == {"drawn_gain_db", "drawn_phase_deg"}


def test_without_source_and_load_there_is_nothing_to_compare() -> None:
    found = asked(low_pass(), [1000.0])
    assert found.drawn is None
    assert found.columns == {}
    assert found.as_object()["as_drawn"] is None
    assert "as drawn" not in "\n".join(found.as_lines())


def test_a_stage_that_needs_its_load_is_not_compared() -> None:
    found = asked(
        made(
            TwoTerminal("R1", PartKind.RESISTOR, ("in", "a"), 100.0),
            TwoTerminal("C1", PartKind.CAPACITOR, ("a", "out"), 1e-6),
        ),
        [1000.0],
        load="10k",
    )
    assert found.drawn is None
    assert found.driven.corners_hz == pytest.approx((1 / (2 * np.pi * 10.1e3 * 1e-6),), rel=1e-6)


def test_each_stage_of_a_cascade_is_told_what_the_next_takes_from_it() -> None:
    f0 = 1 / (2 * np.pi * 1e-5)
    found = asked(cascade([low_pass(), low_pass()]), [f0])
    first, last = found.stages
    # at x = j: alone 1 / (1 + j); in place (1 + x) / (1 + 3 x + x^2) = (1 + j) / 3j
    assert first.alone_db[0] == pytest.approx(-10 * np.log10(2))
    assert first.gain_db[0] == pytest.approx(20 * np.log10(np.sqrt(2) / 3))
    assert last.gain_db[0] == pytest.approx(last.alone_db[0])
    assert (first.output, last.output) == ("1.out", "out")
    assert "the next changes -3.52 dB at 15.92 kHz" in "\n".join(found.as_lines())
    rows = found.as_object()["stages"]
    assert isinstance(rows, list)
    assert rows[0]["loading_db"] == pytest.approx([20 * np.log10(2 / 3)])


def test_parts_changed_in_a_cascade_are_changed_in_the_stage_alone() -> None:
    stage = with_overrides(
        open_stages(["inverting-low-pass", "inverting-low-pass"]), {"2.R2": "10k"}, {"1.U1": "LM358"}
    )[0]
    found = asked(stage, [100.0])
    assert [round(float(s.alone_db[0]), 1) for s in found.stages] == [20.0, 0.0]
    assert all(abs(s.gain_db[0] - s.alone_db[0]) < 0.01 for s in found.stages)


def test_poles_zeros_and_the_step_are_in_the_report() -> None:
    found = asked(find_stage("inverting-high-pass"), [1000.0])
    report = json.loads(json_text(found.as_object()))
    assert report["passband_gain"] == pytest.approx(-10.0, rel=1e-6)
    assert report["passband_polarity"] == "inverting"
    assert report["poles"] == [
        {"f0_hz": pytest.approx(159.1549, rel=1e-6), "q": None, "order": 1, "right_half_plane": False}
    ]
    assert [zero["f0_hz"] for zero in report["zeros"]] == [0.0]
    assert report["step"]["of"] == "peak"
    assert report["step"]["overshoot_percent"] is None
    assert report["step"]["settling_1_percent_s"] == pytest.approx(1e-3 * np.log(100), rel=1e-6)


def test_a_gain_that_rises_without_end_is_answered_as_far_as_it_goes() -> None:
    differentiator = made(
        TwoTerminal("C1", PartKind.CAPACITOR, ("in", "s"), 10e-9),
        TwoTerminal("R1", PartKind.RESISTOR, ("s", "out"), 10e3),
        OpAmp("U1", "gnd", "s", "out", "ideal"),
    )
    found = asked(differentiator, [1000.0])
    assert (found.poles, found.zeros, found.step) == (None, None, None)
    assert "the gain rises without end" in "\n".join(found.as_lines())
