"""Sections by natural frequency and Q."""

from __future__ import annotations

import math
import tomllib
from pathlib import Path

import numpy as np
import pytest

from preview.analysis.modes import Mode, modes, modes_line
from preview.circuit.cascade import cascade
from preview.circuit.netlist import netlist
from preview.circuit.parts import OpAmp, PartKind, Stage, Supply, TwoTerminal
from preview.network.linear import linear
from preview.network.transfer import response
from tests.nets import ALL, SALLEN_KEY

PUBLISHED = tomllib.loads((Path(__file__).parents[1] / "published" / "sections.toml").read_text("utf-8"))


def sallen_key(f0_hz: float, q: float) -> Stage:
    """Unity gain, equal resistors: C1 = 2 Q / (w R) to the output, C2 = 1 / (2 Q w R) to gnd."""
    ohm, w = 10e3, 2 * np.pi * f0_hz
    parts = (
        TwoTerminal("R1", PartKind.RESISTOR, ("in", "a"), ohm),
        TwoTerminal("R2", PartKind.RESISTOR, ("a", "b"), ohm),
        TwoTerminal("C1", PartKind.CAPACITOR, ("a", "out"), 2 * q / (w * ohm)),
        TwoTerminal("C2", PartKind.CAPACITOR, ("b", "gnd"), 1 / (2 * q * w * ohm)),
        OpAmp("U1", "b", "out", "out", "ideal"),
    )
    return Stage("section", "Section", "", Supply(15.0, -15.0), parts)


@pytest.mark.parametrize(
    "row", PUBLISHED["table"], ids=lambda row: f"{row['response']}-{len(row['printed_q'])}"
)
def test_a_cascade_made_by_a_printed_table_has_its_sections_and_its_edge(row: dict) -> None:
    printed = list(zip(row["printed_fsf"], row["printed_q"], strict=True))
    circuit = netlist(cascade([sallen_key(1e3 * fsf, q) for fsf, q in printed]))
    poles, zeros = (modes(s) for s in linear(circuit).poles_and_zeros())
    assert zeros == ()
    by_q = sorted(poles, key=lambda mode: mode.q or 0.0)
    assert [m.f0_hz for m in by_q] == pytest.approx([1e3 * fsf for fsf, _ in printed], rel=1e-6)
    assert [m.q for m in by_q] == pytest.approx([q for _, q in printed], rel=1e-6)

    def section_db(fsf: float, q: float) -> float:
        return -10 * math.log10((1 - fsf**-2) ** 2 + (1 / (fsf * q)) ** 2)

    edge_db = 20 * np.log10(np.abs(response(circuit, [1e3])[0]))
    half = 0.5e-4  # half the last printed digit of each figure
    allowed_db = sum(
        abs(section_db(fsf + half, q) - section_db(fsf, q))
        + abs(section_db(fsf, q + half) - section_db(fsf, q))
        for fsf, q in printed
    )
    assert edge_db == pytest.approx(row["edge_db"], abs=allowed_db)


def test_sections_of_known_circuits() -> None:
    (mode,) = modes(linear(SALLEN_KEY).poles_and_zeros()[0])
    assert mode.f0_hz == pytest.approx(1 / (2 * np.pi * np.sqrt(2e-10)), rel=1e-9)
    assert mode.q == pytest.approx(np.sqrt(0.5), rel=1e-9)
    assert mode.order == 2
    poles, zeros = linear(ALL["two-sections"]).poles_and_zeros()
    assert [m.order for m in modes(poles)] == [1, 1]
    assert modes(zeros, poles) == (Mode(0.0, None),)


def test_a_double_pole_counts_as_two_real_ones() -> None:
    found = modes([-1e4 + 1j, -1e4 - 1j])
    assert [m.q for m in found] == [None, None]


def test_what_is_on_the_axis_or_right_of_it_says_so() -> None:
    w = 2 * np.pi * 1e3
    pair, mirrored = modes([1j * w, -1j * w]), modes([w + 0j])
    assert pair == (Mode(pytest.approx(1e3), math.inf),)
    assert mirrored == (Mode(pytest.approx(1e3), None, right=True),)
    assert modes_line((*pair, *mirrored), lambda f: f"{f:.0f} Hz") == (
        "1000 Hz on the axis, 1000 Hz (right half plane)"
    )
    assert modes_line((), str) == "none"


def test_what_is_above_100_mhz_is_left_out_and_above_1_mhz_only_counted() -> None:
    assert modes([-2 * np.pi * 2e8]) == ()
    found = modes([-2 * np.pi * hz for hz in (1e3, 2e6, 3e6)])
    assert len(found) == 3
    assert modes_line(found, lambda f: f"{f:.0f} Hz") == "1000 Hz, 2 above 1000000 Hz"


def test_a_double_zero_at_0_hz_is_there_though_it_is_not_found_exactly() -> None:
    assert modes([1e-3 + 2e-3j, 1e-3 - 2e-3j], [-600.0]) == (Mode(0.0, None), Mode(0.0, None))
