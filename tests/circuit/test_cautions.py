"""What is hardly meant, each with its cure; sound circuits raise no doubt."""

from __future__ import annotations

import pytest

from preview.circuit.cautions import warnings
from preview.circuit.library import find_stage, stage_names
from preview.circuit.netlist import netlist
from preview.circuit.reader import parse_stage

HEAD = 'title = "Test"\nsupply = {{ positive = "{}", negative = "{}" }}\n[parts]\n'
INVERTING = """
R1 = { kind = "resistor", nodes = ["in", "sum"], value = "10k" }
R2 = { kind = "resistor", nodes = ["sum", "out"], value = "100k" }
U1 = { kind = "opamp", plus = "gnd", minus = "sum", out = "out", type = "ideal" }
"""
BIASED = """
C1 = { kind = "capacitor", nodes = ["in", "plus"], value = "100n" }
R1 = { kind = "resistor", nodes = ["supply+", "plus"], value = "100k" }
R2 = { kind = "resistor", nodes = ["plus", "gnd"], value = "100k" }
U1 = { kind = "opamp", plus = "plus", minus = "out", out = "out", type = "TL072" }
"""


def doubts(parts: str, positive: str = "15 V", negative: str = "-15 V", **options: float) -> list[str]:
    stage = parse_stage(HEAD.format(positive, negative) + parts, name="test", file="test.toml")
    return [f"{what} ({cure})" for what, cure in warnings(netlist(stage, **options))]


def test_bundled_stages_raise_no_doubt() -> None:
    for name in stage_names():
        assert list(warnings(netlist(find_stage(name), source_ohm=600.0, load_ohm=600.0))) == []


@pytest.mark.parametrize("parts", [INVERTING, BIASED])
def test_sound_circuits_raise_no_doubt(parts: str) -> None:
    assert doubts(parts, load_ohm=32.0) == []


def test_a_limiter_with_a_resistor_around_raises_no_doubt() -> None:
    limiter = 'D1 = { kind = "diode", anode = "sum", cathode = "out", type = "signal" }'
    assert doubts(INVERTING + limiter) == []


@pytest.mark.parametrize(
    ("parts", "found"),
    [
        (
            'S1 = { kind = "switch", nodes = ["out", "gnd"], closed = true }',
            "S1 shorts gnd and the output of U1",
        ),
        (
            'S1 = { kind = "switch", nodes = ["out", "x"], closed = true }\n'
            'R9 = { kind = "resistor", nodes = ["x", "supply-"], value = "R1" }',
            "S1 and R9 short the rail supply- and the output of U1 (open it",
        ),
        (
            'R9 = { kind = "resistor", nodes = ["supply+", "gnd"], value = "R1" }',
            "R9 shorts gnd and the rail supply+",
        ),
        (
            'D1 = { kind = "diode", anode = "supply+", cathode = "gnd", type = "red-led" }',
            "D1 lies straight across 15 V in its conducting direction (turn it round",
        ),
        (
            'D1 = { kind = "diode", anode = "gnd", cathode = "supply+", type = "zener", breakdown = "5.1 V" }',
            "D1 lies straight across 15 V",
        ),
    ],
)
def test_short_circuits_are_named(parts: str, found: str) -> None:
    (doubt,) = doubts(INVERTING + parts)
    assert doubt.startswith(found)


def test_what_only_looks_like_a_short_circuit_raises_no_doubt() -> None:
    for parts in (
        'S1 = { kind = "switch", nodes = ["out", "gnd"], closed = false }',
        'S1 = { kind = "switch", nodes = ["sum", "out"], closed = true }',
        'R9 = { kind = "resistor", nodes = ["out", "gnd"], value = "1R2" }',
        'D1 = { kind = "diode", anode = "gnd", cathode = "supply+", type = "signal" }',
    ):
        assert doubts(INVERTING + parts) == []


def test_a_load_of_a_tenth_of_an_ohm_is_a_short_circuit() -> None:
    (doubt,) = doubts(INVERTING, load_ohm=0.1)
    assert doubt.startswith("Rload shorts gnd and the output of U1")


def test_feedback_that_blocks_is_named() -> None:
    parts = INVERTING.replace('R2 = { kind = "resistor", nodes = ["sum", "out"], value = "100k" }', "{}")
    diode = 'D1 = { kind = "diode", anode = "sum", cathode = "out", type = "signal" }'
    switch = 'S1 = { kind = "switch", nodes = ["sum", "out"], closed = false }'
    (doubt,) = doubts(parts.replace("{}", diode, 1))
    assert doubt.startswith(
        "the feedback of U1 goes through D1 alone: while it blocks, the output runs to a rail"
    )
    (doubt,) = doubts(parts.replace("{}", switch, 1))
    assert doubt.startswith("the feedback of U1 goes through S1 alone")
    assert doubts(parts.replace("{}", switch.replace("false", "true"), 1)) == []


def test_a_node_that_only_leakage_holds_is_named() -> None:
    parts = """
C1 = { kind = "capacitor", nodes = ["in", "a"], value = "100n" }
D1 = { kind = "diode", anode = "a", cathode = "gnd", type = "signal" }
U1 = { kind = "opamp", plus = "a", minus = "out", out = "out", type = "ideal" }
"""
    (doubt,) = doubts(parts)
    assert doubt.startswith("direct current reaches node a through D1 alone")
    assert "1 MΩ from a to gnd" in doubt


def test_a_single_supply_stage_that_rests_at_its_rail_is_named() -> None:
    (doubt,) = doubts(INVERTING, "9 V", "0 V")
    assert doubt.startswith(
        "U1 rests at 0 V, and its output reaches 0 V to 9 V: at least half of a signal is cut"
    )
    assert "half the supply" in doubt
    assert doubts(BIASED, "9 V", "0 V") == []  # how a divider rests is for the operating point


def test_an_input_outside_the_common_mode_range_is_named() -> None:
    """The TL072 takes 3 V above the negative rail and up (Motorola sheet)."""
    (doubt,) = doubts(INVERTING.replace("ideal", "TL072"), "9 V", "0 V")
    assert doubt.startswith(
        "the + input of U1 rests at 0 V, outside the 3 V to 9 V that TL072 takes on these rails"
    )
    assert doubts(INVERTING.replace("ideal", "TL072")) == []


def test_a_bias_is_where_the_plus_input_rests() -> None:
    held = INVERTING.replace('plus = "gnd"', 'plus = "bias"')
    bias = 'V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V" }'
    assert doubts(held + bias, "9 V", "0 V") == []
    (doubt,) = doubts(held + bias.replace("4.5 V", "12 V"), "9 V", "0 V")
    assert doubt.startswith("U1 rests at 12 V")
