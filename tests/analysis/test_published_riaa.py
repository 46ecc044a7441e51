"""The replay and emphasis stages against the curves of IEC 60098 and ITU-R BS.450."""

from __future__ import annotations

import tomllib
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.circuit.library import find_stage
from preview.circuit.netlist import Netlist, netlist
from preview.network.transfer import response

PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "riaa.toml").read_text("utf-8"))
TABLES = {row["name"]: row for row in PUBLISHED["response_table"]}
T = {row["name"].partition("_")[0]: row["seconds"] for row in PUBLISHED["time_constant"]}

Row = dict[str, Any]


def circuit(name: str, values: dict[str, float] | None = None) -> Netlist:
    stage = find_stage(name)
    for opamp in stage.opamps:
        stage = stage.with_part(replace(opamp, type="ideal"))
    return netlist(stage).with_values(values or {})


def db(found: Netlist, frequency_hz: list[float]) -> NDArray[np.float64]:
    return 20 * np.log10(np.abs(response(found, frequency_hz)))


def re_1khz(found: Netlist, frequency_hz: list[float]) -> NDArray[np.float64]:
    return db(found, frequency_hz) - db(found, [1000.0])


def replay(frequency_hz: NDArray[np.float64], *, amended: bool) -> NDArray[np.float64]:
    """The standard's formula, in decibels from 1 kHz."""

    def gain(f: NDArray[np.float64]) -> NDArray[np.complex128]:
        s = 2j * np.pi * f
        h = (1 + s * T["t2"]) / ((1 + s * T["t1"]) * (1 + s * T["t3"]))
        return h * s * T["t4"] / (1 + s * T["t4"]) if amended else h

    return 20 * np.log10(np.abs(gain(frequency_hz) / gain(np.array(1000.0))))


def test_the_table_is_the_formula() -> None:
    row = TABLES["ideal"]
    f = np.array(row["frequency_hz"])
    np.testing.assert_allclose(row["riaa_db"], replay(f, amended=False), atol=6e-4)
    np.testing.assert_allclose(row["iec_amended_db"], replay(f, amended=True), atol=6e-4)


@pytest.mark.parametrize(("name", "key"), [("riaa-replay", "riaa_db"), ("riaa-replay-iec", "iec_amended_db")])
def test_the_stage_follows_the_curve_within_six_hundredths_of_a_decibel(name: str, key: str) -> None:
    # Standard values: 88.7k for 88.33k, 97.6 ohm and 82 uF for 7950 us; and the gain of a non-inverting stage
    # ends at one, not at nothing, which is what is left at 20 kHz.
    row = TABLES["ideal"]
    np.testing.assert_allclose(re_1khz(circuit(name), row["frequency_hz"]), row[key], atol=0.06)


@pytest.mark.parametrize(("name", "key"), [("riaa-replay", "riaa_db"), ("riaa-replay-iec", "iec_amended_db")])
def test_exact_parts_follow_the_curve_as_far_as_the_topology_can(name: str, key: str) -> None:
    # R2 C2 = 3180 us, R3 C3 = 75 us, R2 / R3 = (3180 - 318) / (318 - 75); the gain leg a hundred times smaller
    # than drawn, so that the one in 1 + Z2 / Z1 no longer counts.
    r3 = 7500.0
    r2 = r3 * (T["t1"] - T["t2"]) / (T["t2"] - T["t3"])
    parts = {"R2": r2, "R3": r3, "C2": T["t1"] / r2, "C3": T["t3"] / r3, "R4": 1.0}
    parts["C1"] = T["t4"] / parts["R4"] if name.endswith("iec") else 10.0
    row = TABLES["ideal"]
    np.testing.assert_allclose(re_1khz(circuit(name, parts), row["frequency_hz"]), row[key], atol=1e-3)


def test_the_printed_table_is_met_but_for_three_roundings() -> None:
    # 17.0 is printed for 16.946 (50 Hz), 0.7 for 0.751 (800 Hz) and -4.8 for -4.740 (3 kHz): a little more than half
    # a digit. Every other row is within it.
    row = TABLES["published_rounded"]
    off = np.abs(np.array(row["riaa_db"]) - replay(np.array(row["frequency_hz"]), amended=False))
    beyond = [f for f, d in zip(row["frequency_hz"], off, strict=True) if d > 0.05]
    assert beyond == [50.0, 800.0, 3000.0]
    assert off.max() < 0.061
    found = re_1khz(circuit("riaa-replay"), row["frequency_hz"])
    assert np.abs(found - row["riaa_db"]).max() < 0.061 + 0.06


def test_low_end_of_the_amended_curve() -> None:
    row = TABLES["iec_low_end_check"]
    found = re_1khz(circuit("riaa-replay-iec"), row["frequency_hz"])
    np.testing.assert_allclose(found, row["iec_amended_db"], atol=0.06)


def test_gain_at_1_khz_against_0_hz_and_its_phase() -> None:
    values = {row["name"]: row["value"] for row in PUBLISHED["value"]}
    s = 2j * np.pi * 1000.0
    h = (1 + s * T["t2"]) / ((1 + s * T["t1"]) * (1 + s * T["t3"]))
    assert 20 * np.log10(abs(h)) == pytest.approx(values["gain_1khz_re_dc_db"], abs=1e-9)
    assert np.angle(h, deg=True) == pytest.approx(values["phase_deg_at_1khz"], abs=1e-9)
    # the stage: a degree more by the one in 1 + Z2 / Z1 and by C1
    phase = np.angle(response(circuit("riaa-replay"), [1000.0])[0], deg=True)
    assert phase == pytest.approx(values["phase_deg_at_1khz"], abs=1.0)


def test_franco_3_6_is_as_far_from_the_curve_as_its_standard_values_put_it() -> None:
    # Example 3.6, p. 123, designed for 40 dB at 1 kHz: the standard values make 40.475 dB, and C1 with R1 a low
    # corner of 14 Hz, so that 20 Hz is 2 dB down on the plain curve and 1 dB up on the amended one.
    (row,) = PUBLISHED["worked_example"]
    parts = row["parts"]
    values = {"R4": parts["R1"], "R2": parts["R2"], "R3": parts["R3"]}
    found = circuit("riaa-replay", values | {c: parts[c] for c in ("C1", "C2", "C3")})
    assert db(found, [1000.0])[0] == pytest.approx(40.475, abs=5e-4)
    assert abs(db(found, [1000.0])[0] - row["published_gain_1khz_db"]) > 0.4
    f = np.array(row["check_hz"])
    for amended, key in ((False, "deviation_vs_riaa_db"), (True, "deviation_vs_iec_amended_db")):
        off = re_1khz(found, row["check_hz"]) - replay(f, amended=amended)
        np.testing.assert_allclose(off, row[key], atol=1e-3)


@pytest.mark.parametrize("row", PUBLISHED["deemphasis"], ids=lambda row: row["name"])
def test_emphasis_stages_follow_their_curve(row: Row) -> None:
    us = round(row["seconds"] * 1e6)
    f, wanted = row["frequency_hz"], np.array(row["response_db_re_dc"])
    exact = {"R1": row["seconds"] / 10e-9, "R2": row["seconds"] / 10e-9}
    np.testing.assert_allclose(db(circuit(f"de-emphasis-{us}us", exact), f), wanted, atol=6e-4)
    # as drawn: 4.99k stands for 5k, 0.2 %
    np.testing.assert_allclose(
        db(circuit(f"de-emphasis-{us}us"), f), wanted, atol=0.018 if us == 50 else 6e-4
    )
    # pre-emphasis is the mirror, but for R3, which ends the rise at 64 kHz or 46 kHz
    np.testing.assert_allclose(
        db(circuit(f"pre-emphasis-{us}us"), f), -wanted, atol=0.25 if us == 50 else 0.45
    )
    without_end = circuit(f"pre-emphasis-{us}us", {"R2": row["seconds"] / 10e-9 - 0.01, "R3": 0.01})
    np.testing.assert_allclose(db(without_end, f), -wanted, atol=6e-4)
    assert -10 * np.log10(2) == pytest.approx(
        db(circuit(f"de-emphasis-{us}us", exact), [row["corner_hz"]])[0]
    )
