"""The four bundled stages: figures by closed form, wiring by a small nodal solution written here."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from preview.circuit.figures import parse_figure
from preview.circuit.library import find_stage, stage_names
from preview.circuit.netlist import GND, Netlist, netlist
from preview.circuit.parts import Expect, PartKind
from preview.values.eseries import contains

NAMES = ("inverting-band-pass", "inverting-high-pass", "inverting-low-pass", "non-inverting-gain")
PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "filters.toml").read_text("utf-8"))

Response = Callable[[float], complex]


def low_pass(v: dict[str, float]) -> tuple[Response, Response]:
    """Gain and input impedance: R1 in, R2 || C1 back."""
    return (
        lambda s: -(v["R2"] / v["R1"]) / (1 + s * v["R2"] * v["C1"]),
        lambda s: v["R1"],
    )


def high_pass(v: dict[str, float]) -> tuple[Response, Response]:
    """R1 + C1 in, R2 back."""
    return (
        lambda s: -s * v["R2"] * v["C1"] / (1 + s * v["R1"] * v["C1"]),
        lambda s: v["R1"] + 1 / (s * v["C1"]),
    )


def band_pass(v: dict[str, float]) -> tuple[Response, Response]:
    """R1 + C1 in, R2 || C2 back."""
    return (
        lambda s: -s * v["R2"] * v["C1"] / ((1 + s * v["R1"] * v["C1"]) * (1 + s * v["R2"] * v["C2"])),
        lambda s: v["R1"] + 1 / (s * v["C1"]),
    )


def non_inverting(v: dict[str, float]) -> tuple[Response, Response]:
    """1 + (R2 || C2) / (R3 + C1), R1 across the input."""
    return (
        lambda s: 1 + s * v["R2"] * v["C1"] / ((1 + s * v["R3"] * v["C1"]) * (1 + s * v["R2"] * v["C2"])),
        lambda s: v["R1"],
    )


CLOSED_FORMS = dict(zip(NAMES, (band_pass, high_pass, low_pass, non_inverting), strict=True))


def nodal_gain(circuit: Netlist, frequency_hz: float) -> complex:
    """Gain of a netlist with ideal op-amps: node equations, source and op-amp currents as unknowns."""
    index = {node: i for i, node in enumerate(circuit.nodes)}
    count = len(index)
    size = count + 1 + len(circuit.opamps)
    a, b = np.zeros((size + 1, size + 1), complex), np.zeros(size + 1, complex)
    at = index | {GND: size}  # gnd gets a row and column of its own, cut off below
    s = 2j * np.pi * frequency_hz
    for branch in circuit.branches:
        y = {
            PartKind.RESISTOR: 1 / branch.value,
            PartKind.CAPACITOR: s * branch.value,
            PartKind.INDUCTOR: 1 / (s * branch.value),
        }[branch.kind]
        m, n = at[branch.a], at[branch.b]
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
    values = netlist(find_stage(name)).with_values(dict(expect.parts)).values
    gain, impedance = CLOSED_FORMS[name](values)
    figure = parse_figure(expect.what)

    def db(frequency_hz: float) -> float:
        return 20 * np.log10(abs(gain(2j * np.pi * frequency_hz)))

    if figure.at_hz is not None:
        s = 2j * np.pi * figure.at_hz
        match figure.name:
            case "gain_db":
                return db(figure.at_hz)
            case "phase_deg":
                return float(np.angle(gain(s), deg=True))
            case "input_impedance_ohm":
                return abs(impedance(s))
    if figure.name == "dc_gain_db":
        return 20 * np.log10(abs(gain(0j)))
    grid = np.linspace(-4, 10, 14001)  # decades
    k = int(np.argmax([db(10**x) for x in grid]))
    peak = minimize_scalar(
        lambda x: -db(10**x), bounds=(grid[max(k - 1, 0)], grid[min(k + 1, 14000)]), method="bounded"
    )
    top_db = -peak.fun
    if figure.name == "passband_gain_db":
        return float(top_db)
    corners = [
        10 ** brentq(lambda x: db(10**x) - top_db + 10 * np.log10(2), *span, xtol=1e-13)
        for span in ((-4, peak.x), (peak.x, 10))
        if (db(10 ** span[0]) < top_db - 3.02) or (db(10 ** span[1]) < top_db - 3.02)
    ]
    match figure.name:
        case "corner_hz":
            (corner,) = corners
            return float(corner)
        case "low_corner_hz":
            return float(corners[0])
        case "high_corner_hz":
            return float(corners[-1])
    raise AssertionError(figure)


def test_every_bundled_stage_is_listed() -> None:
    assert set(NAMES) <= set(stage_names())


@pytest.mark.parametrize("name", NAMES)
def test_every_expected_figure_comes_true_by_closed_form(name: str) -> None:
    for expect in find_stage(name).expects:
        computed = figure_value(name, expect)
        allowed = expect.within if expect.absolute else expect.within * abs(expect.value)
        assert abs(computed - expect.value) <= allowed, (expect, computed)


@pytest.mark.parametrize("name", NAMES)
def test_wiring_gives_the_closed_form_response(name: str) -> None:
    circuit = netlist(find_stage(name), load_ohm=2e3)
    gain, _ = CLOSED_FORMS[name](circuit.values)
    for frequency_hz in np.geomspace(1, 1e6, 25):
        expected = gain(2j * np.pi * frequency_hz)
        assert nodal_gain(circuit, frequency_hz) == pytest.approx(expected, rel=1e-9)


def test_source_resistance_adds_to_the_input_resistor_of_an_inverting_stage() -> None:
    circuit = netlist(find_stage("inverting-low-pass"), source_ohm=600.0)
    gain, _ = low_pass(circuit.values | {"R1": 10_600.0})
    assert nodal_gain(circuit, 1000.0) == pytest.approx(gain(2j * np.pi * 1000.0), rel=1e-12)


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
def test_drawing_shows_every_designator_once_with_room_for_a_value(name: str) -> None:
    stage = find_stage(name)
    lines = stage.drawing.splitlines()
    assert len(lines) <= 11
    assert max(map(len, lines)) <= 60
    for part in stage.parts:
        places = [(line, m) for line in lines for m in re.finditer(rf"\b{part.designator}\b", line)]
        assert len(places) == 1, part.designator
        line, match = places[0]
        assert line[match.end() : match.end() + 7].strip() == ""


@pytest.mark.parametrize("name", NAMES)
def test_every_part_says_what_it_does_and_has_a_standard_value(name: str) -> None:
    stage = find_stage(name)
    assert stage.about
    assert all(part.role for part in stage.parts)
    assert {opamp.type for opamp in stage.opamps} == {"ideal"}
    for part in stage.valued:
        assert part.tolerance_ratio is not None
        assert part.series is not None
        assert contains(part.value, part.series)
        assert bool(part.dielectric) == (part.kind is PartKind.CAPACITOR)


@pytest.mark.parametrize("name", NAMES)
def test_every_expected_figure_names_a_source(name: str) -> None:
    sources = [expect.source for expect in find_stage(name).expects]
    assert all(re.match(r"closed form|common practice|[A-Z][a-z]+, ", source) for source in sources)
    assert any(source.startswith("closed form") for source in sources)
    assert any("Example" in source for source in sources)
