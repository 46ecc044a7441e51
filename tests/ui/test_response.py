"""The response: where curves, corners, cursor and spectrum lie, and what is said about them."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from preview.ui.desk import Desk
from preview.ui.figures import Figures, heard_band_hz
from preview.ui.panels.figures import corner_text, heard_text
from preview.ui.panels.response import ResponsePanel
from preview.ui.theme import Look
from preview.ui.view import Behind
from preview.ui.widgets.dots import DotField
from preview.ui.widgets.plot import FrequencyAxis
from preview.values.quality import Quality


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.view.behind = Behind.NONE
    desk.take(engine.snapshot)
    return desk


def test_dots_are_the_braille_patterns_of_unicode() -> None:
    field = DotField(2, 1)
    field.set(0, 0)
    field.set(3, 3)
    field.set(99, 99)
    assert field.glyph(0, 0) == "\N{BRAILLE PATTERN DOTS-1}"
    assert field.glyph(1, 0) == "\N{BRAILLE PATTERN DOTS-8}"


def test_a_line_has_no_gaps_however_steep_it_is() -> None:
    field = DotField(4, 8)
    field.trace(np.array([0.0, 0.0, 31.0, 31.0, 0.0, 0.0, 15.0, 15.0]))
    for line in range(8):
        assert any(field.filled(column, line) for column in range(4))


def test_a_gap_in_the_curve_stays_a_gap() -> None:
    field = DotField(3, 2)
    field.trace(np.array([1.0, 1.0, np.nan, np.nan, 1.0, 1.0]))
    assert not field.filled(1, 0)


def _low_pass(corner_hz: float = 1591.549) -> Figures:
    f = np.geomspace(1.0, 1e6, 201)
    h = -10.0 / (1.0 + 1j * f / corner_hz)
    return Figures(
        frequency_hz=f,
        gain_db=20 * np.log10(abs(h)),
        phase_deg=np.degrees(np.angle(h)),
        corners_hz=(corner_hz,),
        passband_gain_db=20.0,
        error_db=0.00042,
        sample_rate_hz=48e3,
    )


def test_the_curve_marks_the_corner_where_it_lies(desk) -> None:
    desk.figures.now = desk.figures.before = _low_pass()
    lines = [text_of(r) for r in ResponsePanel(desk, Look()).rows(80, 24)]
    at = lines[1].index("▾ 1.59 kHz")
    assert at == 5 + FrequencyAxis(1.0, 1e6, 80 - 6).column(1591.549)
    assert sum(line[at : at + 1] == "╎" for line in lines) > 10
    assert lines[-1].split() == ["1", "Hz", "10", "100", "1k", "10k", "100k", "1M"]


def test_the_curve_bends_at_its_corner(desk) -> None:
    desk.figures.now = desk.figures.before = _low_pass()
    lines = [text_of(r) for r in ResponsePanel(desk, Look()).rows(80, 24)][2:-1]

    def height(column: int) -> int:
        return next(y for y, line in enumerate(lines) if 0x2800 < ord(line[column]) < 0x2900)

    assert height(10) == height(40), "flat below the corner"
    assert height(78) - height(65) >= 4, "20 dB a decade above it"


def test_two_corners_that_meet_do_not_overwrite_each_other(desk) -> None:
    desk.figures.now = replace(_low_pass(), corners_hz=(1000.0, 1300.0, 990e3))
    lines = [text_of(r) for r in ResponsePanel(desk, Look()).rows(80, 24)]
    assert lines[1].split() == ["▾", "1.00", "kHz", "990", "kHz", "▾"]
    assert lines[4].count("╎") == 3


def test_the_curve_is_drawn_again_only_when_what_it_shows_has_changed(desk) -> None:
    desk.figures.now = _low_pass(1591.5)
    panel = ResponsePanel(desk, Look())
    first = panel.rows(80, 20)
    assert panel.rows(80, 20) is first
    desk.view.phase = True
    with_phase = panel.rows(80, 20)
    assert with_phase is not first
    panel.look.switch()
    light = panel.rows(80, 20)
    assert light is not with_phase
    assert panel.rows(70, 20) is not light
    before = panel.rows(80, 20)
    desk.figures.now = _low_pass(3000.0)
    assert panel.rows(80, 20) is not before


@pytest.mark.parametrize("gain_db", [-math.inf, 0.0, -300.0, 250.0])
def test_a_flat_or_absent_gain_still_gives_a_plot(desk, gain_db) -> None:
    f = np.geomspace(1.0, 1e6, 50)
    desk.figures.now = Figures(f, np.full(50, gain_db), np.zeros(50), passband_gain_db=gain_db)
    assert len(ResponsePanel(desk, Look()).rows(60, 12)) == 12


def test_the_deviation_is_stated_as_a_bound() -> None:
    assert heard_text(_low_pass()) == "heard response within 0.0005 dB of the circuit to 20 kHz (standard)", (
        "0.00042 dB is within 0.0005 dB, not within 0.0004 dB"
    )
    assert "0.0001 dB" in heard_text(replace(_low_pass(), error_db=0.0))
    assert "0.124 dB" in heard_text(replace(_low_pass(), error_db=0.1232))
    assert "to 3.6 kHz (fine)" in heard_text(
        replace(_low_pass(), sample_rate_hz=8e3, quality=Quality.FINE)
    ), "0.45 of 8 kHz"
    assert heard_band_hz(44.1e3) == pytest.approx(19845.0)


def test_corners_are_read_out_in_order() -> None:
    assert corner_text(replace(_low_pass(), corners_hz=(71.078, 15666.1))) == "71.1 Hz and 15.7 kHz"
    assert corner_text(replace(_low_pass(), corners_hz=())) == "none"
