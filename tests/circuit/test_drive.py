"""Sources, cables and loads: by figures and by trade names."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from preview.analysis.response import find_corners
from preview.circuit.cautions import warnings
from preview.circuit.drive import (
    IDEAL_SOURCE,
    LOADS,
    NO_LOAD,
    SOURCES,
    LoadModel,
    SourceModel,
    exact_load,
    exact_source,
    parse_load,
    parse_source,
    said,
)
from preview.circuit.library import find_stage
from preview.circuit.netlist import Netlist, netlist
from preview.circuit.parts import PartKind, Stage, Supply, TwoTerminal
from preview.errors import CircuitError, NotationError, PartValueError
from preview.network.transfer import input_impedance, output_impedance, response

KINDS = {"R": PartKind.RESISTOR, "C": PartKind.CAPACITOR, "L": PartKind.INDUCTOR}


def stage(*rows: tuple[str, str, str, float]) -> Stage:
    parts = tuple(TwoTerminal(name, KINDS[name[0]], (a, b), value) for name, a, b, value in rows)
    return Stage("test", "Test", "", Supply(15.0, -15.0), parts)


def shape(circuit: Netlist) -> list[tuple[str, str, str]]:
    return [(b.designator, b.a, b.b) for b in circuit.branches]


@pytest.mark.parametrize(
    ("text", "model"),
    [
        ("600", SourceModel(600.0)),
        ("0", IDEAL_SOURCE),
        ("none", IDEAL_SOURCE),
        ("Ideal", IDEAL_SOURCE),
        ("7k5 + 2.5 H", SourceModel(7.5e3, 2.5)),
        ("2H5+7k5", SourceModel(7.5e3, 2.5)),
        ("20 nF", SourceModel(capacitance_farad=20e-9)),
        ("1k + 2u2F + 10 mH", SourceModel(1e3, 10e-3, 2.2e-6)),
        ("7k5 + 2.5H, winding 120p, cable 500p", SourceModel(7.5e3, 2.5, 0.0, 120e-12, 500e-12)),
        ("7k5 + 2.5H, cable 500p, winding 120p", SourceModel(7.5e3, 2.5, 0.0, 120e-12, 500e-12)),
        ("cable 1n", SourceModel(cable_farad=1e-9)),
        ("dynamic microphone", SourceModel(200.0, name="dynamic microphone")),
        (" Dynamic  MICROPHONE , cable 1n", SourceModel(200.0, cable_farad=1e-9, name="dynamic microphone")),
    ],
)
def test_a_source_is_read_from_words_and_values(text: str, model: SourceModel) -> None:
    assert parse_source(text) == model
    assert parse_source(exact_source(model)) == model


@pytest.mark.parametrize(
    ("text", "model"),
    [
        ("none", NO_LOAD),
        ("open", NO_LOAD),
        ("10k", LoadModel(10e3)),
        ("10k || 220p", LoadModel(10e3, 220e-12)),
        ("10k||220p, cable 1n", LoadModel(10e3, 220e-12, 1e-9)),
        ("cable 1n", LoadModel(cable_farad=1e-9)),
        ("headphones 32 ohm", LoadModel(32.0, name="headphones 32 ohm")),
        ("line input, cable 3n", LoadModel(10e3, cable_farad=3e-9, name="line input")),
    ],
)
def test_a_load_is_read_from_words_and_values(text: str, model: LoadModel) -> None:
    assert parse_load(text) == model
    assert parse_load(exact_load(model)) == model


@pytest.mark.parametrize("name", SOURCES)
def test_every_named_source_is_written_and_read_alike(name: str) -> None:
    assert parse_source(exact_source(parse_source(name))) == SOURCES[name]
    assert said(SOURCES[name]).endswith("(typical)")


@pytest.mark.parametrize("name", LOADS)
def test_every_named_load_is_written_and_read_alike(name: str) -> None:
    assert parse_load(exact_load(parse_load(name))) == LOADS[name]
    assert said(LOADS[name]).endswith("(typical)")


def test_values_without_a_short_code_come_back_to_the_last_digit() -> None:
    source = SourceModel(7123.456789, 2.3456789, 1.23456789e-9, 1.1111111e-10, 2.2222222e-10)
    assert parse_source(exact_source(source)) == source
    load = LoadModel(9876.54321, 1.23456789e-10, 3.3333333e-10)
    assert parse_load(exact_load(load)) == load


def test_figures_are_said_with_their_units() -> None:
    assert said(parse_source("passive coil pickup, cable 500p")) == (
        "7.5 kΩ + 3 H, winding 120 pF, cable 500 pF (typical)"
    )
    assert said(parse_load("10k || 220p, cable 1n")) == "10 kΩ || 220 pF, cable 1 nF"
    assert (said(IDEAL_SOURCE), said(NO_LOAD)) == ("ideal", "none")


@pytest.mark.parametrize(
    ("text", "message", "hint"),
    [
        ("15n", "could be a capacitance or an inductance", "write 15nF or 15nH"),
        ("600 + 1k", "two values are resistances in series", "one that stands for both"),
        ("dynamic microfone", "no such source", "did you mean dynamic microphone?"),
        ("tuba", "no such source", "names are line output"),
        ("600, 5k", "after a comma a source has its cable or its winding", "cable 500p"),
        ("600, cable 1n, cable 2n", "each once", ""),
        ("7,5k", '"5k": after a comma', ""),
        ("-600", "negative", ""),
        ("", "empty", ""),
        ("600,", "empty", ""),
        ("600 +", "empty", ""),
        ("cable", "empty", ""),
        ("cable 500", "no unit", ""),
        ("4z7", "no such prefix", "a name"),
        ("1" * 300, "longer than", ""),
    ],
)
def test_what_is_not_a_source_is_refused_with_the_cure(text: str, message: str, hint: str) -> None:
    with pytest.raises(NotationError) as caught:
        parse_source(text)
    assert message in caught.value.message
    assert hint in caught.value.hint


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("0", "zero"),
        ("10k || ", "empty"),
        ("220p", "no such prefix 'p'"),
        ("10k, cable 1n, cable 1n", "its cable, once"),
        ("10k, winding 1n", "its cable, once"),
        ("headphone", "no such load"),
    ],
)
def test_what_is_not_a_load_is_refused(text: str, message: str) -> None:
    with pytest.raises(NotationError, match=message):
        parse_load(text)


_PIECES = [
    *SOURCES,
    *LOADS,
    "cable",
    "winding",
    "600",
    "7k5",
    "2.5 H",
    "20 nF",
    "15n",
    "+",
    ",",
    "||",
    "-",
    "\x1b",
    "e9",
]


@given(st.lists(st.sampled_from(_PIECES), max_size=6).map(" ".join) | st.text(max_size=30))
def test_any_text_is_a_source_and_a_load_or_is_refused_in_a_line(text: str) -> None:
    for parse, exact in ((parse_source, exact_source), (parse_load, exact_load)):
        said_instead = ""
        try:
            model = parse(text)
        except NotationError as error:
            said_instead = str(error)
        else:
            assert parse(exact(model)) == model
        assert not {"\n", "\x1b"} & set(said_instead)


def test_the_source_stands_in_a_row_before_in_and_its_capacitance_across() -> None:
    circuit = netlist(
        stage(("R1", "in", "out", 1e3), ("R2", "out", "gnd", 1e6)),
        source=parse_source("7k5 + 2.5H + 20 nF, winding 120p, cable 500p"),
        load=parse_load("10k || 220p, cable 1n"),
    )
    assert circuit.input_node == "source"
    assert shape(circuit) == [
        ("Rsource", "source", "source.1"),
        ("Lsource", "source.1", "source.2"),
        ("Csource", "source.2", "in"),
        ("Cwinding", "in", "gnd"),
        ("Ccable", "in", "gnd"),
        ("R1", "in", "out"),
        ("R2", "out", "gnd"),
        ("Rload", "out", "gnd"),
        ("Cload", "out", "gnd"),
    ]
    assert circuit.values["Cload"] == pytest.approx(1.22e-9)


def test_impossible_figures_are_refused_by_name() -> None:
    wired = stage(("R1", "in", "out", 1e3), ("R2", "out", "gnd", 1e6))
    for source, message in (
        (SourceModel(1.0, 1e9), "source inductance"),
        (SourceModel(cable_farad=-1e-9), "source capacitance: a capacitor must be above zero"),
    ):
        with pytest.raises(PartValueError, match=message):
            netlist(wired, source=source)


def test_430_ohm_before_a_47_ohm_filter_moves_its_corner() -> None:
    # By hand, 47 ohm into 1 uF: 1 / (2 pi 47 1u) = 3386.28 Hz; 430 ohm before it: 1 / (2 pi 477 1u) = 333.66 Hz.
    wired = stage(("R1", "in", "out", 47.0), ("C1", "out", "gnd", 1e-6))
    assert find_corners(netlist(wired))[1] == pytest.approx([3386.28], abs=0.005)
    assert find_corners(netlist(wired, source=parse_source("430")))[1] == pytest.approx([333.66], abs=0.005)


def test_a_load_divides_and_moves_the_corner() -> None:
    # 10k into 1 nF, loaded by 10k: half the gain, and the corner of 5k into 1 nF
    wired = stage(("R1", "in", "out", 10e3), ("C1", "out", "gnd", 1e-9))
    passband_db, corners = find_corners(netlist(wired, load=parse_load("10k")))
    assert passband_db == pytest.approx(20 * np.log10(0.5), abs=1e-6)
    assert corners == pytest.approx([1 / (2 * np.pi * 5e3 * 1e-9)], rel=1e-6)


def test_a_piezo_with_a_cable_is_a_capacitive_divider_and_a_high_pass_with_the_input() -> None:
    # V behind Cp, cable Cc and R across: H = s R Cp / (1 + s R (Cp + Cc))
    wired = stage(("R1", "in", "gnd", 1e6), ("R2", "in", "out", 1.0), ("R3", "out", "gnd", 1e12))
    circuit = netlist(wired, source=parse_source("piezo disc, cable 5n"))
    f = np.array([1.0, 10.0, 1e3])
    s = 2j * np.pi * f
    np.testing.assert_allclose(
        response(circuit, f), s * 1e6 * 20e-9 / (1 + s * 1e6 * 25e-9), rtol=1e-5, atol=0
    )


def test_a_coil_pickup_resonates_with_its_cable_and_is_damped_by_the_input() -> None:
    # R + L in series, C and Rin across: H = Zp / (Zp + R + s L), Zp = Rin / (1 + s Rin C)
    wired = stage(("R1", "in", "gnd", 1e6), ("R2", "in", "out", 1.0), ("R3", "out", "gnd", 1e12))
    circuit = netlist(wired, source=parse_source("passive coil pickup, cable 500p"))
    f = np.geomspace(20.0, 20e3, 50)
    s = 2j * np.pi * f
    across = 1e6 / (1 + s * 1e6 * 620e-12)
    np.testing.assert_allclose(response(circuit, f), across / (across + 7.5e3 + s * 3.0), rtol=1e-5, atol=0)


def test_impedances_are_the_stages_own_whatever_is_connected() -> None:
    wired = stage(("R1", "in", "out", 1e3), ("C1", "out", "gnd", 1e-6), ("R2", "out", "gnd", 1e6))
    bare = netlist(wired)
    f = np.geomspace(10.0, 1e5, 20)
    driven = netlist(wired, source=parse_source("passive coil pickup, cable 1n"))
    np.testing.assert_allclose(input_impedance(driven, f), input_impedance(bare, f), rtol=1e-9)
    loaded = netlist(wired, load=parse_load("10k || 10n"))
    np.testing.assert_allclose(output_impedance(loaded, f), output_impedance(bare, f), rtol=1e-9)
    ideal = netlist(wired, source=parse_source("cable 1n"))
    np.testing.assert_allclose(response(ideal, f), response(bare, f), rtol=1e-12)


def test_every_trade_name_stands_in_the_readme_with_its_figures() -> None:
    readme = " ".join((Path(__file__).parents[2] / "README.md").read_text("utf-8").split())
    for name, model in {**SOURCES, **LOADS}.items():
        figures = said(model).removesuffix(" (typical)").replace(", winding", " with")
        assert f"`{name}`" in readme
        assert f"`{name}` {figures}" in readme or figures.removesuffix(" Ω") in name


# ---- a source of a capacitor before another capacitor ----


def test_a_piezo_sensor_on_a_charge_amplifier_divides_its_charge_as_the_closed_form_says() -> None:
    # 1 nF, then 300 pF of cable, then C1 of 1 nF into the sum: C1 sees Cs / (Cs + Ccable + C1) of the volts; C2 is C1.
    stage = find_stage("charge-amplifier")
    stage = stage.with_part(replace(stage.opamps[0], type="ideal"))
    circuit = netlist(stage, source=parse_source("piezo accelerometer, cable 300p"))
    assert abs(response(circuit, [1e3])[0]) == pytest.approx(1.0 / 2.3, rel=1e-4)
    (leakage,) = (branch for branch in circuit.branches if branch.designator == "Rleakage")
    assert (leakage.a, leakage.b, leakage.value) == ("in", "gnd", 1e12)
    assert abs(input_impedance(circuit, [1e3])[0]) == pytest.approx(1 / (2 * np.pi * 1e3 * 1e-9), rel=1e-3)
    (doubt,) = warnings(circuit)
    assert doubt[0] == "node in lies between capacitors: taken to leak to gnd through 1 TΩ"
    assert "10 MΩ from in to gnd" in doubt[1]


@pytest.mark.parametrize(
    "name", ["differentiator", "rc-high-pass", "inverting-band-pass", "single-supply-gain"]
)
def test_a_capacitive_source_before_a_coupling_capacitor_is_computed(name: str) -> None:
    circuit = netlist(find_stage(name), source=parse_source("20 nF"))
    assert np.isfinite(response(circuit, [10.0, 1e3, 1e5])).all()


def test_leakage_is_no_path_for_the_current_of_an_input_or_a_diode() -> None:
    for name in ("rc-low-pass", "sallen-key-low-pass", "twin-t-notch"):
        with pytest.raises(CircuitError, match=r"floating: .* the \+ input of U1"):
            netlist(find_stage(name), source=parse_source("20 nF"))
    # one that has a path needs none
    circuit = netlist(find_stage("non-inverting-gain"), source=parse_source("20 nF"))
    assert "Rleakage" not in {branch.designator for branch in circuit.branches}
