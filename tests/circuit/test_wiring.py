"""From parts to the elements of a netlist, and settings that change in it."""

from __future__ import annotations

import math
import pickle

import pytest

from preview.circuit.controls import CLOSED_OHM, OPEN_OHM
from preview.circuit.diodes import DIODE_TYPES, junction
from preview.circuit.netlist import Branch, Charge, FixedNode, Junction, Netlist, Port, netlist
from preview.circuit.parts import (
    Diode,
    FixedVoltage,
    Part,
    PartKind,
    Potentiometer,
    Stage,
    Supply,
    Switch,
    TwoTerminal,
)
from preview.circuit.wiring import LEAK_OHM
from preview.errors import CircuitError, PartValueError, UnknownNameError

R, C = PartKind.RESISTOR, PartKind.CAPACITOR
R1 = TwoTerminal("R1", R, ("in", "out"), 1e4)
R2 = TwoTerminal("R2", R, ("out", "gnd"), 1e4)


def stage(*parts: Part, **fields: object) -> Stage:
    return Stage("test", "Test", "", Supply(15.0, -12.0), parts, **fields)  # type: ignore[arg-type]


def branches(circuit: Netlist) -> list[tuple[str, str, str, float]]:
    return [(b.designator, b.a, b.b, b.value) for b in circuit.branches]


def test_a_potentiometer_is_two_resistors() -> None:
    pot = Potentiometer("P1", ("gnd", "in"), "out", 1e4, "linear", 0.25)
    circuit = netlist(stage(pot))
    assert branches(circuit) == [
        ("P1.a", "gnd", "out", pytest.approx(2500.0)),
        ("P1.b", "out", "in", pytest.approx(7500.0)),
    ]
    assert circuit.values == {"P1": 0.25}
    turned = circuit.with_values({"P1": 0.75})
    assert [b.value for b in turned.branches] == pytest.approx([7500.0, 2500.0])
    assert turned.values == {"P1": 0.75}
    assert turned.with_values({"P1": 0.25}) == circuit


def test_a_variable_resistor_has_no_branch_from_the_wiper_to_itself() -> None:
    circuit = netlist(stage(R2, Potentiometer("P1", ("in", "out"), "in", 1e4, "log", 0.5)))
    assert branches(circuit)[1:] == [("P1.b", "in", "out", pytest.approx(8750.0))]
    assert circuit.with_values({"P1": 1.0}).branches[1].value == pytest.approx(1.0)


def test_a_switch_is_a_resistor_that_changes_by_twelve_decades() -> None:
    circuit = netlist(stage(R1, R2, Switch("S1", ("in", "out"), closed=False)))
    assert circuit.branches[-1] == Branch("S1", R, "in", "out", OPEN_OHM, part="S1")
    assert circuit.values == {"R1": 1e4, "R2": 1e4, "S1": 0.0}
    closed = circuit.with_values({"S1": 1.0, "R1": 2e4})
    assert closed.values == {"R1": 2e4, "R2": 1e4, "S1": 1.0}
    assert closed.branches[-1].value == CLOSED_OHM
    assert closed.nodes == circuit.nodes


def test_a_diode_is_a_port_with_its_leak_and_its_capacitance() -> None:
    diode = Diode("D1", "out", "gnd", "signal", DIODE_TYPES["signal"])
    circuit = netlist(stage(R1, diode))
    assert circuit.branches[1:] == (
        Branch("D1.leak", R, "out", "gnd", LEAK_OHM, part="D1"),
        Branch("D1.junction", C, "out", "gnd", 4e-12, part="D1"),
    )
    assert circuit.ports == (Port("D1", "out", "gnd", junction(DIODE_TYPES["signal"], 25.0)),)
    assert circuit.values == {"R1": 1e4}


def test_a_diode_has_the_stages_temperature_unless_it_has_its_own() -> None:
    model = DIODE_TYPES["signal"]
    parts = (
        R1,
        Diode("D1", "out", "gnd", "signal", model),
        Diode("D2", "gnd", "out", "signal", model, -10.0),
    )
    circuit = netlist(stage(*parts, temperature_degc=60.0))
    assert [port.law for port in circuit.ports] == [junction(model, 60.0), junction(model, -10.0)]
    assert circuit.temperature_degc == 60.0


def test_a_diode_alone_holds_a_node_and_leads_the_signal_on() -> None:
    diode = Diode("D1", "in", "out", "schottky", DIODE_TYPES["schottky"])
    assert netlist(stage(diode, TwoTerminal("C1", C, ("out", "gnd"), 1e-6))).output_node == "out"


def test_a_class_2_capacitor_is_a_capacitor_and_the_charge_it_lacks() -> None:
    part = TwoTerminal("C1", C, ("out", "gnd"), 1e-6, half_v=12.0)
    circuit = netlist(stage(R1, part))
    assert circuit.branches[1] == Branch("C1", C, "out", "gnd", 1e-6)
    assert circuit.ports == (Port("C1", "out", "gnd", Charge(1e-6, 12.0)),)
    changed = circuit.with_values({"C1": 2e-6})
    assert changed.branches[1].value == 2e-6
    assert changed.ports == (Port("C1", "out", "gnd", Charge(2e-6, 12.0)),)
    assert circuit.with_values({"R1": 1.0}).ports == circuit.ports


def test_fixed_voltages_hold_a_node_either_way_round() -> None:
    parts = (
        R1,
        TwoTerminal("R2", R, ("out", "bias"), 1e4),
        FixedVoltage("V1", ("bias", "gnd"), 4.5),
        TwoTerminal("R3", R, ("out", "below"), 1e4),
        FixedVoltage("V2", ("gnd", "below"), 4.5),
    )
    circuit = netlist(stage(*parts))
    assert circuit.fixed == (FixedNode("V1", "bias", 4.5), FixedNode("V2", "below", -4.5))
    assert circuit.values == {"R1": 1e4, "R2": 1e4, "R3": 1e4}
    with pytest.raises(CircuitError, match=r"V1: a fixed voltage between a and out, neither of which is gnd"):
        netlist(stage(R1, FixedVoltage("V1", ("a", "out"), 1.0)))


def test_rails_are_nodes_at_the_voltages_in_force() -> None:
    divider = (
        R1,
        TwoTerminal("R2", R, ("supply+", "out"), 1e4),
        Diode("D1", "supply-", "out", "signal", DIODE_TYPES["signal"]),
    )
    assert netlist(stage(*divider)).fixed == (
        FixedNode("supply+", "supply+", 15.0),
        FixedNode("supply-", "supply-", -12.0),
    )
    assert [node.volts for node in netlist(stage(*divider), supply=Supply(9.0, 0.0)).fixed] == [9.0, 0.0]
    assert netlist(stage(*divider[:2])).fixed == (FixedNode("supply+", "supply+", 15.0),)
    assert netlist(stage(R1)).fixed == ()


def test_another_output_is_listened_to_and_loaded() -> None:
    split = stage(
        R1,
        R2,
        TwoTerminal("R3", R, ("in", "bp"), 1e3),
        TwoTerminal("R4", R, ("bp", "gnd"), 1e3),
        outputs=("bp",),
    )
    circuit = netlist(split, output="bp", load_ohm=600.0)
    assert circuit.output_node == "bp"
    assert circuit.branches[-1] == Branch("Rload", R, "bp", "gnd", 600.0)
    assert netlist(split).output_node == "out"
    with pytest.raises(UnknownNameError, match="stage test has no output hp") as caught:
        netlist(split, output="hp")
    assert caught.value.hint == "outputs are out, bp"


@pytest.mark.parametrize(
    ("parts", "message"),
    [
        (
            (FixedVoltage("V1", ("in", "gnd"), 1.0),),
            "V1 and the signal source both hold node in: a loop of voltage",
        ),
        ((FixedVoltage("V1", ("out", "gnd"), 1.0),), "nothing leads from in to out"),
        ((FixedVoltage("V1", ("nc", "gnd"), 1.0),), "node nc is dangling: only V1"),
        (
            (FixedVoltage("V1", ("out", "gnd"), 1.0), FixedVoltage("V2", ("gnd", "out"), 1.0)),
            "V2 and V1 both hold",
        ),
        (
            (FixedVoltage("V1", ("supply+", "gnd"), 15.0), Switch("S1", ("out", "supply+"), closed=True)),
            "both hold",
        ),
        ((Potentiometer("P1", ("nc", "out"), "in", 1e4),), "node nc is dangling: only P1 is connected"),
        ((Diode("D1", "out", "out", "signal", DIODE_TYPES["signal"]),), "both ends of D1 are on node out"),
        ((Switch("S1", ("out", "out"), closed=True),), "both ends of S1 are on node out"),
    ],
)
def test_faults_with_these_parts_are_named(parts: tuple[Part, ...], message: str) -> None:
    with pytest.raises(CircuitError, match=message):
        netlist(stage(R1, *parts))


def test_values_out_of_range_are_refused() -> None:
    with pytest.raises(PartValueError, match="P1: 1 Ω is out of range for a potentiometer"):
        netlist(stage(R1, Potentiometer("P1", ("in", "gnd"), "out", 1.0)))
    with pytest.raises(PartValueError, match="V1: 2 kV is out of range for a voltage"):
        netlist(stage(R1, R2, FixedVoltage("V1", ("b", "gnd"), 2000.0)))
    with pytest.raises(PartValueError, match="V1: not a finite number"):
        netlist(stage(R1, R2, FixedVoltage("V1", ("b", "gnd"), math.nan)))


def test_a_netlist_with_everything_survives_the_way_to_another_process() -> None:
    parts = (
        R1,
        Potentiometer("P1", ("out", "gnd"), "w", 1e4),
        Switch("S1", ("w", "gnd"), closed=True),
        Diode("D1", "out", "supply+", "zener", DIODE_TYPES["zener"]),
        TwoTerminal("C1", C, ("out", "gnd"), 1e-6, half_v=12.0),
    )
    sent = netlist(stage(*parts))
    assert pickle.loads(pickle.dumps(sent)) == sent
    assert isinstance(sent.ports[0].law, Junction)
