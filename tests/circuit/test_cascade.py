"""Stages in a row: names, nodes, loading and the drawing."""

from __future__ import annotations

import numpy as np
import pytest

from preview.analysis.response import find_corners
from preview.circuit.cascade import cascade, numbered_drawing, stage_outputs
from preview.circuit.diodes import DIODE_TYPES
from preview.circuit.drive import parse_load, parse_source
from preview.circuit.library import find_stage, open_stages, stage_names, with_overrides
from preview.circuit.netlist import netlist
from preview.circuit.parts import (
    Diode,
    FixedVoltage,
    OpAmp,
    PartKind,
    Potentiometer,
    Stage,
    Supply,
    Switch,
    TwoTerminal,
)
from preview.errors import CircuitError, UnknownNameError
from preview.network.transfer import response

EVERY_KIND = Stage(
    "kinds",
    "Every kind",
    "",
    Supply(9.0, 0.0),
    (
        TwoTerminal("R1", PartKind.RESISTOR, ("in", "mid"), 10e3),
        TwoTerminal("R2", PartKind.RESISTOR, ("supply+", "mid"), 100e3),
        Potentiometer("P1", ("mid", "gnd"), "w", 10e3),
        Switch("S1", ("w", "mid"), closed=False),
        Diode("D1", "mid", "bias", "signal", DIODE_TYPES["signal"]),
        FixedVoltage("V1", ("bias", "gnd"), 4.5),
        OpAmp("U1", "w", "out", "out", "ideal"),
    ),
    outputs=("mid",),
    temperature_degc=60.0,
)


def low_pass(ohm: float = 10e3, farad: float = 1e-9) -> Stage:
    parts = (
        TwoTerminal("R1", PartKind.RESISTOR, ("in", "out"), ohm),
        TwoTerminal("C1", PartKind.CAPACITOR, ("out", "gnd"), farad),
    )
    return Stage("low-pass", "Low-pass", "R-C.", Supply(15.0, -15.0), parts)


def buffered() -> Stage:
    section = low_pass()
    nodes = {"out": "tap"}
    parts = tuple(
        TwoTerminal(p.designator, p.kind, tuple(nodes.get(n, n) for n in p.nodes), p.value)
        for p in section.valued
    )
    return Stage(
        "buffered", "Buffered", "", Supply(9.0, 0.0), (*parts, OpAmp("U1", "tap", "out", "out", "ideal"))
    )


def test_two_equal_sections_load_each_other_exactly_as_the_closed_form_says() -> None:
    # x = s R C: unloaded they would be 1 / (1 + x)^2, joined they are 1 / (1 + 3 x + x^2)
    circuit = netlist(cascade([low_pass(), low_pass()]))
    f0 = 1.0 / (2 * np.pi * 10e3 * 1e-9)
    f = f0 * np.geomspace(0.01, 100.0, 41)
    x = 1j * f / f0
    np.testing.assert_allclose(response(circuit, f), 1 / (1 + 3 * x + x**2), rtol=1e-9)
    at_f0 = np.abs(response(circuit, [f0]))[0]
    assert 20 * np.log10(at_f0) == pytest.approx(-20 * np.log10(3.0), abs=1e-9)  # -9.54 dB and not -6.02
    # |H|^2 = 1/2: (1 - w^2)^2 + 9 w^2 = 2, so w^2 = (sqrt(53) - 7) / 2; unloaded it would be sqrt(sqrt(2) - 1)
    (corner,) = find_corners(circuit)[1]
    assert corner == pytest.approx(f0 * np.sqrt((np.sqrt(53.0) - 7.0) / 2.0), rel=1e-6)


def test_sections_of_equal_resistance_lose_six_db_where_the_second_loads_the_first() -> None:
    # a divider of two 10k into the next one's 20k in all: 2/5 x 1/2 of the source, 1/2 x 1/2 if nothing loaded
    def divider() -> Stage:
        parts = (
            TwoTerminal("R1", PartKind.RESISTOR, ("in", "out"), 10e3),
            TwoTerminal("R2", PartKind.RESISTOR, ("out", "gnd"), 10e3),
        )
        return Stage("divider", "Divider", "", Supply(15.0, -15.0), parts)

    gain = response(netlist(cascade([divider(), divider()])), [1e3])[0]
    assert gain == pytest.approx(0.2)


def test_with_a_follower_between_them_the_gains_multiply() -> None:
    f = np.geomspace(100.0, 1e6, 30)
    joined = response(netlist(cascade([buffered(), low_pass(3e3, 5e-9)])), f)
    product = response(netlist(buffered()), f) * response(netlist(low_pass(3e3, 5e-9)), f)
    np.testing.assert_allclose(joined, product, rtol=1e-9)


def test_names_tell_the_stage_and_ends_are_joined() -> None:
    joined = cascade([buffered(), low_pass(), buffered()])
    assert [p.designator for p in joined.parts] == [
        *("1.R1", "1.C1", "1.U1", "2.R1", "2.C1", "3.R1", "3.C1", "3.U1"),
    ]
    assert netlist(joined).nodes == ("in", "1.tap", "1.out", "2.out", "3.tap", "out")
    assert stage_outputs(joined) == ("1.out", "2.out", "out")
    assert joined.outputs == ("1.out", "2.out")
    assert joined.supply == Supply(9.0, 0.0)
    assert joined.name == "buffered + low-pass + buffered"
    assert joined.opened_as == ("buffered", "low-pass", "buffered")


def test_one_stage_stays_as_it_is() -> None:
    assert cascade([low_pass()]) == low_pass()
    assert stage_outputs(low_pass()) == ("out",)
    assert open_stages(["inverting-low-pass"]) == find_stage("inverting-low-pass")


def test_every_kind_of_part_finds_its_nodes_and_rails_stay_shared() -> None:
    stage = EVERY_KIND
    alone = netlist(stage)
    joined = netlist(cascade([stage, stage]))
    assert {f.node for f in joined.fixed} == {"supply+", "1.bias", "2.bias"}
    assert joined.nodes.count("supply+") == 1
    assert set(joined.values) == {f"{k}.{name}" for k in (1, 2) for name in alone.values}
    assert [port.designator for port in joined.ports] == ["1.D1", "2.D1"]
    assert [port.law for port in joined.ports] == [alone.ports[0].law] * 2
    assert cascade([stage, stage]).outputs == ("1.out", "1.mid", "2.mid")
    hot_behind_cold = netlist(cascade([low_pass(), stage]))
    assert hot_behind_cold.ports[0].law == alone.ports[0].law


def test_an_output_between_the_stages_can_be_listened_to() -> None:
    joined = cascade([low_pass(), low_pass()])
    x = 1j
    first = response(netlist(joined, output="1.out"), [1.0 / (2 * np.pi * 1e-5)])[0]
    assert first == pytest.approx((1 + x) / (1 + 3 * x + x**2))


def test_the_load_stays_at_the_end_while_an_output_between_is_listened_to() -> None:
    joined = cascade([EVERY_KIND, EVERY_KIND])
    at = {}
    for output in ("out", "1.out", "1.mid", "2.mid"):
        circuit = netlist(joined, load=parse_load("10k"), output=output)
        assert circuit.output_node == output
        at[output] = next(b.a for b in circuit.branches if b.designator == "Rload")
    assert at == {"out": "out", "1.out": "out", "1.mid": "out", "2.mid": "2.mid"}


def test_source_and_load_are_at_the_ends() -> None:
    circuit = netlist(cascade([low_pass(), low_pass()]), source=parse_source("600"), load=parse_load("10k"))
    ends = {b.designator: (b.a, b.b) for b in circuit.branches}
    assert (ends["Rsource"], ends["Rload"]) == (("source", "in"), ("out", "gnd"))


def test_parts_and_op_amps_are_changed_by_their_number() -> None:
    joined = open_stages(["inverting-high-pass", "inverting-low-pass"])
    changed, notes = with_overrides(joined, {"2.r1": "4k7"}, {None: "TL072", "2.U1": "ideal"})
    assert {p.designator: p.value for p in changed.valued}["2.R1"] == 4700.0
    assert {p.designator: p.value for p in changed.valued}["1.R1"] == 10e3
    assert [u.type for u in changed.opamps] == ["TL072", "ideal"]
    assert notes[0] == "2.R1: 4k7 = 4.7 kΩ (4700 ohm)"
    with pytest.raises(UnknownNameError, match="has no part R1") as caught:
        with_overrides(joined, {"R1": "4k7"}, {})
    assert caught.value.hint.startswith("did you mean 1.R1 or 2.R1? it has 1.R1,")


def test_too_many_parts_are_refused() -> None:
    assert len(cascade([low_pass()] * 100).parts) == 200
    with pytest.raises(CircuitError, match="a cascade of 202 parts"):
        cascade([low_pass()] * 101)


@pytest.mark.parametrize("name", stage_names())
def test_the_drawing_of_every_stage_is_numbered_and_loses_nothing(name: str) -> None:
    stage = find_stage(name)
    names = [p.designator for p in stage.parts]
    for prefix in ("2.", "11."):
        drawn = numbered_drawing(stage.drawing, names, prefix)
        assert drawn.replace(prefix, "").split() == stage.drawing.split() or "─" * len(prefix) in drawn
        for designator in names:
            assert stage.drawing.count(designator) == 0 or f"{prefix}{designator}" in drawn


def test_a_drawing_without_room_becomes_wider_with_its_wires_in_line() -> None:
    drawn = "   ┌────┐\n   │R1│C1├─○\n ──┴──▒▒┬┘\n        │"
    assert numbered_drawing(drawn, ["R1", "C1"], "2.").splitlines() == [
        "   ┌────────┐",
        "   │2.R1│2.C1├─○",
        " ──┴────▒▒▒▒┬┘",
        "            │",
    ]


def test_stages_are_drawn_one_after_the_other() -> None:
    joined = cascade([find_stage("inverting-high-pass"), low_pass()])
    lines = joined.drawing.splitlines()
    assert lines[0] == "1  Inverting high-pass"
    assert lines[-2:] == ["2  Low-pass, from 1.out", "   no drawing: 2.R1, 2.C1"]
    assert "1.U1" in joined.drawing
