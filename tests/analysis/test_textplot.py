"""The gain curve in plain characters."""

from __future__ import annotations

import numpy as np
import pytest

from preview.analysis.curves import curves, span_hz
from preview.analysis.textplot import gain_drawing
from preview.circuit.drive import parse_source
from preview.circuit.library import find_stage, open_stages, stage_names
from preview.circuit.netlist import netlist
from preview.circuit.parts import Stage
from preview.network.transfer import response
from preview.session import Session
from preview.values.levels import parse_full_scale


def session(stage: Stage, source: str = "none") -> Session:
    return Session(None, stage, stage.supply, parse_full_scale("5 V"), parse_source(source))


def drawing(stage: Stage, source: str = "none", rows: int = 19) -> list[str]:
    return gain_drawing(curves(session(stage, source), 68), rows=rows)


def test_each_mark_is_at_the_gain_of_its_frequency() -> None:
    stage = find_stage("inverting-low-pass")
    lines = drawing(stage)
    field = [line for line in lines[1:] if line[7:8] in ("|", "+")]
    labels = [float(line[:6]) for line in field if line[:6].strip()]
    per_row = (labels[0] - labels[1]) / 2
    f = np.geomspace(10.0, 100e3, 65)
    gain_db = 20 * np.log10(np.abs(response(netlist(stage), f)))
    for column in range(65):
        rows = [i for i, line in enumerate(field) if line[8 + column : 9 + column] == "*"]
        nearest = min(abs(labels[0] - i * per_row - gain_db[column]) for i in rows)
        assert nearest <= 0.5 * per_row + 1e-9, f"{f[column]:.0f} Hz"


def test_corners_stand_below_the_axis_and_in_words() -> None:
    lines = drawing(find_stage("inverting-band-pass"))
    (marks,) = [line for line in lines if set(line.strip()) == {"^", " "}]
    f = np.geomspace(10.0, 100e3, 65)
    found = [float(f[i - 8]) for i, ch in enumerate(marks) if ch == "^"]
    assert found == pytest.approx([285.9, 4010.8], rel=0.08)
    assert "^ corners 285.9 Hz, 4.011 kHz" in lines[-1]


def test_as_drawn_has_a_mark_of_its_own() -> None:
    lines = "\n".join(drawing(find_stage("inverting-low-pass"), "10k"))
    assert "* as driven and loaded, . as drawn" in lines
    assert "......" in lines
    assert "as drawn" not in "\n".join(drawing(find_stage("inverting-low-pass")))


@pytest.mark.parametrize("name", stage_names())
def test_every_stage_is_drawn_in_plain_characters_and_72_columns(name: str) -> None:
    lines = drawing(open_stages([name]))
    assert all(line.isascii() for line in lines)
    assert max(map(len, lines)) <= 82
    assert len(lines) <= 25
    assert any("*" in line for line in lines)


def test_the_axis_reaches_a_decade_beyond_every_corner() -> None:
    assert span_hz(()) == (10.0, 100e3)
    assert span_hz((1591.0,)) == (10.0, 100e3)
    assert span_hz((0.5, 45e3)) == pytest.approx((0.01, 1e6))
    assert span_hz((1e-3, 9e7)) == (1e-3, 1e8)
