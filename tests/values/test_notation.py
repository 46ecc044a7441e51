"""Values as text: IEC 60062 codes, engineering notation, and what is refused."""

from __future__ import annotations

import math
import tomllib
from decimal import Decimal
from pathlib import Path
from typing import Any, get_args

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from preview.errors import NotationError, UsageError, printable
from preview.values.notation import Kind, format_code, format_value, parse_value, understood
from preview.values.units import KINDS, TOLERANCE_LETTERS

PUBLISHED: dict[str, Any] = tomllib.loads(
    (Path(__file__).parents[1] / "published" / "rkm.toml").read_text(encoding="utf-8")
)
KIND_OF_LETTER: dict[str, Kind] = {"R": "resistance", "C": "capacitance"}
CODED: tuple[Kind, ...] = ("resistance", "capacitance", "inductance")


@pytest.mark.parametrize("row", PUBLISHED["rkm"], ids=lambda row: f"{row['kind']} {row['code']}")
def test_iec_60062_codes_read_as_the_exact_value(row: dict[str, Any]) -> None:
    # IEC 60062:2016, examples; source and found stand in the row.
    assert parse_value(row["code"], KIND_OF_LETTER[row["kind"]]) == row["value"]


def test_tolerance_letters_are_those_of_iec_60062() -> None:
    # IEC 60062:2016 clause 5, symmetrical letters (from memory, see the rows).
    symmetrical = {
        row["letter"]: row["plus_percent"]
        for row in PUBLISHED["tolerance"]
        if row["plus_percent"] == row["minus_percent"]
    }
    assert {key: parse_value(text, "percent") for key, text in TOLERANCE_LETTERS.items()} == symmetrical


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("4700", "resistance", 4700.0),
        ("473", "resistance", 473.0),  # a plain number, not a three-digit marking
        ("4.7k", "resistance", 4700.0),
        ("4.7 kΩ", "resistance", 4700.0),
        ("4.7 k\N{OHM SIGN}", "resistance", 4700.0),
        ("4.7\N{NO-BREAK SPACE}k\N{GREEK CAPITAL LETTER OMEGA}", "resistance", 4700.0),
        ("4.7kohm", "resistance", 4700.0),
        ("4.7 Kohm", "resistance", 4700.0),
        ("4.7 kilohm", "resistance", 4700.0),
        ("4k7 ohm", "resistance", 4700.0),
        ("1.5 MΩ", "resistance", 1.5e6),
        ("2 megohms", "resistance", 2e6),
        ("4.7 mΩ", "resistance", 0.0047),
        ("4.7 milliohm", "resistance", 0.0047),
        ("1e3", "resistance", 1000.0),
        (".5", "resistance", 0.5),
        ("4R7", "resistance", 4.7),
        ("100 nF", "capacitance", 1e-7),
        ("100nF", "capacitance", 1e-7),
        ("100nf", "capacitance", 1e-7),
        ("1e-9", "capacitance", 1e-9),
        ("1e-9 F", "capacitance", 1e-9),
        ("4\N{MICRO SIGN}7", "capacitance", 4.7e-6),
        ("4\N{GREEK SMALL LETTER MU}7", "capacitance", 4.7e-6),
        ("4.7 µF", "capacitance", 4.7e-6),
        ("2 F", "capacitance", 2.0),
        ("4m7", "capacitance", 0.0047),
        ("10 mH", "inductance", 0.01),
        ("10m", "inductance", 0.01),
        ("4u7", "inductance", 4.7e-6),
        ("15 V", "voltage", 15.0),
        ("-15 V", "voltage", -15.0),
        ("\N{MINUS SIGN}15 V", "voltage", -15.0),
        ("3V3", "voltage", 3.3),
        ("0", "voltage", 0.0),
        ("500 mV", "voltage", 0.5),
        ("20 mA", "current", 0.02),
        ("1k59", "frequency", 1590.0),
        ("20", "frequency", 20.0),
        ("1.59 kHz", "frequency", 1590.0),
        ("20 ms", "time", 0.02),
        ("1.5", "time", 1.5),
        ("1 %", "percent", 1.0),
        ("±0.1%", "percent", 0.1),
        ("-3 dB", "gain_db", -3.0),
        ("20", "gain_db", 20.0),
    ],
)
def test_engineering_text_reads_as_the_exact_value(text: str, kind: Kind, value: float) -> None:
    assert parse_value(text, kind) == value


@pytest.mark.parametrize(
    ("text", "kind", "reason", "hint"),
    [
        # two readings
        ("4m7", "resistance", "milliohm, or megohm", "write 4.7M for megohm"),
        ("10m", "resistance", "milliohm, or megohm", "10 mΩ for milliohm"),
        ("4.7 mohm", "resistance", "milliohm, or megohm", "4.7M"),
        ("4E7", "resistance", "mark the point in ohms or a power of ten", "write 4R7 or 4e7"),
        ("4M7", "capacitance", "'M' is mega", "4.7 uF for microfarad"),
        ("10 mfd", "capacitance", "microfarad, by the SI it is millifarad", "write 10 uF or 10 mF"),
        ("104", "capacitance", "marking in pF or a number of farads", "100n"),
        ("100", "capacitance", "marking in pF or a number of farads", "100n"),
        ("0.1", "capacitance", "no prefix or unit", "100n"),
        ("1f", "capacitance", "femto or farad", "1 F"),
        ("10", "inductance", "no prefix or unit", "10 mH"),
        ("R47", "inductance", "microhenry", "0.47 uH"),
        ("1m", "frequency", "millihertz or megahertz", "1 MHz"),
        ("2m", "time", "minutes or milliseconds", "2 ms"),
        ("0.01", "percent", "ratio or a percentage", "1 %"),
        ("1,000", "resistance", "thousands or mark the decimal", "without a comma"),
        ("1.000,5", "resistance", "thousands or mark the decimal", "without a comma"),
        ("4,7k", "resistance", "a comma is not taken", "write 4.7k with a point"),
        # a tolerance letter belongs in its own field
        ("4K7J", "resistance", r"tolerance \(5 %\)", "write 4K7 and"),
        ("47kF", "resistance", r"tolerance \(1 %\)", "write 47k and"),
        ("100nK", "capacitance", r"tolerance \(10 %\)", "write 100n and"),
        # the wrong quantity
        ("10 nF", "resistance", "this is a capacitance; a resistance is wanted", "4k7"),
        ("10 mH", "capacitance", "this is an inductance; a capacitance is wanted", "100n"),
        ("4.7 kΩ", "frequency", "this is a resistance; a frequency is wanted", "1k"),
        ("R47", "capacitance", "'R' marks ohms", "100n"),
        # not a value
        ("", "resistance", "empty", "4k7"),
        ("   ", "capacitance", "empty", "100n"),
        ("4z7", "resistance", "no such prefix 'z'", "write 4k7, 4.7k or 4700"),
        ("4.7 zΩ", "resistance", "no such prefix 'z'", "4k7"),
        ("4.7k7", "resistance", "both a point and a letter", "4k7"),
        ("4 700", "resistance", "more than one number", "4k7"),
        ("1.2.3", "resistance", "more than one number", "4k7"),
        ("k", "resistance", "not a number", "4k7"),
        ("ten", "resistance", "not a number", "4k7"),
        ("\N{ARABIC-INDIC DIGIT THREE}k", "resistance", "not a number", "4k7"),
        ("nan", "resistance", "not a finite number", "4k7"),
        ("inf", "capacitance", "not a finite number", "100n"),
        ("-Infinity", "voltage", "not a finite number", "15 V"),
        ("-4k7", "resistance", "negative; a resistance is above zero", "4k7"),
        ("0", "resistance", "zero; a resistance is above zero", "4k7"),
        ("0 nF", "capacitance", "zero; a capacitance is above zero", "100n"),
        ("1e999", "resistance", "out of range", "4k7"),
        ("1e99999999999999", "resistance", "out of range", "4k7"),
        ("1e-300", "capacitance", "out of range", "100n"),
        ("1" * 41, "resistance", "longer than 40 characters", "4k7"),
        ("4\x1b[31m7", "resistance", "control character", "4k7"),
        ("4k7\u202e", "resistance", "control character", "4k7"),
    ],
)
def test_what_is_not_clear_is_refused_with_reason_and_cure(
    text: str, kind: Kind, reason: str, hint: str
) -> None:
    with pytest.raises(NotationError, match=reason) as caught:
        parse_value(text, kind)
    assert hint in caught.value.hint
    assert caught.value.message.startswith(f'"{printable(text.strip())[:40]}')
    assert "\x1b" not in str(caught.value)


def test_the_cures_that_are_offered_can_be_read() -> None:
    assert parse_value("4.7M", "resistance") == 4.7e6
    assert parse_value("4.7L", "resistance") == 0.0047
    for kind in get_args(Kind):
        for example in KINDS[kind].example.replace(" or ", ", ").split(", "):
            assert math.isfinite(parse_value(example, kind))


def test_zero_is_taken_where_it_is_asked_for() -> None:
    assert parse_value("0", "resistance", allow_zero=True) == 0.0
    with pytest.raises(NotationError, match="negative"):
        parse_value("-1", "resistance", allow_zero=True)


def test_a_refusal_is_a_usage_error() -> None:
    with pytest.raises(UsageError, match="4z7"):
        parse_value("4z7", "resistance")
    with pytest.raises(ValueError, match="4z7"):
        parse_value("4z7", "resistance")


@pytest.mark.parametrize(
    ("value", "kind", "text"),
    [
        (4700.0, "resistance", "4.7 kΩ"),
        (1591.549, "frequency", "1.59 kHz"),
        (1e-7, "capacitance", "100 nF"),
        (999.96, "resistance", "1 kΩ"),  # the carry moves on to the next prefix
        (0.47, "resistance", "470 mΩ"),
        (4.7e-13, "capacitance", "0.47 pF"),
        (4.7e-6, "capacitance", "4.7 µF"),
        (10_000.0, "time", "10000 s"),
        (0.0, "voltage", "0 V"),
        (-0.0005, "voltage", "-500 µV"),
        (-3.0103, "gain_db", "-3.01 dB"),
        (0.1, "percent", "0.1 %"),
        (math.inf, "resistance", "inf Ω"),
        (2.5e15, "resistance", "2500 TΩ"),
    ],
)
def test_values_are_written_in_engineering_notation(value: float, kind: Kind, text: str) -> None:
    assert format_value(value, kind) == text


def test_fixed_digits_keep_their_zeros() -> None:
    assert format_value(8.7, "voltage", fixed=True) == "8.70 V"
    assert format_value(0.0123, "voltage", fixed=True) == "12.3 mV"
    assert format_value(99.96, "voltage", fixed=True) == "100 V"


@pytest.mark.parametrize(
    ("value", "kind", "code"),
    [
        (4700.0, "resistance", "4k7"),
        (47_000.0, "resistance", "47k"),
        (1e6, "resistance", "1M"),
        (0.47, "resistance", "R47"),
        (0.047, "resistance", "R047"),
        (1e-4, "resistance", "L1"),
        (47.0, "resistance", "47R"),
        (1591.549, "resistance", "1k592"),
        (999.96, "resistance", "1k"),
        (1e-7, "capacitance", "100n"),
        (2.2e-6, "capacitance", "2u2"),
        (4.7e-13, "capacitance", "p47"),
        (1e-3, "capacitance", "1m"),
        (0.01, "inductance", "10m"),
        (1e-20, "capacitance", "1e-20"),
    ],
)
def test_values_are_written_as_codes(value: float, kind: Kind, code: str) -> None:
    assert format_code(value, kind) == code
    assert parse_value(code, kind) == pytest.approx(value, rel=5e-4)


@pytest.mark.parametrize("value", [0.0, -1.0, math.nan, math.inf])
def test_there_is_no_code_for_what_no_part_can_be(value: float) -> None:
    with pytest.raises(ValueError, match="above zero and finite"):
        format_code(value, "resistance")


def test_there_is_no_code_for_a_frequency() -> None:
    with pytest.raises(ValueError, match="no IEC 60062 code"):
        format_code(1000.0, "frequency")


@pytest.mark.parametrize(
    ("text", "kind", "echo"),
    [
        ("4k7", "resistance", "4k7 = 4.7 kΩ (4700 ohm)"),
        (" 100n ", "capacitance", "100n = 100 nF (1e-7 farad)"),
        ("1 %", "percent", "1 % = 1 % (0.01 of the value)"),
        ("20 dB", "gain_db", "20 dB = 20 dB (10 times)"),
    ],
)
def test_the_echo_says_what_was_understood(text: str, kind: Kind, echo: str) -> None:
    assert understood(text, kind) == echo


@given(st.floats(1e-13, 1e10), st.sampled_from(CODED))
@settings(max_examples=400, derandomize=True)
def test_a_code_reads_back_to_four_digits(value: float, kind: Kind) -> None:
    exact_to_four = float(f"{value:.3e}")
    read_back = parse_value(format_code(value, kind), kind)
    assert abs(Decimal(read_back) - Decimal(value)) <= Decimal(repr(value)) * Decimal("5.0001e-4")
    assert parse_value(format_code(exact_to_four, kind), kind) == exact_to_four


@given(st.floats(1e-15, 1e12), st.sampled_from(get_args(Kind)), st.integers(1, 9))
@settings(max_examples=400, derandomize=True)
def test_written_values_read_back_to_their_digits(value: float, kind: Kind, digits: int) -> None:
    read_back = parse_value(format_value(value, kind, digits=digits), kind)
    assert abs(read_back - value) <= value * 0.50001 * 10.0 ** (1 - digits)
    again = format_value(read_back, kind, digits=digits)
    assert again == format_value(value, kind, digits=digits)


@given(st.floats(1e-15, 1e12), st.sampled_from(get_args(Kind)))
@settings(max_examples=200, derandomize=True)
def test_seventeen_digits_carry_the_float_itself(value: float, kind: Kind) -> None:
    assert parse_value(format_value(value, kind, digits=17), kind) == value


@given(st.text(max_size=60), st.sampled_from(get_args(Kind)))
@settings(max_examples=1000, derandomize=True)
def test_any_text_is_read_or_refused_and_never_more(text: str, kind: Kind) -> None:
    refusal = None
    try:
        value = parse_value(text, kind)
    except NotationError as error:
        refusal = error
    if refusal is None:
        assert math.isfinite(value)
        assert value > 0.0 or KINDS[kind].signed
    else:
        assert printable(refusal.message) == refusal.message
        assert refusal.hint


@given(
    st.from_regex(r"[0-9]{0,3}[pnumkKMGRLFHV.,]{0,2}[0-9]{0,3} ?[pnumkM]?[FHVJKΩ]?", fullmatch=True),
    st.sampled_from(CODED),
)
@settings(max_examples=400, derandomize=True)
def test_texts_close_to_a_value_agree_with_their_echo(text: str, kind: Kind) -> None:
    try:
        value = parse_value(text, kind)
    except NotationError:
        return
    shown = understood(text, kind).rpartition(" = ")[2].partition(" (")[0]
    assert parse_value(shown, kind) == pytest.approx(value, rel=5.1e-6)
