"""The bundled op-amps against the published rows, and finding types by name."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Callable
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from preview.circuit import opamp_library
from preview.circuit.opamp import IDEAL, OVERDRIVES, PERFECT, OpAmpModel
from preview.circuit.opamp_classes import CLASSES, shot_noise_a_rthz
from preview.circuit.opamp_library import find_opamp, find_sheet, known_type, opamp_names
from preview.circuit.opamp_sheet import OpAmpSheet
from preview.circuit.opamp_units import FIGURE_FIELDS
from preview.errors import OpAmpFileError, UnknownNameError

PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "opamps.toml").read_text("utf-8"))
FIGURES = [row for row in PUBLISHED["figure"] if row["type"] != "RC4580"]
REAL = tuple(name for name in opamp_names() if name not in ("perfect", "ideal"))

NOT_MODELLED = {
    "rin", "rise_time", "cmrr", "psrr", "thd", "thdn", "power_bw", "drift_max",
    "en_pp_max", "vos_max", "input_diodes",
}  # fmt: skip
"""What the model has no field for, or (vos_max) only a bound where a typical figure is wanted."""

TAKEN_OTHERWISE = {
    ("NE5532", "ro"): "closed loop; the open-loop figure is derived from it, see the test below",
    ("LM358", "isc"): "short to gnd; the source and sink figures are taken",
    ("OPA1612", "iout"): "rated drive; the short-circuit currents are taken",
    ("LM4562", "iout"): "rated drive; the short-circuit currents are taken",
    ("OP27", "en_10hz"): "the sheet's 3.0 at 1 kHz with its corner of 2.7 Hz gives 3.4 there, not 3.5",
    (
        "OP27",
        "in_10hz",
    ): "0.4 at 1 kHz with a corner of 140 Hz gives 1.46 there, not 1.7: rounded in the sheet",
}


@pytest.fixture(autouse=True)
def own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The person's own op-amp folder, not there yet."""
    folder = tmp_path / "config" / "opamps"
    monkeypatch.setattr(opamp_library, "user_opamp_folder", lambda: folder)
    return folder


def sheet_of(name: str) -> OpAmpSheet:
    sheet = find_sheet(name)
    assert sheet is not None
    return sheet


def density(white: float, corner_hz: float, frequency_hz: float) -> float:
    return white * math.sqrt(1.0 + corner_hz / frequency_hz)


def en_nv(m: OpAmpModel, frequency_hz: float) -> float:
    return 1e9 * density(m.noise_v_rthz, m.noise_corner_hz, frequency_hz)


def in_pa(m: OpAmpModel, frequency_hz: float) -> float:
    return 1e12 * density(m.noise_a_rthz, m.noise_current_corner_hz, frequency_hz)


# The row's value in the row's unit, from the model: each conversion is written out here, apart from the reader's.
FROM_MODEL: dict[str, Callable[[OpAmpModel], float]] = {
    "gbw": lambda m: m.gain_bandwidth_hz / 1e6,
    "avol": lambda m: m.open_loop_gain / 1e3,
    "avol_db": lambda m: 20 * math.log10(m.open_loop_gain),
    "slew": lambda m: min(m.slew_up_v_per_s, m.slew_down_v_per_s) / 1e6,
    "phase_margin": lambda m: m.phase_margin_deg,
    "ro": lambda m: m.output_resistance_ohm,
    "vos": lambda m: 1e3 * m.offset_v,
    "ib": lambda m: 1e9 * abs(m.bias_a),  # rows give the magnitude
    "ib_max": lambda m: 1e9 * abs(m.bias_a),
    "ios": lambda m: 1e9 * m.offset_current_a,
    "en": lambda m: en_nv(m, 1e3),
    "en_10k": lambda m: en_nv(m, 10e3),
    "en_30hz": lambda m: en_nv(m, 30.0),
    "corner_en": lambda m: m.noise_corner_hz,
    "in": lambda m: in_pa(m, 1e3),
    "corner_in": lambda m: m.noise_current_corner_hz,
    "vcm_lo": lambda m: m.input_low_v,
    "vcm_hi": lambda m: m.input_high_v,
    "vcm_range": lambda m: 15.0 - m.input_high_v,  # rows hold at ±15 V
    "vs_min": lambda m: m.supply_min_v,
    "vs_max": lambda m: m.supply_max_v,
    "iq": lambda m: 1e3 * m.supply_current_a,
    "iq_two": lambda m: 2e3 * m.supply_current_a,
    "pd": lambda m: 1e3 * 30.0 * m.supply_current_a,  # at ±15 V
}
LOADS = {"25k": 25e3, "10k": 10e3, "2k": 2e3, "600": 600.0}
AT_CURRENT = {"1mA": 1e-3, "10mA": 10e-3}
CURRENTS = {
    "isc": ("current_limit", "current_source", "current_sink"),
    "isource": ("current_source",),
    "isink": ("current_sink",),
    "isc_source": ("current_source",),
    "isc_sink": ("current_sink",),
    "iout": ("current_limit",),
}


@pytest.mark.parametrize("row", FIGURES, ids=lambda row: f"{row['type']}-{row['param']}")
def test_the_library_holds_the_published_figure(row: dict[str, object]) -> None:
    name, param, value = str(row["type"]), str(row["param"]), float(str(row["value"]))
    if param in NOT_MODELLED or (name, param) in TAKEN_OTHERWISE:
        assert name in REAL
        return
    sheet = sheet_of(name)
    if param.startswith("swing_"):
        check_swing(sheet, param, value)
    elif param in CURRENTS:
        stated = {f.name: 1e3 * f.value for f in sheet.figures}
        assert any(stated.get(key) == pytest.approx(value) for key in CURRENTS[param])
        assert 1e3 * sheet.model.current_limit_a <= value * (1 + 1e-12)
    elif name == "LM741" and param in ("en", "in"):  # given as white parts: see the worked example below
        assert value == (1e9 * sheet.model.noise_v_rthz if param == "en" else 1e12 * sheet.model.noise_a_rthz)
    else:
        within = (
            0.05 if param in ("en_10k", "en_30hz") else 1e-9 * abs(value)
        )  # half the last digit, or exact
        assert FROM_MODEL[param](sheet.model) == pytest.approx(value, abs=max(within, 1e-12))


def check_swing(sheet: OpAmpSheet, param: str, value: float) -> None:
    words = param.split("_")[1:]
    (load,) = (word for word in words if word in LOADS | AT_CURRENT)
    rows = [s for s in sheet.swings if s.load_ohm == LOADS.get(load) and s.current_a == AT_CURRENT.get(load)]
    assert rows
    if "lo" not in words:
        assert value in [s.high_v for s in rows]
    if "hi" not in words:
        assert value in [s.low_v for s in rows]


def test_every_published_type_but_those_without_a_speed_is_in_the_library() -> None:
    assert {str(row["type"]) for row in FIGURES} == set(REAL)
    assert len(REAL) >= 18


@pytest.mark.parametrize("name", REAL)
def test_a_figure_that_was_read_is_a_published_row_of_that_type(name: str) -> None:
    """No figure is called read but one that stands in the published rows, with the same source."""
    rows = [row for row in PUBLISHED["figure"] + PUBLISHED["noise"] if row["type"] == name]
    read_sources = {str(row["source"]) for row in rows if row["found"] == "read"}
    sheet = sheet_of(name)
    for figure in (*sheet.figures, *sheet.swings):
        if figure.found == "read":
            spelled = figure.source.replace("3rd ed., Example", "3rd ed. Example").removesuffix(" (741)")
            assert spelled in read_sources


@pytest.mark.parametrize("name", REAL)
def test_every_field_has_a_source_and_every_gap_is_named(name: str) -> None:
    sheet = sheet_of(name)
    model = sheet.model
    fields = {*FIGURE_FIELDS, "swing_high_v", "swing_low_v"}
    points = {name for name in ("swing_high_points", "swing_low_points") if getattr(model, name)}
    assert {field for field, _ in model.sources} == fields | points
    assert all(text for _, text in model.sources)
    assert set(model.assumed) == {
        field for field, text in model.sources if text.startswith(("class ", "shot noise"))
    }
    assert model.real
    assert model.input_overdrive in OVERDRIVES
    assert all(math.isfinite(getattr(model, field)) for field in fields - {"input_overdrive"})
    assert model.type == name
    assert sheet.class_name in CLASSES
    assert sheet.about
    assert sheet.data_sheet


def test_the_741_has_the_noise_of_the_worked_example() -> None:
    (row,) = PUBLISHED["noise"]
    model = find_opamp("LM741")
    assert 1e9 * model.noise_v_rthz == pytest.approx(row["enw_nv"], rel=1e-12)
    assert model.noise_corner_hz == row["fce_hz"]
    assert 1e12 * model.noise_a_rthz == pytest.approx(row["inw_pa"], rel=1e-12)
    assert model.noise_current_corner_hz == row["fci_hz"]


def test_figures_derived_from_two_published_ones_give_both_back() -> None:
    classic = find_opamp("NE5532")
    assert in_pa(classic, 30.0) == pytest.approx(2.7, abs=0.05)  # in row "in", cond: 2.7 at 30 Hz
    loop_gain = classic.gain_bandwidth_hz / 10e3 / 10 ** (30 / 20)
    closed_ohm = classic.output_resistance_ohm / abs(1 - 1j * loop_gain)
    (row,) = (r for r in FIGURES if (r["type"], r["param"]) == ("NE5532", "ro"))
    assert closed_ohm == pytest.approx(row["value"], abs=0.05)


def test_the_ne5532_of_2025_takes_its_gaps_from_the_same_die() -> None:
    rows = {row["param"]: row["value"] for row in PUBLISHED["figure"] if row["type"] == "RC4580"}
    model = find_opamp("NE5532-2025")
    assert model.slew_up_v_per_s / 1e6 == rows["slew"]
    assert model.gain_bandwidth_hz / 1e6 == rows["gbw"]
    assert en_nv(model, 1e3) == pytest.approx(rows["en"])
    assert 1e3 * model.offset_v == pytest.approx(rows["vos"])
    assert 1e9 * abs(model.bias_a) == pytest.approx(rows["ib"])
    assert model.supply_max_v < find_opamp("NE5532").supply_max_v


def test_bias_flows_out_of_pnp_inputs_only() -> None:
    """Common knowledge of the trade, from memory: these types have PNP inputs."""
    outward = {name for name in REAL if find_opamp(name).bias_a < 0}
    assert outward == {"LM358", "LM324", "LM833", "RC4558", "NE5532-2025"}


def loss_v(points: tuple[tuple[float, float], ...], current_a: float) -> float:
    return float(np.interp(current_a, *zip(*points, strict=True)))


@pytest.mark.parametrize(
    ("name", "loads"),
    [("LM741", (10e3, 2e3)), ("TL072", (10e3, 2e3)), ("RC4558", (10e3, 2e3)), ("NE5532", (2e3, 600.0))],
)
def test_the_stated_swings_are_those_of_the_line_at_the_currents_they_drive(
    name: str, loads: tuple[float, ...]
) -> None:
    """Rows of the data sheets at ±15 V: the output at that swing drives (15 V - drop) / load."""
    model = find_opamp(name)
    rows = {
        float(LOADS[p]): r["value"] for r in FIGURES if r["type"] == name and (p := r["param"][6:]) in LOADS
    }
    assert set(rows) == set(loads)
    for load_ohm, drop_v in rows.items():
        for points in (model.swing_high_points, model.swing_low_points):
            assert loss_v(points, (15.0 - drop_v) / load_ohm) == pytest.approx(drop_v, rel=1e-12)


@pytest.mark.parametrize("name", REAL)
def test_the_loss_of_swing_begins_at_no_current_and_grows_ever_faster(name: str) -> None:
    model = find_opamp(name)
    for points, lightest_v in (
        (model.swing_high_points, model.swing_high_v),
        (model.swing_low_points, model.swing_low_v),
    ):
        if points:
            assert points[0] == (0.0, lightest_v)
            slopes = [(b[1] - a[1]) / (b[0] - a[0]) for a, b in pairwise(points)]
            assert slopes == sorted(slopes)
            assert slopes[0] >= 0.0
            assert slopes[-1] > 0.0


def test_a_sheet_that_states_one_load_has_no_line() -> None:
    assert find_opamp("LF353").swing_high_points == ()
    assert find_opamp("OP07").swing_high_points == ()  # 2 V into 10 kohm and into 2 kohm


def test_phase_reversal_and_crossover_are_known_of_the_types_that_have_them() -> None:
    """Common knowledge of the trade, from memory."""
    assert {n for n in REAL if find_opamp(n).input_overdrive == "reverses"} == {
        *("TL072", "TL082", "LF353"),
        *("LM358", "LM324"),
    }
    assert {n for n in REAL if find_opamp(n).crossover_v > 0.0} == {"LM358", "LM324"}
    assert find_opamp("LM358").crossover_a == 50e-6
    assert "crossover_v" not in find_opamp("NE5532").assumed


def test_shot_noise_of_a_picoampere() -> None:
    """sqrt(2 q I) with the exact charge of the electron, by hand: 0.566 fA for 1 pA."""
    assert shot_noise_a_rthz(1e-12) == pytest.approx(0.566e-15, abs=0.0005e-15)
    assert shot_noise_a_rthz(-1e-12) == shot_noise_a_rthz(1e-12)


def test_built_in_types_are_without_limit() -> None:
    assert find_opamp("Ideal") is IDEAL
    assert find_opamp(" PERFECT ") is PERFECT
    assert not IDEAL.real
    assert not PERFECT.real
    assert find_sheet("ideal") is None
    assert opamp_names()[:2] == ("perfect", "ideal")


@pytest.mark.parametrize("spelled", ["tl072", "TL072", " Tl072 "])
def test_names_are_found_in_any_case(spelled: str) -> None:
    assert find_opamp(spelled).type == "TL072"
    assert known_type(spelled) == "TL072"


@pytest.mark.parametrize(
    ("name", "nearest"),
    [("TLO72", "TL072"), ("NE5535", "NE5532"), ("opa2143", "OPA2134"), ("ideel", "ideal")],
)
def test_an_unknown_type_is_answered_with_the_nearest(name: str, nearest: str) -> None:
    with pytest.raises(UnknownNameError, match=f"no op-amp type named {name}") as caught:
        find_opamp(name)
    assert caught.value.hint.startswith(f"did you mean {nearest}? types are perfect, ideal, ")
    assert caught.value.exit_code == 5


@pytest.mark.parametrize("name", ["", "zzz", "a\x1b[2J", "x" * 100_000])
def test_an_unknown_type_is_short_and_clean(name: str) -> None:
    with pytest.raises(UnknownNameError, match="types are") as caught:
        find_opamp(name)
    assert "\x1b" not in str(caught.value)
    assert len(str(caught.value)) < 500


OWN = """
title = "Mine"
class = "jfet"

[figures]
gain_bandwidth = { value = "7 MHz", source = "my bench", found = "read" }
slew = { value = "9 V/us", source = "my bench", found = "read" }
"""


def test_a_file_dropped_into_the_own_folder_is_a_type(own_folder: Path) -> None:
    own_folder.mkdir(parents=True)
    (own_folder / "Bench-1.toml").write_text(OWN, "utf-8")
    (own_folder / "TL072.toml").write_text(OWN, "utf-8")  # a bundled name means the bundled type everywhere
    (own_folder / "notes.txt").write_text("no op-amp", "utf-8")
    assert opamp_names()[-1] == "Bench-1"
    assert len(opamp_names()) == len(set(opamp_names())) == len(REAL) + 3
    mine = find_opamp("bench-1")
    assert (mine.type, mine.title, mine.gain_bandwidth_hz) == ("Bench-1", "Mine", 7e6)
    assert find_opamp("TL072").gain_bandwidth_hz == 4e6
    (own_folder / "Bench-1.toml").write_text(OWN.replace("7 MHz", "8 MHz"), "utf-8")
    assert find_opamp("Bench-1").gain_bandwidth_hz == 8e6


def test_a_type_is_read_from_a_file(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(OWN, "utf-8")
    assert find_opamp(str(path)).slew_up_v_per_s == 9e6
    assert known_type(str(path)) == str(path)
    with pytest.raises(OpAmpFileError, match="no such file") as caught:
        find_opamp(str(tmp_path / "none.toml"))
    assert caught.value.exit_code == 5
