"""Reading stage files: what is understood, and that every mistake names file, table and key."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from preview.circuit.parts import Expect, OpAmp, PartKind, Stage, Supply, TwoTerminal
from preview.circuit.reader import parse_stage, read_stage
from preview.errors import CircuitError, PartValueError, PreviewError, StageFileError, UnknownNameError

GOOD = """\
title = "Test stage"
about = "Two lines
 are one."
supply = { positive = "15 V", negative = "-12 V" }
drawing = '''

in --R1-- out

'''

[parts]
R1 = { kind = "resistor", nodes = ["in", "sum"], value = "4k7", tolerance = "1 %", series = "E96", role="in" }
C1 = { kind = "capacitor", nodes = ["sum", "out"], value = "2u2", dielectric = "film" }
L1 = { kind = "inductor", nodes = ["sum", "out"], value = "10 mH" }
R2 = { kind = "resistor", nodes = ["sum", "out"], value = 100000 }
U1 = { kind = "opamp", plus = "gnd", minus = "sum", out = "out", type = "ideal", role = "the amplifier" }

[[expect]]
what = "corner_hz"
value = 1591.5
within = "0.1 %"
source = "closed form"
parts = { R1 = "10k", C1 = 1e-9 }

[[expect]]
what = "gain_db_at_31.5_hz"
value = -3
within = "0.05 dB"
source = "closed form"
""".replace('"Two lines\n are one."', '"""Two lines\n are one."""')


def read(text: str) -> Stage:
    return parse_stage(text, name="x", file="stages/x.toml")


def changed(old: str, new: str) -> str:
    assert old in GOOD
    return GOOD.replace(old, new, 1)


def refusal(text: str) -> PreviewError:
    with pytest.raises(PreviewError) as caught:
        read(text)
    assert isinstance(caught.value, CircuitError)
    assert caught.value.exit_code == 5
    assert caught.value.message.startswith("stages/x.toml")
    return caught.value


def test_a_stage_is_read_in_the_order_of_its_file() -> None:
    stage = read(GOOD)
    assert stage.title == "Test stage"
    assert stage.about == "Two lines are one."
    assert stage.supply == Supply(15.0, -12.0)
    assert stage.drawing == "in --R1-- out"
    assert [part.designator for part in stage.parts] == ["R1", "C1", "L1", "R2", "U1"]
    assert stage.part("R1") == TwoTerminal(
        "R1", PartKind.RESISTOR, ("in", "sum"), 4700.0, tolerance_ratio=0.01, series="E96", role="in"
    )
    assert stage.valued[1].value == 2.2e-6
    assert stage.valued[1].dielectric == "film"
    assert stage.valued[2].value == 0.01
    assert stage.valued[3].value == 100_000.0
    assert stage.opamps == (OpAmp("U1", "gnd", "sum", "out", "ideal", role="the amplifier"),)


def test_expected_figures_are_read_with_their_part_values() -> None:
    first, second = read(GOOD).expects
    assert first == Expect(
        "corner_hz", 1591.5, 0.001, absolute=False, source="closed form", parts=(("R1", 1e4), ("C1", 1e-9))
    )
    assert second == Expect("gain_db_at_31.5_hz", -3.0, 0.05, absolute=True, source="closed form")


def test_single_supply_is_read() -> None:
    assert read(changed('"-12 V"', '"0 V"')).supply == Supply(15.0, 0.0)


@pytest.mark.parametrize(
    ("old", "new", "message", "hint"),
    [
        ('"4k7"', '"4z7"', "[parts.R1] value = \"4z7\": no such prefix 'z'", "write 4k7, 4.7k or 4700"),
        ('"4k7"', '"0"', '[parts.R1] value = "0": a resistor must be above zero', "allowed are 1 mΩ to 1 TΩ"),
        ('"4k7"', '"-4k7"', '[parts.R1] value = "-4k7": a resistor must be above zero', ""),
        ('"4k7"', '"2e12"', '[parts.R1] value = "2e12": 2 TΩ is out of range for a resistor', ""),
        ('"4k7"', '"0.5 mΩ"', "[parts.R1] value", "allowed are 1 mΩ to 1 TΩ"),
        ('"4k7"', "nan", "[parts.R1] value = nan: not a finite number", ""),
        ('"4k7"', "true", "[parts.R1] value = true: true or false where a plain number is wanted", ""),
        ('"2u2"', '"11 F"', '[parts.C1] value = "11 F": 11 F is out of range for a capacitor', ""),
        ('"2u2"', '"1e-16"', '[parts.C1] value = "1e-16"', "to 10 F"),
        ('"10 mH"', '"2e3"', '[parts.L1] value = "2e3"', "1 pH to 1 kH"),
        ('"1 %"', '"1"', '[parts.R1] tolerance = "1"', "%"),
        ('"1 %"', '"0 %"', '[parts.R1] tolerance = "0 %": out of range', "above 0 % and below 100 %"),
        (
            '"1 %"',
            "1",
            "[parts.R1] tolerance = 1: a whole number where text in quotation marks is wanted",
            "",
        ),
        ('"E96"', '"E99"', '[parts.R1] series = "E99": no such E series', "E96"),
        ('role="in"', "role = 3", "[parts.R1] role = 3: a whole number", ""),
        ("tolerance", "tolerence", '[parts.R1] "tolerence": no such key', "did you mean tolerance? keys are"),
        ('series = "E96"', 'dielectric = "film"', '[parts.R1] "dielectric": no such key', "keys are"),
        (
            ', value = "4k7"',
            "",
            "[parts.R1]: missing key value",
            'write R1 = { kind = "resistor", nodes = ["in", "out"], value = "10k" }',
        ),
        ('["in", "sum"]', '["in"]', '[parts.R1] nodes = ["in"]: two node names are wanted', ""),
        ('["in", "sum"]', '["in", 3]', '[parts.R1] nodes = ["in", 3]: two node names are wanted', ""),
        ('["in", "sum"]', '"in"', '[parts.R1] nodes = "in": two node names are wanted', ""),
        ('["in", "sum"]', '["in", "in"]', "[parts.R1] nodes", "give it two different nodes"),
        ('["in", "sum"]', '["in", "a b"]', '"a b" is not a node name', "letters, digits and _"),
        ('["in", "sum"]', '["in", ""]', '"" is not a node name', ""),
        ('["in", "sum"]', '["in", "GND"]', "GND could be mistaken for gnd", "write gnd"),
        ('["in", "sum"]', '["in", "source"]', "kept for the source behind its resistance", ""),
        ('["in", "sum"]', '["in", "Sum"]', "[parts]: nodes Sum and sum differ only by case", ""),
        (
            '["in", "sum"]',
            '["a", "sum"]',
            "[parts]: no part is connected to node in",
            "nodes are a, sum, out",
        ),
        ('"resistor"', '"diode"', "[parts.R1] nodes", 'write anode = "sum", cathode = "out"'),
        ('"resistor"', '"resitor"', '[parts.R1] kind = "resitor": no such kind', "did you mean resistor?"),
        ('kind = "resistor", ', "", "[parts.R1]: missing key kind", "write R1 ="),
        ('plus = "gnd"', 'plus = "sum"', '[parts.U1] minus = "sum": plus and minus are the same node', ""),
        (', out = "out"', "", "[parts.U1]: missing key out", "write U1 ="),
        ("R2 =", "R3x =", '[parts] "R3x": not a designator', "such as R1"),
        ("R2 =", "Rload =", "[parts] Rload: the name is kept", ""),
        ("R2 =", "r1 =", "[parts] r1: differs from R1 only by case", "rename one"),
        ("R2 =", "R1 =", "line 15, column", "each line is key = value"),
        ("R1 = {", "R1 = 3 #", "[parts] R1 = 3: a whole number where a table", ""),
        ('"15 V"', '"fifteen"', '[supply] positive = "fifteen": not a number', "15 V"),
        ('"-12 V"', '"15 V"', "[supply]: rails of 15 V and 15 V: the positive rail is not above", ""),
        ('"-12 V"', '"5 V"', "[supply]: rails of 15 V and 5 V: both are on one side of gnd", ""),
        ('"15 V"', '"15 kV"', "beyond 1 kV", ""),
        (', negative = "-12 V"', "", "[supply]: missing key negative", "write supply ="),
        ('title = "Test stage"\n', "", "missing key title", "begin with title"),
        ('"Test stage"', '" "', "empty", "few words"),
        ("about =", "abuot =", '"abuot": no such key', "did you mean about? keys are title, supply, parts"),
        ("in --R1-- out", "-" * 101, "drawing: 101 columns", "100 columns at most"),
        ("in --R1-- out", "R1\n" * 41, "drawing: 41 lines", "40 lines at most"),
        (
            '"corner_hz"',
            '"conrer_hz"',
            '[[expect]] 1 what = "conrer_hz": no such figure',
            "did you mean corner_hz?",
        ),
        ("31.5_hz", "0_hz", "[[expect]] 2 what", "gain_db_at_1000_hz"),
        ("1591.5", '"1591.5"', "[[expect]] 1 value", ""),
        (
            'corner_hz"\nvalue = 1591.5\nwithin = "0.1 %"',
            'q"\nvalue = 0.7\nwithin = "0.1"',
            '[[expect]] 1 within = "0.1": not a percentage',
            "0.1 %",
        ),
        (
            "value = 1591.5",
            'opamp = "TLO72"\nvalue = 1591.5',
            '[[expect]] 1 opamp = "TLO72": no op-amp type',
            "",
        ),
        ("1591.5", "inf", "[[expect]] 1 value = inf: not a finite number", ""),
        ("1591.5", "0.0", "a percentage of 0 leaves no room", "state it in Hz"),
        ('"0.1 %"', '"0 %"', "must be above zero", ""),
        ('"0.05 dB"', '"1 %"', "a percentage of a figure in dB", '"0.1 dB"'),
        ('"0.05 dB"', '"1 Hz"', '[[expect]] 2 within = "1 Hz"', "dB"),
        ('source = "closed form"\nparts', "parts", "[[expect]] 1: missing key source", "write what ="),
        ('{ R1 = "10k"', '{ R9 = "10k"', '[[expect]] 1 parts "R9": no such part', "there are R1, C1, L1, R2"),
        ('{ R1 = "10k"', '{ R1 = "10q"', '[[expect]] 1 parts R1 = "10q": no such prefix', ""),
        ("[[expect]]\nwhat", "[expect]\nwhat", "line 25", ""),
    ],
)
def test_a_mistake_names_file_table_and_key(old: str, new: str, message: str, hint: str) -> None:
    error = refusal(changed(old, new))
    assert message in error.message
    assert hint in error.hint


def test_a_value_out_of_range_is_a_part_value_error() -> None:
    with pytest.raises(PartValueError, match="out of range"):
        read(changed('"4k7"', '"1e15"'))


def test_an_op_amp_type_that_is_not_in_the_library_is_an_unknown_name() -> None:
    with pytest.raises(UnknownNameError, match='type = "TLO72": no op-amp type named TLO72'):
        read(changed('type = "ideal"', 'type = "TLO72"'))


def test_text_from_a_file_cannot_steer_a_terminal() -> None:
    text = changed('"Test stage"', '"a\\u001b[2Jb"').replace("in --R1-- out", "in \u202e R1")
    stage = read(text)
    assert stage.title == "a?[2Jb"
    assert stage.drawing == "in ? R1"
    assert "\x1b" not in str(refusal(changed('"4k7"', '"\\u001b[31m4k7"')))
    assert "\x1b" not in str(refusal(changed("R2 =", '"R\\u001b2" =')))


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "missing keys title, supply, parts"),
        ("title = \n", "line 1, column 9: not valid TOML: invalid value"),
        ('title = "abc', "not valid TOML"),
        ("a = " + "[" * 5000, "tables too deep"),
        ("a = " + "9" * 5000, "a number too long"),
        ('title = "x"\nsupply = 3\nparts = {}', "supply = 3: a whole number where a table"),
        ('title = "x"\nsupply = { positive = "9", negative = "0" }\nparts = {}', "[parts]: no parts"),
    ],
)
def test_text_that_is_no_stage_is_refused(text: str, message: str) -> None:
    assert message in refusal(text).message


def test_too_many_parts_are_refused() -> None:
    many = "".join(
        f'R{n} = {{ kind = "resistor", nodes = ["in", "out"], value = "1k" }}\n' for n in range(3, 210)
    )
    assert "200 at most" in refusal(changed("U1 = {", many + "U1 = {")).hint


def test_a_file_is_named_by_its_stem(tmp_path: Path) -> None:
    path = tmp_path / "my-stage.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.encode())
    stage = read_stage(path)
    assert (stage.name, stage.path) == ("my-stage", path)


def test_files_that_cannot_be_read_say_why(tmp_path: Path) -> None:
    with pytest.raises(StageFileError, match=r"none\.toml: no such file"):
        read_stage(tmp_path / "none.toml")
    with pytest.raises(StageFileError, match="is a folder") as caught:
        read_stage(tmp_path)
    assert caught.value.message == f"{tmp_path}: is a folder"
    with pytest.raises(StageFileError, match="cannot be read"):
        read_stage(tmp_path / ("x" * 300 + ".toml"))
    with pytest.raises(StageFileError, match="cannot be read"):
        read_stage(Path("nul\0.toml"))
    latin = tmp_path / "latin.toml"
    latin.write_bytes(b"title = 'x'\nabout = 'caf\xe9'\n")
    with pytest.raises(StageFileError, match=r"latin.toml line 2: byte 0xe9 is not UTF-8 text"):
        read_stage(latin)
    huge = tmp_path / "huge.toml"
    huge.write_bytes(b"#" * 1_000_001)
    with pytest.raises(StageFileError, match="longer than 1 MB"):
        read_stage(huge)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="named pipes are a thing of POSIX systems")
def test_a_named_pipe_is_refused_and_not_waited_for(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe.toml"
    os.mkfifo(pipe)
    with pytest.raises(StageFileError, match="not a regular file"):
        read_stage(pipe)
