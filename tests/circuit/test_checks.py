"""Faults that the wiring alone shows, each with its cure."""

from __future__ import annotations

import math
import re

import pytest

from preview.circuit.netlist import Branch, Netlist, netlist
from preview.circuit.opamp import BUILT_IN_TYPES
from preview.circuit.parts import OpAmp, Part, PartKind, Stage, Supply, TwoTerminal
from preview.errors import CircuitError, PartValueError, PreviewError, UnknownNameError

KINDS = {"R": PartKind.RESISTOR, "C": PartKind.CAPACITOR, "L": PartKind.INDUCTOR}
VALUES = {"R": 1e4, "C": 1e-8, "L": 1e-2}


def part(line: str) -> Part:
    """``R1 in sum``, or ``U1 plus minus out``."""
    designator, *nodes = line.split()
    if designator.startswith("U"):
        return OpAmp(designator, *nodes, type="ideal")
    letter = designator[0]
    return TwoTerminal(designator, KINDS[letter], (nodes[0], nodes[1]), VALUES[letter])


def stage(lines: str) -> Stage:
    """A stage from parts parted by commas."""
    parts = tuple(part(line) for line in lines.split(","))
    return Stage("test", "Test", "", Supply(15.0, -15.0), parts)


@pytest.mark.parametrize(
    "lines",
    [
        "R1 in sum, R2 sum out, U1 gnd sum out",
        "R1 in out",
        "C1 in out, R1 out gnd",
        "L1 in out, R1 out gnd",
        "U1 in out out",  # follower
        "R1 in sum, C1 sum out, U1 gnd sum out",  # integrator
        "R1 in sum, L1 sum out, U1 gnd sum out",
        "R1 in a, R2 a plus, C1 a out, C2 plus gnd, U1 plus out out",  # Sallen-Key: both inputs, minus direct
        "R1 in a, C1 a gnd, R2 a out, C2 out sum, R3 a sum, U1 gnd sum out",  # multiple feedback
        # Two integrators and an inverter in one loop: the feedback of each runs through the others.
        "R1 in s1, R2 out s1, C1 s1 a, U1 gnd s1 a, R3 a s2, C2 s2 b, U2 gnd s2 b, "
        "R4 b s3, R5 s3 out, U3 gnd s3 out",
        # Generalised impedance converter: an inductor of five parts and two op-amps, fed through R9.
        "R9 in out, R1 out a, R2 a b, R3 b c, C1 c d, R4 d gnd, U1 out b c, U2 d b a",
        # Feedback comes to + alone, but through an inverting stage: that is negative.
        "R1 in p, R2 p b, U1 p gnd a, R3 a s, R4 s b, U2 gnd s b, R5 b out, R6 out gnd",
        "R1 in out, R2 out x, L1 x gnd, L2 in y, R3 y gnd",
    ],
)
def test_sound_wirings_pass(lines: str) -> None:
    for load_ohm in (None, 1e4):
        for source_ohm in (0.0, 600.0):
            circuit = netlist(stage(lines), source_ohm=source_ohm, load_ohm=load_ohm)
            assert circuit.output_node == "out"


@pytest.mark.parametrize(
    ("lines", "message", "cure"),
    [
        ("R1 a out", "no part is connected to in", "nodes are a, out"),
        ("R1 in a, R2 a gnd", "no part is connected to out", "the signal is taken from"),
        ("R1 in out, R2 out out", "both ends of R2 are on node out", "two different nodes"),
        ("R1 in sum, R2 sum out, U1 sum sum out", "both inputs of U1 are on node sum", "plus and minus"),
        ("R1 in s, R2 s out, U1 gnd s gnd", "the output of U1 is on gnd", "node of its own"),
        (
            "R1 in s, R2 s out, U1 gnd s in",
            "the output of U1 is on node in, which the signal",
            "a resistance",
        ),
        (
            "R1 in a, R2 a out, U1 gnd a out, R3 in b, R4 b out, U2 gnd b out",
            "the outputs of U1 and U2 are both on node out",
            "put a resistor between them or use one",
        ),
        ("R1 in out, R2 out a", "node a is dangling: only R2 is connected to it", "spelled"),
        ("R1 in s, R2 s out, U1 x s out", "node x is dangling: only the + input of U1", "spelled"),
        ("R1 in out, R2 x y, R3 y x", "nodes x and y are floating", "resistor of 1 MΩ from x to gnd"),
        (
            "C1 in a, C2 a out, R1 out gnd",
            "node a is floating: no direct current can flow through C1 and C2",
            "",
        ),
        ("C1 in s, C2 s out, U1 gnd s out", "node s is floating", "from s to gnd"),
        ("C1 in p, R2 s out, R3 s gnd, U1 p s out", "node p is floating", "from p to gnd"),
        ("C1 in out", "node out is floating", "from out to gnd"),
        ("R1 in out, L1 in gnd", "L1 shorts the source, an op-amp output or gnd", "winding resistance"),
        ("R1 in s, R2 s out, U1 gnd s out, L1 out gnd", "L1 shorts the source, an op-amp", "winding"),
        ("R1 in out, L1 out a, L2 a in, L3 in gnd", "L3 shorts", "winding"),
        ("R1 in a, L1 a out, L2 out a, R2 out gnd", "L2 closes a loop of inductors", "winding"),
        (
            "R1 in sum, R2 sum out, U1 sum gnd out",
            "U1 has positive feedback only: its output out comes back to its + input",
            "swap plus and minus, or add feedback to minus",
        ),
        ("R1 in m, R9 m gnd, R2 p out, R3 p gnd, U1 p m out", "U1 has positive feedback only", "swap"),
        ("R1 in s, R2 s gnd, R3 out gnd, U1 gnd s out", "U1 has no feedback: nothing leads", "- input"),
        ("R1 in p, R2 p gnd, R3 out gnd, U1 p gnd out", "- input, which is on gnd", "comparators"),
        ("R1 in out, U1 gnd in out", "which is held by the signal source", "comparators"),
        ("R1 in a, R2 a gnd, R3 s out, U1 gnd s out, R4 s gnd", "nothing leads from in to out", "node names"),
    ],
)
def test_a_fault_in_the_wiring_is_named_with_its_cure(lines: str, message: str, cure: str) -> None:
    with pytest.raises(CircuitError, match=re.escape(message)) as caught:
        netlist(stage(lines))
    assert caught.value.message.startswith("stage test: ")
    assert cure in caught.value.hint
    assert caught.value.exit_code == 5


def test_source_and_load_do_not_hide_a_missing_in_or_out() -> None:
    with pytest.raises(CircuitError, match="no part is connected to in"):
        netlist(stage("R1 a out, R2 a gnd"), source_ohm=600.0, load_ohm=1e4)
    with pytest.raises(CircuitError, match="no part is connected to out"):
        netlist(stage("R1 in a, R2 a gnd"), source_ohm=600.0, load_ohm=1e4)


def test_a_source_resistance_makes_in_a_node_that_feedback_can_reach() -> None:
    lines = "R1 in out, U1 gnd in out"
    assert netlist(stage(lines), source_ohm=1e3).input_node == "source"
    with pytest.raises(CircuitError, match="held by the signal source"):
        netlist(stage(lines))


def test_a_load_gives_an_output_capacitor_its_path() -> None:
    assert netlist(stage("C1 in out"), load_ohm=1e4).branches[-1] == Branch(
        "Rload", PartKind.RESISTOR, "out", "gnd", 1e4
    )


def test_netlist_holds_source_parts_and_load_in_order() -> None:
    circuit = netlist(stage("R1 in sum, C1 sum out, U1 gnd sum out"), source_ohm=600.0, load_ohm=1e4)
    assert [(b.designator, b.a, b.b) for b in circuit.branches] == [
        ("Rsource", "source", "in"),
        ("R1", "in", "sum"),
        ("C1", "sum", "out"),
        ("Rload", "out", "gnd"),
    ]
    assert circuit.nodes == ("source", "in", "sum", "out")
    plain = netlist(stage("R1 in sum, C1 sum out, U1 gnd sum out"))
    assert plain.input_node == "in"
    assert [b.designator for b in plain.branches] == ["R1", "C1"]


def test_rails_come_from_the_stage_or_the_supply_and_perfect_has_none() -> None:
    wired = stage("R1 in sum, R2 sum out, U1 gnd sum out")

    def rails(circuit: Netlist) -> tuple[float, float]:
        return circuit.opamps[0].high_v, circuit.opamps[0].low_v

    assert rails(netlist(wired)) == (15.0, -15.0)
    assert rails(netlist(wired, supply=Supply(9.0, 0.0))) == (9.0, 0.0)
    perfect = wired.with_part(OpAmp("U1", "gnd", "sum", "out", "perfect"))
    assert rails(netlist(perfect)) == (math.inf, -math.inf)
    assert BUILT_IN_TYPES == ("perfect", "ideal")
    with pytest.raises(UnknownNameError, match="U1: no op-amp type named TLO72"):
        netlist(wired.with_part(OpAmp("U1", "gnd", "sum", "out", "TLO72")))


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"supply": Supply(-15.0, 15.0)}, "positive rail is not above"),
        ({"supply": Supply(math.nan, -15.0)}, "not finite"),
        ({"supply": Supply(2000.0, 0.0)}, "beyond 1 kV"),
        ({"source_ohm": -1.0}, "source resistance: a resistor must be above zero"),
        ({"source_ohm": math.nan}, "source resistance: not a finite number"),
        ({"load_ohm": 0.0}, "load resistance: a resistor must be above zero"),
        ({"load_ohm": 1e13}, "load resistance: 10 TΩ is out of range for a resistor"),
    ],
)
def test_impossible_supply_source_and_load_are_refused(options: dict[str, object], message: str) -> None:
    with pytest.raises(CircuitError, match=message):
        netlist(stage("R1 in out"), **options)  # type: ignore[arg-type]  # wrong on purpose


def test_a_part_value_set_by_hand_is_checked_too() -> None:
    wired = stage("R1 in out").with_part(TwoTerminal("R1", PartKind.RESISTOR, ("in", "out"), 0.0))
    with pytest.raises(PartValueError, match="R1: a resistor must be above zero"):
        netlist(wired)


def test_every_fault_is_one_or_two_plain_lines() -> None:
    with pytest.raises(PreviewError) as caught:
        netlist(stage("R1 in out, R2 x y, R3 y x"))
    assert "\n" not in str(caught.value)
