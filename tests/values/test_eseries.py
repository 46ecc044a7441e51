"""The preferred numbers of IEC 60063."""

from __future__ import annotations

import math
import tomllib
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from preview.errors import NotationError
from preview.values.eseries import SERIES, contains, nearest, series_name, step

PUBLISHED: dict[str, Any] = tomllib.loads(
    (Path(__file__).parents[1] / "published" / "eseries.toml").read_text(encoding="utf-8")
)
NAMES = sorted(SERIES, key=lambda name: int(name[1:]))
parts = st.floats(1e-12, 1e9)  # 1 pF to 1 gigohm


@pytest.mark.parametrize("row", PUBLISHED["series"], ids=lambda row: row["name"])
def test_series_are_those_of_iec_60063(row: dict[str, Any]) -> None:
    assert list(SERIES[row["name"]]) == row["values"]


@pytest.mark.parametrize("row", PUBLISHED["exception"], ids=lambda row: f"{row['series']} {row['standard']}")
def test_historical_exceptions_hold(row: dict[str, Any]) -> None:
    standard = SERIES[row["series"]][row["index"]]
    count = int(row["series"][1:])
    digits = 1 if count <= 24 else 2
    assert standard == row["standard"]
    assert round(10.0 ** (row["index"] / count), digits) == row["rounded"] != standard


@pytest.mark.parametrize("name", NAMES)
def test_all_others_are_the_rounded_geometric_series(name: str) -> None:
    # IEC 60063: one decimal up to E24, two from E48; the exceptions are rows of the published table.
    count = int(name[1:])
    published = {(row["series"], row["index"]) for row in PUBLISHED["exception"]}
    base = "E24" if count <= 24 else "E192"
    per_place = int(base[1:]) // count
    for place, value in enumerate(SERIES[name]):
        if (base, place * per_place) not in published:
            assert value == round(10.0 ** (place / count), 1 if count <= 24 else 2)


def test_nothing_but_the_published_series_is_there() -> None:
    assert [row["name"] for row in PUBLISHED["series"]] == NAMES


@pytest.mark.parametrize(
    ("value", "series", "count", "expected"),
    [
        (4700.0, "E24", 1, 5100.0),
        (4700.0, "E24", -1, 4300.0),
        (4700.0, "e12", 1, 5600.0),
        (4700.0, "E12", 12, 47_000.0),
        (4700.0, "E3", 1, 10_000.0),
        (4800.0, "E12", 1, 5600.0),  # off the series: the next above
        (4800.0, "E12", -1, 4700.0),  # and the next below
        (4800.0, "E12", 2, 6800.0),
        (4800.0, "E12", -2, 3900.0),
        (4800.0, "E12", 0, 4800.0),
        (4700.000000000001, "E24", 1, 5100.0),
        (4699.999999999999, "E24", -1, 4300.0),
        (9.1e-12, "E24", 1, 1e-11),
        (1e-12, "E24", -1, 9.1e-13),
        (1e9, "E96", -1, 976e6),
        (9.88e8, "E192", 1, 1e9),
        (1000.0, "E24", -1, 910.0),
        (999.9999999, "E24", 1, 1100.0),
        (999.9, "E24", 1, 1000.0),
    ],
)
def test_steps_land_on_the_exact_decimal(value: float, series: str, count: int, expected: float) -> None:
    assert step(value, series, count) == expected


@pytest.mark.parametrize("name", NAMES)
def test_stepping_through_21_decades_gives_the_nearest_floats(name: str) -> None:
    value = 1e-12
    seen = [value]
    while value < 1e9:
        value = step(value, name, 1)
        seen.append(value)
    expected = [
        float(Fraction(round(mantissa * 100), 100) * Fraction(10) ** decade)
        for decade in range(-12, 9)
        for mantissa in SERIES[name]
    ]
    assert seen == [*expected, 1e9]
    assert [step(seen[-1], name, -count) for count in range(len(seen))] == seen[::-1]


@given(parts, st.sampled_from(NAMES), st.integers(1, 200))
@settings(max_examples=300, derandomize=True)
def test_up_then_down_returns_to_a_standard_value(value: float, name: str, count: int) -> None:
    standard = nearest(value, name)
    assert contains(standard, name)
    assert step(step(standard, name, count), name, -count) == standard
    assert step(value, name, 1) > value * (1.0 - 2e-9)
    assert step(value, name, -1) < value * (1.0 + 2e-9)


@given(parts, st.sampled_from(NAMES))
@settings(max_examples=300, derandomize=True)
def test_nearest_agrees_with_a_search_of_the_table(value: float, name: str) -> None:
    table = np.concatenate([np.array(SERIES[name]) * 10.0**d for d in range(-13, 11)])
    best = table[np.argmin(np.abs(table - value))]
    found = nearest(value, name)
    assert abs(found - value) <= abs(best - value) * (1.0 + 1e-9) + 1e-12 * value


def test_worst_error_of_the_nearest_value_is_that_of_the_table() -> None:
    published = PUBLISHED["worst_snap_error_percent"]
    for name in ("E6", "E12", "E24", "E48", "E96", "E192"):
        middles = [(low + step(low, name, 1)) / 2.0 for low in SERIES[name]]
        worst = max(abs(nearest(m, name) - m) / m for m in middles)
        assert 100.0 * worst == pytest.approx(published[name], rel=1e-9)


def test_membership() -> None:
    assert contains(4700.0, "E24")
    assert contains(4.7e-9, "E3")
    assert not contains(4800.0, "E24")
    assert contains(9.2e3, "E192")
    assert not contains(9.19e3, "E192")
    assert not contains(4700.1, "E24")


@pytest.mark.parametrize("value", [0.0, -4700.0, math.nan, math.inf])
def test_what_has_no_place_in_a_series_is_refused(value: float) -> None:
    with pytest.raises(NotationError, match="not above zero and finite"):
        step(value, "E24", 1)
    with pytest.raises(NotationError, match="not above zero and finite"):
        nearest(value, "E24")


def test_an_unknown_series_is_refused_with_those_there_are() -> None:
    with pytest.raises(NotationError, match='"E25": no such E series') as caught:
        step(4700.0, "E25", 1)
    assert "E3, E6, E12, E24, E48, E96, E192" in caught.value.hint
    assert series_name(" e96 ") == "E96"


def test_a_step_out_of_range_is_refused() -> None:
    with pytest.raises(NotationError, match="out of range"):
        step(1e9, "E3", 10_000)
    with pytest.raises(NotationError, match="out of range"):
        step(1e-12, "E3", -10_000)
