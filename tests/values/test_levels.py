"""Levels, full scale and supply in volts."""

from __future__ import annotations

import contextlib
import math
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from preview.errors import NotationError
from preview.values.levels import (
    FULL_SCALE_PRESETS,
    FullScale,
    dbfs_from_vpk,
    dbu_from_vpk,
    dbu_from_vrms,
    dbv_from_vpk,
    dbv_from_vrms,
    format_db,
    format_volts,
    full_scale_comment,
    full_scale_in_comment,
    parse_full_scale,
    parse_level,
    parse_supply,
    ratio_db,
    ratio_from_db,
    vpk_from_dbu,
    vpk_from_vrms,
    vrms_from_dbu,
    vrms_from_dbv,
    vrms_from_vpk,
)

PUBLISHED: dict[str, Any] = tomllib.loads(
    (Path(__file__).parents[1] / "published" / "levels.toml").read_text(encoding="utf-8")
)


@pytest.mark.parametrize("row", PUBLISHED["level"], ids=lambda row: row["name"])
def test_levels_lead_to_the_published_volts(row: dict[str, Any]) -> None:
    text = row["name"].partition(" (")[0]
    assert parse_level(text) == pytest.approx(row["volts_peak_sine"], rel=1e-12)
    assert parse_level(f"{row['volts_rms']!r} Vrms") == pytest.approx(row["volts_peak_sine"], rel=1e-12)
    number, unit = text.split()
    back = dbu_from_vrms if unit == "dBu" else dbv_from_vrms
    assert back(row["volts_rms"]) == pytest.approx(float(number), abs=1e-12)


@pytest.mark.parametrize("row", PUBLISHED["alignment"], ids=lambda row: row["name"])
def test_alignment_leads_to_the_full_scale_of_the_preset(row: dict[str, Any]) -> None:
    # EBU R 68: 0 dBu at -18 dBFS, so full scale +18 dBu. SMPTE RP 155: +4 dBu at -20 dBFS, so +24 dBu.
    full_scale_dbu = row["analogue_dbu"] - row["dbfs"]
    preset = next(p for p in FULL_SCALE_PRESETS if row["name"].split()[0] in p.about)
    assert preset.text == f"{full_scale_dbu:+g} dBu"
    aligned_vpk = vpk_from_dbu(row["analogue_dbu"])
    assert dbfs_from_vpk(aligned_vpk, preset.volts) == pytest.approx(row["dbfs"], abs=1e-9)
    if "exact_db" in row:  # the ratio 1:8 that the recommendation names beside its rounded -18 dB
        assert ratio_db(1.0 / 8.0) == pytest.approx(row["exact_db"], abs=0.005)


@pytest.mark.parametrize(
    ("text", "volts_peak", "written"),
    [
        ("+18 dBu", 8.70142984443495, "+18 dBu"),
        ("18dbu", 8.70142984443495, "+18 dBu"),
        ("-10 dBV", 0.447213595499958, "-10 dBV"),
        ("\N{MINUS SIGN}10 dBV", 0.447213595499958, "-10 dBV"),
        ("2 Vrms", 2.8284271247461903, "2 Vrms"),
        ("2 V RMS", 2.8284271247461903, "2 Vrms"),
        ("5 V", 5.0, "5 V peak"),
        ("5 volts", 5.0, "5 V peak"),
        ("5 Vpk", 5.0, "5 V peak"),
        ("1.5 V peak", 1.5, "1.5 V peak"),
        ("10 Vpp", 5.0, "10 Vpp"),
        ("10 V p-p", 5.0, "10 Vpp"),
        ("500 mV", 0.5, "500 mV peak"),
        ("500mVrms", 0.5 * math.sqrt(2.0), "500 mVrms"),
        ("1e3 V", 1000.0, "1 kV peak"),
        ("1 uV", 1e-6, "1 µV peak"),
        ("1 kV", 1000.0, "1 kV peak"),
    ],
)
def test_full_scale_is_the_peak_in_volts(text: str, volts_peak: float, written: str) -> None:
    full_scale = parse_full_scale(text)
    assert full_scale.volts == pytest.approx(volts_peak, rel=1e-12)
    assert full_scale.text == written
    assert parse_full_scale(full_scale.text) == full_scale


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("18", "no unit; could be volts, dBu or dBV"),
        ("+18", "no unit"),
        ("5", "no unit"),
        ("0 dBFS", "dBFS is counted from full scale"),
        ("4 dBv", "could be dBV .* or the older name of dBu"),
        ("4 dBm", "dBm is a power"),
        ("4 dB", "no such unit 'dB'"),
        ("4 dBx", "no such unit 'dBx'"),
        ("5 VU", "no such unit 'VU'"),
        ("5 W", "no such unit 'W'"),
        ("0 V", "above zero volts"),
        ("-5 V", "above zero volts"),
        ("0.9 uV", "outside 1 uV to 1 kV"),
        ("1001 V", "outside 1 uV to 1 kV"),
        ("+900 dBu", "outside 1 uV to 1 kV"),
        ("+9999999 dBu", "outside 1 uV to 1 kV"),
        ("-200 dBu", "outside 1 uV to 1 kV"),
        ("nan dBu", "not a level"),
        ("loud", "not a level"),
        ("", "empty"),
        ("1" * 50 + " V", "longer than 40"),
        ("5 V\x1b[2J", "control character"),
        ("1,5 V", "no such unit|comma"),
    ],
)
def test_a_level_that_gives_no_volts_is_refused(text: str, reason: str) -> None:
    with pytest.raises(NotationError, match=reason) as caught:
        parse_full_scale(text)
    assert caught.value.hint
    assert "\x1b" not in str(caught.value)


def test_presets_read_back_and_say_where_they_are_used() -> None:
    assert len({preset.text for preset in FULL_SCALE_PRESETS}) == len(FULL_SCALE_PRESETS) >= 5
    for preset in FULL_SCALE_PRESETS:
        assert preset.about
        assert parse_full_scale(preset.text) == preset


@given(st.floats(-100.0, 55.0))
@settings(max_examples=200, derandomize=True)
def test_decibels_and_volts_are_inverse(level_db: float) -> None:
    assert dbu_from_vrms(vrms_from_dbu(level_db)) == pytest.approx(level_db, abs=1e-9)
    assert dbv_from_vrms(vrms_from_dbv(level_db)) == pytest.approx(level_db, abs=1e-9)
    assert dbu_from_vpk(vpk_from_dbu(level_db)) == pytest.approx(level_db, abs=1e-9)
    assert ratio_db(ratio_from_db(level_db)) == pytest.approx(level_db, abs=1e-9)
    assert dbv_from_vpk(vpk_from_vrms(vrms_from_dbv(level_db))) == pytest.approx(level_db, abs=1e-9)


def test_a_level_reads_2_218_db_more_in_dbu_than_in_dbv() -> None:
    # Closed form: 20 log10(1 / sqrt(0.6)) = 2.21849 dB.
    assert dbu_from_vrms(1.0) - dbv_from_vrms(1.0) == pytest.approx(-10.0 * math.log10(0.6), abs=1e-12)


def test_silence_is_minus_infinity() -> None:
    assert ratio_db(0.0) == -math.inf
    assert dbu_from_vpk(0.0) == -math.inf
    assert dbfs_from_vpk(0.0, 8.7) == -math.inf


def test_peak_and_rms_of_a_sine() -> None:
    assert vrms_from_vpk(vpk_from_vrms(2.0)) == pytest.approx(2.0, rel=1e-15)
    assert vpk_from_vrms(1.0) ** 2 == pytest.approx(2.0, rel=1e-15)


def test_levels_are_written_steadily() -> None:
    assert format_volts(8.70143) == "8.70 V"
    assert format_volts(0.0123) == "12.3 mV"
    assert format_volts(0.0) == "0 V"
    assert format_volts(-15.0) == "-15.0 V"
    assert format_db(-12.34) == "-12.3 dB"
    assert format_db(4.0, "dBu") == "+4.0 dBu"
    assert format_db(-0.04) == "0.0 dB"
    assert format_db(-math.inf, "dBu") == "-inf dBu"


@pytest.mark.parametrize(
    ("text", "rails"),
    [
        ("+15 -15", (15.0, -15.0)),
        ("-15 +15", (15.0, -15.0)),
        ("±15", (15.0, -15.0)),
        ("± 15 V", (15.0, -15.0)),
        ("+/-12", (12.0, -12.0)),
        ("15 V -15 V", (15.0, -15.0)),
        ("15V, -12V", (15.0, -12.0)),
        ("+15/-15", (15.0, -15.0)),
        ("+15-15", (15.0, -15.0)),
        ("+15 \N{MINUS SIGN}15", (15.0, -15.0)),
        ("9", (9.0, 0.0)),
        ("9 V", (9.0, 0.0)),
        ("3V3", (3.3, 0.0)),
        ("0 -9", (0.0, -9.0)),
    ],
)
def test_supply_is_read_as_two_rails(text: str, rails: tuple[float, float]) -> None:
    assert parse_supply(text) == rails


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ("15 15", "one side of 0 V"),
        ("-15 -9", "one side of 0 V"),
        ("15,5", "one side of 0 V"),
        ("-9", "one negative rail"),
        ("±0", "no volts between"),
        ("0 0", "no volts between"),
        ("0", "no volts between"),
        ("5000", "beyond 1 kV"),
        ("±5000", "beyond 1 kV"),
        ("15 F", "this is a capacitance"),
        ("15 -15 3", "more than one number"),
        ("mains", "not a number"),
        ("", "empty"),
        ("±", "not a number"),
        ("nan nan", "not a finite number"),
        ("15\x07 -15", "control character"),
    ],
)
def test_a_supply_that_is_none_is_refused(text: str, reason: str) -> None:
    with pytest.raises(NotationError, match=reason) as caught:
        parse_supply(text)
    assert caught.value.hint
    assert caught.value.message.startswith('"')


@given(st.text(max_size=50))
@settings(max_examples=600, derandomize=True)
def test_any_text_is_a_level_and_a_supply_or_refused(text: str) -> None:
    with contextlib.suppress(NotationError):
        assert 0.0 < parse_level(text) <= 1000.0
    with contextlib.suppress(NotationError):
        positive_v, negative_v = parse_supply(text)
        assert positive_v >= 0.0 >= negative_v


@pytest.mark.parametrize(
    ("comment", "text"),
    [
        ("full scale +18 dBu", "+18 dBu"),
        ("Bilge pump, 100 mV/g; full scale 5 V peak", "5 V peak"),
        ("Full scale: 2 Vrms; take 3", "2 Vrms"),
        ("full scale of the meter", None),
        ("full scale 18", None),
        ("grayscale +18 dBu", None),
        ("", None),
    ],
)
def test_full_scale_travels_in_a_comment(comment: str, text: str | None) -> None:
    found = full_scale_in_comment(comment)
    assert (found.text if found else None) == text


def test_the_comment_that_is_written_reads_back() -> None:
    for preset in FULL_SCALE_PRESETS:
        assert full_scale_in_comment(full_scale_comment(preset)) == preset
    assert full_scale_comment(FullScale(5.0, "5 V peak")) == "full scale 5 V peak"
