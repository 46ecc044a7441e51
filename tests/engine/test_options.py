"""The stage options: what is understood, what is refused."""

from __future__ import annotations

import argparse

import pytest

from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD, LoadModel, SourceModel
from preview.circuit.library import stage_source
from preview.circuit.parts import Supply
from preview.engine.options import add_stage_options, join_signed_values, session_from, understood_values
from preview.errors import NotationError, PartValueError, UnknownNameError, UsageError
from preview.values.quality import Quality

CASCADE = ("--stage", "inverting-high-pass", "--stage", "inverting-low-pass")


def session(*words: str, comment: str = ""):
    parser = argparse.ArgumentParser()
    add_stage_options(parser)
    return session_from(parser.parse_args(join_signed_values(words)), comment=comment)


def test_without_options_it_is_the_default_stage_as_drawn_at_18_dbu():
    plain = session()
    assert plain.stage.name == "inverting-low-pass"
    assert (plain.supply.positive_v, plain.supply.negative_v) == (15.0, -15.0)
    assert (plain.source, plain.load) == (IDEAL_SOURCE, NO_LOAD)
    assert plain.quality is Quality.STANDARD
    # EBU R 68: 0 dBFS at +18 dBu, a sine of 0.7746 V x 10^(18/20) rms, 8.70 V peak
    assert plain.full_scale.volts == pytest.approx(8.70, abs=0.005)


def test_each_option_is_taken_and_said():
    given = session(
        *("--stage", "inverting-high-pass", "--part", "R1=4k7", "--opamp", "U1=perfect"),
        *("--supply", "-12 12", "--source", "600", "--load", "10k", "--full-scale", "2 Vrms"),
        *("--quality", "fine"),
    )
    assert given.stage.part("R1").value == 4700.0
    assert given.stage.opamps[0].type == "perfect"
    assert (given.supply.positive_v, given.supply.negative_v) == (12.0, -12.0)
    assert (given.source, given.load) == (SourceModel(600.0), LoadModel(10e3))
    assert given.quality is Quality.FINE
    said = "\n".join(given.notes)
    for words in ("4.7 kΩ", "600 Ω", "10 kΩ", "2 Vrms", "12.0 V and -12.0 V"):
        assert words in said


def test_several_stages_are_a_cascade_whose_parts_have_numbers():
    given = session(*CASCADE, "--part", "2.R1=4k7", "--opamp", "1.U1=perfect")
    values = {part.designator: part.value for part in given.stage.valued}
    assert (values["1.R1"], values["2.R1"]) == (10e3, 4700.0)
    assert [opamp.type for opamp in given.stage.opamps] == ["perfect", "ideal"]
    assert given.notes[:2] == (
        "stage 1, inverting-high-pass: Inverting high-pass",
        "stage 2, inverting-low-pass: Inverting low-pass",
    )
    assert given.warnings == ()
    assert understood_values(given)["stages"] == ["inverting-high-pass", "inverting-low-pass"]


def test_stages_drawn_with_different_supplies_run_on_the_first_and_a_warning_says_so(tmp_path):
    single = tmp_path / "single.toml"
    single.write_text(
        stage_source("inverting-low-pass").replace('"15 V"', '"9 V"').replace('"-15 V"', '"0 V"')
    )
    words = ("--stage", "inverting-high-pass", "--stage", str(single))
    given = session(*words)
    assert given.supply == Supply(15.0, -15.0)
    assert given.warnings == (
        "the stages are drawn with different supplies (1 with 15 V and -15 V, 2 with 9 V and 0 V): "
        "all run on the first's",
    )
    assert session(*words, "--supply", "12 -12").warnings == ()


@pytest.mark.parametrize(
    ("words", "volts"),
    [
        (["--full-scale", "-10 dBV"], 0.447),
        (["--full-scale", "-10dBV"], 0.447),
        (["--full-scale=-10 dBV"], 0.447),
        (["--full-scale", "+18 dBu"], 8.701),
    ],
)
def test_a_level_with_a_minus_sign_is_a_level_and_no_option(words, volts):
    assert session(*words).full_scale.volts == pytest.approx(volts, abs=0.001)


def test_words_after_a_double_dash_are_left_alone():
    assert join_signed_values(["--supply", "-9 9", "--", "--supply", "-5"]) == [
        "--supply=-9 9",
        "--",
        "--supply",
        "-5",
    ]


def test_a_full_scale_in_the_files_comment_holds_unless_an_option_gives_one():
    assert session(comment="full scale 15 V; preview 0.1.0").full_scale.volts == 15.0
    assert session("--full-scale", "5 V", comment="full scale 15 V").full_scale.volts == 5.0
    assert "from the file's comment" in session(comment="full scale 15 V").notes[-1]


def test_the_same_value_given_twice_is_no_conflict():
    assert session("--part", "R1=4k7", "--part", "R1=4k7").stage.part("R1").value == 4700.0


TONE = """
title = "Tone"
supply = { positive = "9 V", negative = "0 V" }
outputs = ["w"]
[parts]
R1 = { kind = "resistor", nodes = ["in", "out"], value = "4k7" }
P1 = { kind = "potentiometer", ends = ["gnd", "out"], wiper = "w", value = "10k", taper = "log" }
R2 = { kind = "resistor", nodes = ["w", "bias"], value = "100k" }
S1 = { kind = "switch", nodes = ["w", "gnd"], closed = true }
D1 = { kind = "diode", anode = "w", cathode = "gnd", type = "signal" }
V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V" }
"""


@pytest.fixture
def tone(tmp_path):
    """A stage with a potentiometer, a switch, a bias and a second output."""
    path = tmp_path / "tone.toml"
    path.write_text(TONE, "utf-8")
    return ("--stage", str(path))


@pytest.mark.parametrize("written", ["0.7", "70%", "70 %", ".7"])
def test_a_potentiometer_a_switch_and_a_bias_are_set_like_parts(tone, written):
    given = session(
        *tone, "--part", f"p1={written}", "--part", "S1=OPEN", "--part", "V1=-2 V", "--output", "w"
    )
    assert given.netlist().values == {"R1": 4700.0, "P1": pytest.approx(0.7), "R2": 1e5, "S1": 0.0}
    assert given.netlist().fixed[0].volts == -2.0
    assert given.netlist().output_node == given.output == "w"
    assert understood_values(given)["parts"] == given.netlist().values
    said = "\n".join(given.notes)
    for words in ("P1: 70 % of the turn, log", "S1: open", "V1: -2 V", "output w"):
        assert words in said


@pytest.mark.parametrize(
    ("words", "error", "match"),
    [
        (["--part", "P1=7"], PartValueError, 'P1 = "7": beyond the ends of the track'),
        (["--part", "P1=-10%"], PartValueError, "0 % to 100 %"),
        (["--part", "P1=10k"], NotationError, "not a position"),
        (["--part", "S1=1"], NotationError, "write open or closed"),
        (["--part", "D1=signal"], UnknownNameError, "is a diode and has no value"),
        (["--part", "V1=5 kV"], PartValueError, "out of range for a voltage"),
        (["--output", "bias"], UnknownNameError, "outputs are out, w"),
    ],
)
def test_settings_that_cannot_be_are_refused_with_a_reason(tone, words, error, match):
    with pytest.raises(error) as caught:
        session(*tone, *words)
    assert match in str(caught.value)


def test_the_output_is_kept_only_by_a_stage_that_has_it(tone):
    given = session(*tone, "--output", "w")
    assert given.with_stage(given.stage).output == "w"
    assert given.with_stage(session().stage).output == "out"


@pytest.mark.parametrize(
    ("words", "error", "match"),
    [
        (["--part", "R1=4k7", "--part", "R1=10k"], UsageError, "R1 two values"),
        (["--part", "R1=4k7", "--part", "r1=10k"], UsageError, "R1 two values"),
        (["--part", "R1"], UsageError, "no part and value"),
        (["--part", "R1="], UsageError, "no part and value"),
        (["--part", "R1=4z7"], NotationError, "4z7"),
        (["--part", "R9=4k7"], UnknownNameError, "R9"),
        (["--part", "R1=0"], PartValueError, "R1"),
        (["--opamp", "U1="], UsageError, "no op-amp type"),
        (["--opamp", "ideal", "--opamp", "perfect"], UsageError, "two types"),
        (["--opamp", "U1=ideal", "--opamp", "u1=perfect"], UsageError, "two types"),
        (["--opamp", "warp"], UnknownNameError, "warp"),
        (["--stage", "nope"], UnknownNameError, "nope"),
        (["--stage", ""], UnknownNameError, "name is empty"),
        (["--stage", "inverting-low-pass", "--stage", "nope"], UnknownNameError, "nope"),
        ([*CASCADE, "--part", "R1=4k7"], UnknownNameError, "did you mean 1.R1 or 2.R1"),
        ([*CASCADE, "--part", "3.R1=4k7"], UnknownNameError, "has no part 3.R1"),
        (["--supply", "fifteen"], NotationError, "--supply"),
        (["--source", "-600"], NotationError, "--source"),
        (["--load", "0"], NotationError, "--load"),
        (["--full-scale", "18"], NotationError, "--full-scale"),
        (["--quality", "best"], UsageError, "draft, standard, fine"),
    ],
)
def test_what_is_not_understood_is_refused_with_a_reason(words, error, match):
    with pytest.raises(error) as caught:
        session(*words)
    assert match in str(caught.value)
