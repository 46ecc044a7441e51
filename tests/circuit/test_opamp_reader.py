"""Reading op-amp files: what is understood, and what each mistake is answered with."""

from __future__ import annotations

import random
from pathlib import Path

import pytest

from preview.circuit.opamp_builder import swing_points
from preview.circuit.opamp_library import opamp_names
from preview.circuit.opamp_reader import parse_opamp, read_opamp
from preview.circuit.opamp_sheet import OpAmpSheet
from preview.circuit.opamp_units import Unit, format_figure, parse_figure_value
from preview.errors import NotationError, OpAmpFileError, PreviewError

GOOD = """
title = "Test part"
class = "bipolar"
about = "For the test."

[figures]
gain_bandwidth = { value = "10 MHz", source = "sheet p. 1", found = "read" }
open_loop_gain = { value = "200 V/mV", source = "sheet p. 1", found = "memory" }
slew_up = { value = "5 V/us", source = "sheet p. 2", found = "read" }
slew_down = { value = "4000 V/ms", source = "sheet p. 2", found = "read" }
current_source = { value = "30 mA", source = "sheet p. 2", found = "read" }
current_sink = { value = "15 mA", cond = "hot", source = "sheet p. 3", found = "memory" }
bias = { value = "-100 nA", source = "sheet p. 2", found = "read" }
noise_voltage = { value = "10 nV/rtHz", at = "1 kHz", source = "sheet p. 2", found = "read" }
noise_voltage_corner = { value = "3 kHz", source = "sheet p. 2", found = "read" }

[[swing]]
load = "2 kohm"
high = "2 V"
low = "1 V"
source = "sheet p. 2"
found = "read"

[[swing]]
load = "10 kohm"
high = "1.5 V"
source = "sheet p. 2"
found = "read"
"""


def read(text: str) -> OpAmpSheet:
    return parse_opamp(text, name="TEST1", file="opamps/test.toml")


def test_a_whole_file_becomes_a_model() -> None:
    model = read(GOOD).model
    assert (model.type, model.title) == ("TEST1", "Test part")
    assert model.gain_bandwidth_hz == 10e6
    assert model.open_loop_gain == 200e3
    assert (model.slew_up_v_per_s, model.slew_down_v_per_s) == (5e6, 4e6)
    assert (model.current_source_a, model.current_sink_a) == (0.03, 0.015)
    assert model.current_limit_a == 0.015
    assert model.bias_a == -100e-9
    assert model.offset_current_a == pytest.approx(10e-9)  # a tenth, as its class has it
    assert model.noise_v_rthz == pytest.approx(5e-9)  # 10 nV at 1 kHz with a corner of 3 kHz: half is white
    sources = dict(model.sources)
    assert sources["current_sink_a"] == "sheet p. 3; hot (from memory)"
    assert sources["gain_bandwidth_hz"] == "sheet p. 1 (read)"
    assert "output_resistance_ohm" in model.assumed
    assert "bias_a" not in model.assumed


def test_the_swing_is_that_into_the_lightest_load_each_way() -> None:
    sheet = read(GOOD)
    assert (sheet.model.swing_high_v, sheet.model.swing_low_v) == (1.5, 1.0)
    assert [swing.load_ohm for swing in sheet.swings] == [10e3, 2e3]
    assert (
        dict(sheet.model.sources)["swing_low_v"] == "into 2 kΩ on 15 V and -15 V assumed: sheet p. 2 (read)"
    )


def test_the_swing_shrinks_with_the_current_that_the_loads_of_the_test_draw() -> None:
    model = read(GOOD).model
    assert model.swing_high_points == (
        (0.0, 1.5),
        (pytest.approx(13.5 / 10e3), 1.5),
        (pytest.approx(13.0 / 2e3), 2.0),
    )
    assert model.swing_low_points == ()  # one row alone states it


def test_the_supply_of_the_test_makes_its_currents() -> None:
    row = 'load = "10 kohm"\nsupply = "30"\nhigh'
    sheet = read(GOOD.replace('load = "10 kohm"\nhigh', row))
    assert sheet.swings[0].source_a == pytest.approx(28.5 / 10e3)
    assert sheet.swings[0].sink_a == 0.0  # a load to gnd draws nothing down to the negative rail
    assert sheet.swings[0].origin == "into 10 kΩ on 30 V and 0 V: sheet p. 2 (read)"
    single = GOOD.replace('class = "bipolar"', 'class = "single-supply"')
    assert read(single).swings[0].source_a == pytest.approx(3.5 / 10e3)  # 5 V and 0 V unless stated


def test_a_swing_can_be_stated_at_a_current() -> None:
    model = read(GOOD.replace('load = "2 kohm"', 'current = "8 mA"')).model
    assert model.swing_high_points[-1] == (0.008, 2.0)
    assert dict(model.sources)["swing_low_v"] == "at 8 mA: sheet p. 2 (read)"


@pytest.mark.parametrize(
    ("stated", "line"),
    [
        ([(1e-3, 1.0), (5e-3, 2.0)], ((0.0, 1.0), (1e-3, 1.0), (5e-3, 2.0))),
        ([(0.0, 1.0), (5e-3, 2.0)], ((0.0, 1.0), (5e-3, 2.0))),
        ([(5e-3, 2.0), (0.0, 1.0), (2e-3, 1.9)], ((0.0, 1.0), (5e-3, 2.0))),  # grows slower: bent straight
        ([(1e-3, 1.0), (5e-3, 0.8)], ()),  # falls: taken as constant
        ([(1e-3, 1.0), (5e-3, 0.8), (9e-3, 2.0)], ((0.0, 1.0), (1e-3, 1.0), (5e-3, 1.0), (9e-3, 2.0))),
        ([(1e-3, 1.0), (1e-3, 1.5), (2e-3, 2.5)], ((0.0, 1.5), (1e-3, 1.5), (2e-3, 2.5))),
        ([(1e-3, 1.0)], ()),
    ],
)
def test_the_loss_of_swing_is_a_line_that_never_bends_down(
    stated: list[tuple[float, float]], line: tuple[tuple[float, float], ...]
) -> None:
    assert swing_points(stated) == line


def test_further_figures_are_read() -> None:
    extra = "\n".join(
        f'{key} = {{ value = "{value}", source = "sheet p. 3", found = "memory" }}'
        for key, value in (
            ("phase_margin", "55 deg"),
            ("input_capacitance", "5 pF"),
            ("input_differential_capacitance", "2 pF"),
            ("overdrive", "reverses"),
            ("crossover", "1.8 V"),
            ("crossover_current", "50 uA"),
        )
    )
    model = read(GOOD.replace("[figures]", f"[figures]\n{extra}")).model
    assert model.phase_margin_deg == 55.0
    assert (model.input_farad, model.input_differential_farad) == (5e-12, 2e-12)
    assert model.input_overdrive == "reverses"
    assert (model.crossover_v, model.crossover_a) == (1.8, 50e-6)
    plain = read(GOOD).model
    assert (plain.input_overdrive, plain.crossover_v, plain.phase_margin_deg) == ("clips", 0.0, 60.0)
    assert {"input_overdrive", "crossover_v", "phase_margin_deg", "input_farad"} < set(plain.assumed)


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("13 V/us", "slew", 13e6),
        ("0.5 V/µs", "slew", 0.5e6),
        ("500 mV/us", "slew", 0.5e6),
        ("200 V/mV", "gain", 2e5),
        ("1 V/uV", "gain", 1e6),
        ("106 dB", "gain", 10 ** (106 / 20)),
        ("18 nV/rtHz", "noise_voltage", 18e-9),
        ("18 nV/√Hz", "noise_voltage", 18e-9),
        ("0.01 pA/rtHz", "noise_current", 1e-14),
        ("4 MHz", "frequency", 4e6),
        ("0 Hz", "frequency", 0.0),
        ("75 ohm", "resistance", 75.0),
        ("0 ohm", "resistance", 0.0),
        ("-0.3 V", "voltage", -0.3),
        ("30 pA", "current", 30e-12),
    ],
)
def test_values_are_read_with_their_units(text: str, unit: Unit, value: float) -> None:
    assert parse_figure_value(text, unit) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("13", "slew"), ("13 V", "slew"), ("13 A/us", "slew"), ("13 V/h", "slew"), ("13 V/us/us", "slew"),
        ("200", "gain"), ("200 V", "gain"), ("18 nV", "noise_voltage"), ("18 pA/rtHz", "noise_voltage"),
        ("18 nV/Hz", "noise_voltage"), ("4 M", "frequency"), ("3", "voltage"), ("3 A", "voltage"),
        ("75", "resistance"), ("nan V", "voltage"), ("1,5 V", "voltage"), ("", "voltage"),
    ],
)  # fmt: skip
def test_a_value_without_its_unit_is_refused(text: str, unit: Unit) -> None:
    with pytest.raises(NotationError) as caught:
        parse_figure_value(text, unit)
    assert caught.value.message.startswith(f'"{text}": ')
    assert caught.value.hint


def test_figures_are_written_as_data_sheets_write_them() -> None:
    assert format_figure(13e6, "slew") == "13 V/µs"
    assert format_figure(1e5, "gain") == "100 dB"
    assert format_figure(18e-9, "noise_voltage") == "18 nV/√Hz"
    assert format_figure(1e-14, "noise_current") == "10 fA/√Hz"
    assert format_figure(0.0, "noise_current") == "0 fA/√Hz"


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('title = "Test part"', "", "missing key title"),
        ('title = "Test part"', 'title = ""', 'title = "": empty'),
        ('class = "bipolar"', 'class = "valve"', 'class = "valve": no such class of op-amp'),
        ("slew_up =", "slewup =", '"slewup": no such key'),
        ("slew_down =", "slew =", "slew and slew_up both given"),
        ("current_sink =", "current_limit =", "current_limit and current_source both given"),
        ("current_source =", "offset_current =", "current_sink without current_source"),
        ('"10 MHz"', "10e6", "a number where text in quotation marks is wanted"),
        ('"10 MHz"', '"10 mHz"', '[figures.gain_bandwidth] value = "10 mHz": out of range'),
        ('"10 MHz"', '"10 V"', '"10 V": no unit'),
        ('"5 V/us"', '"5 V/s"', 'value = "5 V/s": out of range'),
        ('"-100 nA"', '"-100 A"', 'value = "-100 A": out of range'),
        ('found = "memory"', 'found = "guess"', 'found = "guess": neither read nor memory'),
        ('source = "sheet p. 1", ', "", "missing key source"),
        ('load = "2 kohm"', 'load = "0 ohm"', '[[swing]] 1 load = "0 ohm": out of range'),
        ('load = "2 kohm"\n', "", "[[swing]] 1: either load or current is wanted"),
        ('load = "2 kohm"', 'load = "2 kohm"\ncurrent = "1 mA"', "[[swing]] 1: either load or current"),
        ('load = "2 kohm"', 'load = "2 kohm"\nsupply = "fifteen"', '[[swing]] 1 supply = "fifteen"'),
        ('load = "2 kohm"', 'load = "2 kohm"\nsupply = "3"', "nothing is left of 3 V and 0 V"),
        (
            "slew_up =",
            'overdrive = { value = "flips", source = "x", found = "read" }\nslew_up =',
            "no such behaviour",
        ),
        ("slew_up =", 'phase_margin = { value = "60", source = "x", found = "read" }\nslew_up =', "no unit"),
        (
            "slew_up =",
            'crossover = { value = "9 V", source = "x", found = "read" }\nslew_up =',
            "out of range",
        ),
        ('high = "1.5 V"\n', "", "[[swing]] 2: missing keys high, low"),
        ('high = "1.5 V"', 'hi = "1.5 V"', '"hi": no such key'),
        ("[figures]", "[figure]", "no such key"),
        ("[[swing]]", "[[swing]", "not valid TOML"),
        ("gain_bandwidth =", "supply_max =", "missing key gain_bandwidth"),
    ],
)
def test_each_mistake_names_file_table_and_key(old: str, new: str, message: str) -> None:
    assert old in GOOD
    with pytest.raises(OpAmpFileError) as caught:
        read(GOOD.replace(old, new, 1))
    assert caught.value.message.startswith("opamps/test.toml")
    assert message in caught.value.message
    assert caught.value.exit_code == 5


def test_a_smallest_supply_above_the_largest_is_refused() -> None:
    extra = 'supply_min = { value = "40 V", source = "sheet", found = "read" }\n\n[[swing]]'
    with pytest.raises(OpAmpFileError, match="smallest supply 40 V, largest 36 V"):
        read(GOOD.replace("\n[[swing]]", extra, 1))


def test_text_from_a_file_cannot_steer_a_terminal() -> None:
    sheet = read(GOOD.replace("Test part", "a\\u001b[2Jb").replace("sheet p. 1", "s\\u202e"))
    assert sheet.model.title == "a?[2Jb"
    assert "\u202e" not in str(sheet)


@pytest.mark.parametrize("data", [b"\xff\xfe", b"title = ", b"\x00" * 10, b"a" * 1_000_001])
def test_a_file_that_is_no_text_is_refused(data: bytes, tmp_path: Path) -> None:
    path = tmp_path / "bad.toml"
    path.write_bytes(data)
    with pytest.raises(OpAmpFileError):
        read_opamp(path)
    with pytest.raises(OpAmpFileError, match="is a folder"):
        read_opamp(tmp_path)


def test_mutated_files_give_an_error_or_a_sound_model() -> None:
    rng = random.Random(3)
    folder = Path(__file__).parents[2] / "preview" / "opamps"
    texts = [(folder / f"{name}.toml").read_text("utf-8") for name in opamp_names()[2:6]]
    pieces = [
        '"',
        "=",
        "{",
        "}",
        "[",
        "]",
        "-",
        "0",
        "9e99",
        "nan",
        " V",
        "kohm",
        "\n",
        "slew",
        "\x1b",
        "\N{OHM SIGN}",
    ]
    refused = 0
    for _ in range(400):
        text = rng.choice(texts)
        for _ in range(rng.randint(1, 3)):
            at = rng.randrange(len(text))
            text = text[:at] + rng.choice(pieces) + text[at + rng.randint(0, 4) :]
        outcome = attempt(text)
        if isinstance(outcome, PreviewError):
            refused += 1
            assert outcome.exit_code == 5
            assert str(outcome).isprintable()
        else:
            assert outcome.model.real
            assert outcome.model.slew_up_v_per_s > 0
    assert 100 < refused < 400


def attempt(text: str) -> OpAmpSheet | PreviewError:
    try:
        return parse_opamp(text, name="x", file="x.toml")
    except PreviewError as error:
        return error
