"""Every bundled stage: figures by closed form, wiring by a small nodal solution written here, drawing and words."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable
from dataclasses import replace
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from preview.circuit.cautions import warnings
from preview.circuit.elements import Charge, Netlist
from preview.circuit.figures import parse_figure
from preview.circuit.library import find_stage, stage_names
from preview.circuit.netlist import GND, netlist
from preview.circuit.opamp_library import opamp_names
from preview.circuit.parts import Diode, Expect, FixedVoltage, OpAmp, PartKind, Potentiometer, TwoTerminal
from preview.values.eseries import contains
from tests.closed_forms import GAIN

NAMES = tuple(sorted(p.name.removesuffix(".toml") for p in files("preview").joinpath("stages").iterdir()))
FIRST = ("inverting-band-pass", "inverting-high-pass", "inverting-low-pass", "non-inverting-gain")
WITH_FORMULA = tuple(sorted({name.partition(":")[0] for name in GAIN}))
"""A stage that is added needs no formula, but then its figures stand alone."""
PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "filters.toml").read_text("utf-8"))

Gain = Callable[[float], complex]

OF_THE_WIRING = {
    "f0_hz", "q", "low_q_f0_hz", "low_q", "input_impedance_ohm", "output_impedance_ohm",
}  # fmt: skip
"""Figures that the gain alone does not give; the wiring does, and the closed form beside each is the value."""


def ideal(name: str, output: str = "out", load_ohm: float | None = None) -> Netlist:
    """The stage with op-amps that have no limit but the rails."""
    stage = find_stage(name)
    for opamp in stage.opamps:
        stage = stage.with_part(replace(opamp, type="ideal"))
    return netlist(stage, output=output, load_ohm=load_ohm)


def slope_ohm(law: object) -> float:
    """Resistance of a diode at 0 V, ``n k T / (q Is)`` and its series resistance [ohm]."""
    assert not isinstance(law, Charge)
    return law.slope_v / law.saturation_a + law.series_ohm


def closed_form(name: str, circuit: Netlist, output: str = "out") -> Gain:
    """Gain by frequency, from the textbook formula and the circuit's values."""
    values = {b.designator.replace(".", ""): b.value for b in circuit.branches if b.designator != "Rload"}
    values |= {port.designator: slope_ohm(port.law) for port in circuit.ports}
    formula = GAIN[name if output == "out" else f"{name}:{output}"]
    return lambda frequency_hz: complex(formula(2j * np.pi * frequency_hz, **values))


def nodal_gain(circuit: Netlist, frequency_hz: float) -> complex:
    """Gain of a netlist with ideal op-amps: node equations, source and op-amp currents as unknowns."""
    held = {fixed.node for fixed in circuit.fixed}
    index = {node: i for i, node in enumerate(node for node in circuit.nodes if node not in held)}
    count = len(index)
    size = count + 1 + len(circuit.opamps)
    a, b = np.zeros((size + 1, size + 1), complex), np.zeros(size + 1, complex)
    at = index | dict.fromkeys((GND, *held), size)  # gnd gets a row and column of its own, cut off below
    s = 2j * np.pi * frequency_hz
    admittances = [
        (
            branch.a,
            branch.b,
            {
                PartKind.RESISTOR: 1 / branch.value,
                PartKind.CAPACITOR: s * branch.value,
                PartKind.INDUCTOR: 1 / (s * branch.value),
            }[branch.kind],
        )
        for branch in circuit.branches
    ]
    admittances += [(port.a, port.b, 1 / slope_ohm(port.law)) for port in circuit.ports]
    for node_a, node_b, y in admittances:
        m, n = at[node_a], at[node_b]
        a[m, m] += y
        a[n, n] += y
        a[m, n] -= y
        a[n, m] -= y
    a[at[circuit.input_node], count] = a[count, at[circuit.input_node]] = b[count] = 1
    for k, opamp in enumerate(circuit.opamps, count + 1):
        a[at[opamp.out], k] = a[k, at[opamp.plus]] = 1
        a[k, at[opamp.minus]] = -1
    return complex(np.linalg.solve(a[:size, :size], b[:size])[at[circuit.output_node]])


def figure_value(name: str, expect: Expect) -> float:
    """The expected figure from the closed form."""
    gain = closed_form(name, ideal(name, expect.output).with_values(dict(expect.parts)), expect.output)
    figure = parse_figure(expect.what)

    def db(frequency_hz: float) -> float:
        return 20 * np.log10(max(abs(gain(frequency_hz)), 1e-30))

    if figure.at_hz is not None:
        match figure.name:
            case "gain_db":
                return db(figure.at_hz)
            case "phase_deg":
                return float(np.angle(gain(figure.at_hz), deg=True))
            case "group_delay_s":
                step = 1e-4 * figure.at_hz
                turn = np.angle(gain(figure.at_hz + step) / gain(figure.at_hz - step))
                return float(-turn / (2 * np.pi * 2 * step))
    if figure.name == "dc_gain_db":
        return db(1e-9)
    grid = np.linspace(-4, 10, 14001)  # decades
    rough = np.array([db(10**x) for x in grid])

    def turning_point(sign: float) -> tuple[float, float]:
        k = int(np.argmin(sign * rough))
        span = (grid[max(k - 1, 0)], grid[min(k + 1, 14000)])
        found = minimize_scalar(
            lambda x: sign * db(10**x), bounds=span, method="bounded", options={"xatol": 1e-9}
        )
        return float(found.x), float(sign * found.fun)

    if figure.name.startswith("notch"):
        place, depth_db = turning_point(+1)
        return 10**place if figure.name == "notch_hz" else depth_db
    place, top_db = turning_point(-1)
    if figure.name == "peak_hz":
        return 10**place
    if figure.name == "passband_gain_db":
        return top_db
    over = rough - top_db + 10 * np.log10(2) > 0
    corners = [
        10 ** brentq(lambda x: db(10**x) - top_db + 10 * np.log10(2), grid[k], grid[k + 1], xtol=1e-13)
        for k in np.flatnonzero(over[1:] != over[:-1])
    ]
    match figure.name:
        case "corner_hz":
            (corner,) = corners
            return float(corner)
        case "low_corner_hz":
            return float(corners[0])
        case "high_corner_hz":
            return float(corners[-1])
        case "bandwidth_hz":
            low_hz, high_hz = corners
            return float(high_hz - low_hz)
    raise AssertionError(figure)


def test_every_bundled_stage_is_listed_and_every_formula_is_of_one() -> None:
    assert set(NAMES) <= set(stage_names())
    assert set(WITH_FORMULA) <= set(NAMES)
    further = {f"{name}:{output}" for name in WITH_FORMULA for output in find_stage(name).outputs}
    assert further == {name for name in GAIN if ":" in name}


@pytest.mark.parametrize("name", stage_names())
def test_a_stage_says_what_each_part_does_and_which_ones_to_turn(name: str) -> None:
    stage = find_stage(name)
    assert stage.about
    assert stage.expects
    assert all(part.role for part in stage.parts)
    assert all(part.series and part.tolerance_ratio for part in stage.valued)
    assert any(part.adjust for part in stage.settable)


@pytest.mark.parametrize("name", WITH_FORMULA)
def test_every_expected_figure_comes_true_by_closed_form(name: str) -> None:
    for expect in find_stage(name).expects:
        if (
            parse_figure(expect.what).name in OF_THE_WIRING
            or "gain-bandwidth over noise gain" in expect.source
        ):
            continue
        computed = figure_value(name, expect)
        allowed = expect.within if expect.absolute else expect.within * abs(expect.value)
        off = abs(computed - expect.value)
        if expect.what.startswith("phase_deg"):
            off = min(off, abs(off - 360))
        assert off <= allowed, (expect, computed)


@pytest.mark.parametrize("name", WITH_FORMULA)
def test_wiring_gives_the_closed_form_response(name: str) -> None:
    for output in ("out", *find_stage(name).outputs):
        circuit = ideal(name, output)
        if output in {opamp.out for opamp in circuit.opamps}:  # a load changes nothing then
            circuit = ideal(name, output, load_ohm=2e3)
        turned = {c.designator: 0.3 for c in circuit.controls}
        for found in (circuit, circuit.with_values(turned)) if turned else (circuit,):
            gain = closed_form(name, found, output)
            for frequency_hz in np.geomspace(1, 1e6, 25):
                expected = gain(frequency_hz)
                assert nodal_gain(found, frequency_hz) == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_source_resistance_adds_to_the_input_resistor_of_an_inverting_stage() -> None:
    circuit = netlist(find_stage("inverting-low-pass"), source_ohm=600.0)
    values = {k: v for k, v in circuit.values.items() if k != "Rsource"} | {"R1": 10_600.0}
    gain = GAIN["inverting-low-pass"](2j * np.pi * 1000.0, **values)
    assert nodal_gain(circuit, 1000.0) == pytest.approx(gain, rel=1e-12)


@pytest.mark.parametrize(
    ("name", "table", "row_id", "renamed", "figures"),
    [
        (
            "inverting-low-pass",
            "example",
            "franco_3_4",
            {"R1": "R1", "R2": "R2", "C1": "C"},
            {"corner_hz": "f_hz", "passband_gain_db": "gain_db", "phase_deg_at_9950_hz": "phase_deg_at_0db"},
        ),
        (
            "inverting-high-pass",
            "example",
            "franco_4_4_first_order_hp",
            {"R1": "R1", "C1": "C1", "R2": "Rf"},
            {"corner_hz": "f_hz", "passband_gain_db": "hf_gain_db"},
        ),
        (
            "inverting-band-pass",
            "example",
            "franco_3_5",
            {"R1": "R1", "R2": "R2", "C1": "C1", "C2": "C2"},
            {"low_corner_hz": "f_low_hz", "high_corner_hz": "f_high_hz", "passband_gain_db": "gain_db"},
        ),
    ],
)
def test_worked_examples_in_the_stage_file_are_the_published_ones(
    name: str, table: str, row_id: str, renamed: dict[str, str], figures: dict[str, str]
) -> None:
    row = next(row for row in PUBLISHED[table] if row["id"] == row_id)
    parts = {ours: row["parts"][theirs] for ours, theirs in renamed.items()}
    expects = [e for e in find_stage(name).expects if dict(e.parts) == pytest.approx(parts, rel=1e-12)]
    found = {e.what: e.value for e in expects}
    for what, key in figures.items():
        assert found[what] == row["published"][key]


def test_low_corner_of_gayakwad_6_1_with_its_source_of_50_ohm() -> None:
    # Gayakwad, Op-Amps and Linear Integrated Circuits, Example 6.1: printed 10.61 kHz, half a digit is 5 Hz.
    row = next(row for row in PUBLISHED["bandwidth"] if row["id"] == "gayakwad_6_1_ac_inverting")
    circuit = netlist(find_stage("inverting-high-pass"), source_ohm=row["Rin"])
    circuit = circuit.with_values({"R1": row["R1"], "R2": row["Rf"], "C1": row["Ci"]})
    top_db = 20 * np.log10(row["Rf"] / (row["R1"] + row["Rin"]))

    def below_top_db(frequency_hz: float) -> float:
        return 20 * np.log10(abs(nodal_gain(circuit, frequency_hz))) - top_db + 10 * np.log10(2)

    assert brentq(below_top_db, 100, 1e6) == pytest.approx(row["published_low_hz"], abs=5)


def test_lossy_integrator_corner_of_fiore_10_1() -> None:
    # Fiore, Op Amps and Linear Integrated Circuits, Example 10.1, p. 354: printed 159 Hz.
    row = next(row for row in PUBLISHED["integrator"] if row["id"] == "fiore_10_1")
    expects = find_stage("inverting-low-pass").expects
    ours = next(e for e in expects if dict(e.parts) == {"R1": row["Ri"], "R2": row["Rf"], "C1": row["C"]})
    assert (ours.what, ours.value) == ("corner_hz", row["published_flow_hz"])


@pytest.mark.parametrize("name", NAMES)
def test_nothing_in_a_bundled_stage_is_hardly_meant(name: str) -> None:
    assert list(warnings(netlist(find_stage(name)))) == []


@pytest.mark.parametrize("name", NAMES)
def test_drawing_shows_every_designator_once_with_room_for_a_value(name: str) -> None:
    stage = find_stage(name)
    lines = stage.drawing.splitlines()
    width, height = (60, 11) if name in FIRST else (76, 14)
    assert len(lines) <= height
    assert max(map(len, lines)) <= width
    drawn = re.findall(r"\b[A-Z][0-9]+\b", stage.drawing)
    assert sorted(drawn) == sorted(part.designator for part in stage.parts)
    for part in stage.parts:
        ((line, match),) = [(line, m) for line in lines for m in re.finditer(rf"\b{part.designator}\b", line)]
        room = len(part.type) + 2 if isinstance(part, OpAmp) else 6
        assert line[match.end() : match.end() + room].strip() == "", part.designator


@pytest.mark.parametrize("name", NAMES)
def test_every_part_says_what_it_does_and_has_a_standard_value(name: str) -> None:
    stage = find_stage(name)
    assert stage.about
    assert all(part.role for part in stage.parts)
    for opamp in stage.opamps:
        assert opamp.type in ("ideal",) if name in FIRST else opamp.type in opamp_names()
    for part in stage.parts:
        if isinstance(part, TwoTerminal):
            assert part.tolerance_ratio is not None
            assert part.series is not None
            assert contains(part.value, part.series), part.designator
            assert bool(part.dielectric) == (part.kind is PartKind.CAPACITOR)
        else:
            assert isinstance(part, OpAmp | Potentiometer | Diode | FixedVoltage)


@pytest.mark.parametrize("name", NAMES)
def test_every_expected_figure_names_a_source(name: str) -> None:
    sources = [expect.source for expect in find_stage(name).expects]
    named = r"closed form|common practice|[A-Z][a-z]+, |(IEC|ITU-R|TI) "
    assert all(re.match(named, source) for source in sources)
    assert any(source.startswith("closed form") for source in sources)
    if name in FIRST:
        assert any("Example" in source for source in sources)


@pytest.mark.parametrize("name", sorted(set(WITH_FORMULA) - set(FIRST)))
def test_every_stage_is_held_with_ideal_op_amps_and_with_its_own(name: str) -> None:
    assert {expect.opamp for expect in find_stage(name).expects} == {"ideal", ""}


def test_the_stages_of_the_trade_are_there() -> None:
    assert len(WITH_FORMULA) >= 45
    second_order = {f"sallen-key-{band}-pass{gain}" for band in ("low", "high") for gain in ("", "-gain")}
    second_order |= {f"multiple-feedback-{band}-pass" for band in ("low", "high", "band")}
    assert second_order | {"state-variable", "two-integrator-biquad", "twin-t-notch"} <= set(NAMES)
    assert {"tone-control", "presence-bell", "riaa-replay", "soft-limiter"} <= set(NAMES)
    assert {"instrumentation-amplifier", "charge-amplifier", "transimpedance"} <= set(NAMES)
