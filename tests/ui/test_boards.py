"""What the panels draw: bars on an axis of volts, the curve in dots, the schematic with values."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest
from rich.color import Color, ColorSystem

from preview.circuit.library import find_stage, stage_names
from preview.circuit.parts import Supply
from preview.ui.changes import with_setting
from preview.ui.desk import Desk
from preview.ui.figures import Figures
from preview.ui.panels.circuit import CircuitPanel, annotated, drawing_width
from preview.ui.panels.figures import FiguresPanel
from preview.ui.panels.header import HeaderPanel
from preview.ui.panels.parts import PartsPanel
from preview.ui.panels.timeline import TimelinePanel
from preview.ui.theme import DARK, LIGHT, PALETTES, Look, first_palette
from preview.ui.widgets.board import fit, heading, row_cells, spread
from preview.ui.words import clock, dbu, duration, full_scale, hertz, rails, volts
from preview.values.levels import parse_full_scale


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


# ---- words ----


@pytest.mark.parametrize(
    ("function", "argument", "text"),
    [
        (volts, 8.70143, "8.70 V"),
        (volts, 0.0512, "51.2 mV"),
        (volts, 0.0, "0 V"),
        (volts, math.inf, "no limit"),
        (dbu, 0.774597, "+0.0"),
        (dbu, 1.22769, "+4.0"),  # +4 dBu is 1.228 V rms, common practice
        (dbu, 0.0, "-"),
        (clock, 0.0, "0:00.0"),
        (clock, 62.34, "1:02.3"),
        (clock, 3723.9, "1:02:03"),
        (duration, 0.0, "0 ms"),
        (duration, 0.00002, "<0.1 ms"),
        (duration, 0.0034, "3.4 ms"),
        (duration, 0.034, "34 ms"),
        (duration, 1.2, "1.20 s"),
        (hertz, 1591.549, "1.59 kHz"),
        (hertz, 159.0, "159 Hz"),
        (rails, Supply(15.0, -15.0), "±15 V"),
        (rails, Supply(9.0, 0.0), "+9 V / 0 V"),
        (rails, Supply(12.0, -5.0), "+12 V / -5 V"),
        (full_scale, parse_full_scale("+18 dBu"), "full scale +18 dBu = 8.70 V peak"),  # EBU R 68
        (full_scale, parse_full_scale("5 V"), "full scale 5 V peak"),
    ],
)
def test_numbers_are_written_as_on_a_bench(function, argument, text) -> None:
    assert function(argument) == text


# ---- head and line ----


def test_the_head_cleans_names_and_takes_no_markup(desk, engine) -> None:
    from pathlib import Path

    desk.session = replace(desk.session, audio=Path("evil[red]\x1b[31m\u202e.wav"))
    desk.take(replace(engine.snapshot, output_name="card\x07 [b]one[/b]", dropouts=3))
    lines = [text_of(r) for r in HeaderPanel(desk, Look()).rows(160, 3)]
    assert "evil[red]?[31m?.wav" in lines[0]
    assert "48 kHz stereo 0:12.5" in lines[0]
    assert "card? [b]one[/b]" in lines[1]
    assert "dropouts 3" in lines[1]
    assert not any(re.search(r"[\x00-\x1f\u202e]", line) for line in lines)


@pytest.mark.parametrize("width", [80, 100, 132, 200])
def test_the_state_is_told_in_words_at_every_width(desk, width) -> None:
    panel = HeaderPanel(desk, Look())
    assert "paused" in text_of(panel.rows(width, 3)[2])
    desk.listening.play(True)
    desk.method("bypass")()
    line = text_of(panel.rows(width, 3)[2])
    for word in ("playing", "BYPASS", "-20 dB", "loop", "standard"):
        assert word in line
    assert len(line) == width


def test_an_engine_that_died_before_it_spoke_points_to_silent(session, engine) -> None:
    desk = Desk(session, engine)
    desk.stopped = True
    line = text_of(HeaderPanel(desk, Look()).rows(80, 3)[2])
    assert line.rstrip().endswith("Press R to try again; q leaves, then try --silent.")


@pytest.mark.parametrize("width", [80, 100, 101, 119, 120, 160])
def test_no_word_of_the_bypass_warning_is_cut(desk, width) -> None:
    desk.listening.bypass = True
    line = text_of(HeaderPanel(desk, Look()).rows(width, 3)[2])
    assert "BYPASS: input heard " in line or "BYPASS: you hear the input, not the stage " in line
    assert len(line) == width


def test_the_deviation_is_not_cut_in_a_small_window(desk) -> None:
    desk.figures.now = replace(Figures(passband_gain_db=20.0), error_db=1.2e-4, sample_rate_hz=48e3)
    line = text_of(FiguresPanel(desk, Look()).rows(60, 2)[1])
    assert line == " heard within 0.0002 dB to 20 kHz (standard)"


def test_a_long_name_gives_way_to_rate_and_length(desk) -> None:
    from pathlib import Path

    desk.session = replace(desk.session, audio=Path("n" * 200 + ".wav"))
    line = text_of(HeaderPanel(desk, Look()).rows(80, 3)[0])
    assert "48 kHz stereo 0:12.5" in line
    assert "Inverting low-pass" in line


def test_the_line_shows_playhead_and_region(desk) -> None:
    panel = TimelinePanel(desk, Look())
    desk.listening.seek(300_000)
    desk.method("region_start")()
    line = text_of(panel.rows(80, 1)[0])
    assert "0:06.2" in line
    assert "region 0:06.2 to 0:12.5" in line
    assert line.index("◆") < line.index(")")
    desk.listening.seek(0)
    line = text_of(panel.rows(80, 1)[0])
    assert line.index("◆") < line.index("(") < line.index(")")
    assert len(line) == 80


# ---- parts and schematic ----


def test_the_list_marks_selection_change_and_odd_values(desk) -> None:
    desk.parts.set(4321.0)
    lines = [text_of(r) for r in PartsPanel(desk, Look()).rows(36, 11)]
    assert lines[1].startswith("▸ R1 4.321 kΩ")
    assert "≠E24" in lines[1]
    assert "was 10k" in lines[1]
    assert "▸" not in lines[2]
    assert "the input impedance" in " ".join(lines)


def test_a_list_longer_than_the_panel_follows_the_selection(desk) -> None:
    desk.open_stage(find_stage("non-inverting-gain"))
    desk.parts.choose(4)  # what one would turn first comes first: R1, which carries the bias current, is last
    lines = [text_of(r) for r in PartsPanel(desk, Look()).rows(36, 4)]
    assert lines[-1].startswith("▸ R1")


@pytest.mark.parametrize("name", stage_names())
def test_every_bundled_drawing_shows_every_part_with_its_value(name) -> None:
    stage = find_stage(name)
    drawing = "\n".join("".join(text for text, _ in line) for line in annotated(stage, None))
    for part in stage.parts:
        found = re.search(rf"\b{part.designator} (\S+)", drawing)
        assert found, f"{part.designator} has no room for its value"
    plain = len(stage.parts) <= 4
    assert drawing_width(stage) <= (56 if plain else 76), "fits beside the list at 80 columns, or at 100"
    assert len(drawing.splitlines()) <= (10 if plain else 14), (
        "fits between meters and figures at 24 rows, or 28"
    )


def test_values_in_the_drawing_move_no_wire() -> None:
    stage = find_stage("inverting-low-pass")
    bare = stage.drawing.rstrip("\n").splitlines()
    lines = ["".join(text for text, _ in line) for line in annotated(stage, "C1")]
    for before, after in zip(bare, lines, strict=True):
        for column, glyph in enumerate(before):
            if glyph in "│├┤┌┐└┘─▒○":
                assert after[column] == glyph


def test_the_drawing_follows_the_values_and_marks_the_selected_part(desk) -> None:
    desk.parts.set(4700.0)
    lines = [text_of(r) for r in CircuitPanel(desk, Look()).rows(57, 11)]
    assert any("▸R1 4k7" in line for line in lines)


def test_a_value_too_long_for_the_drawing_leaves_the_wires_alone(session) -> None:
    stage = with_setting(session, "R1", 4321.0).stage
    stage = replace(stage, drawing="  R1 │ out")
    assert "".join(text for text, _ in annotated(stage, None)[0]) == "  R1 │ out"


def test_a_designator_inside_a_longer_one_is_not_taken_for_it(session) -> None:
    stage = replace(session.stage, drawing="R11      R1      xR1")
    named = [name for _, name in annotated(stage, None)[0] if name]
    assert named == ["R1"]


# ---- boards and palettes ----


def test_rows_are_cut_and_padded_in_cells() -> None:
    assert fit("abc", 5) == "abc  "
    assert fit("abcdef", 4) == "abc…"
    assert fit("漢字漢字", 5) == "漢字…"
    assert fit("x", 0) == ""
    left = heading("a", "b", 40, Look())
    assert row_cells(left) == 40
    assert row_cells(spread(left, heading("c", "", 30, Look()), 60, DARK.plain)) == 60


def _luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.1."""
    parts = [c / 255 for c in Color.parse(colour).get_truecolor()]
    linear = [c / 12.92 if c <= 0.03928 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


PAIRS = [
    *((ink, "ground") for ink in ("ink", "quiet", "arriving", "leaving", "chosen")),
    *(("ink", "raised"), ("ground", "chosen"), ("stop_ink", "stop"), ("stop", "ground")),
]


@pytest.mark.parametrize("palette", PALETTES, ids=lambda p: p.name)
@pytest.mark.parametrize(("ink", "ground"), PAIRS)
def test_text_is_legible_in_full_and_in_16_colours(palette, ink, ground) -> None:
    front, back = getattr(palette, ink), getattr(palette, ground)
    light, dark = sorted((_luminance(front), _luminance(back)), reverse=True)
    assert (light + 0.05) / (dark + 0.05) >= 4.5, "WCAG 2.1, level AA for text"
    if (ink, ground) != ("stop", "ground"):
        numbers = {Color.parse(c).downgrade(ColorSystem.STANDARD).number for c in (front, back)}
        assert len(numbers) == 2


def test_the_terminal_may_say_that_its_ground_is_light(monkeypatch) -> None:
    monkeypatch.setenv("COLORFGBG", "0;15")
    assert first_palette() is LIGHT
    monkeypatch.setenv("COLORFGBG", "15;default;0")
    assert first_palette() is DARK
    monkeypatch.delenv("COLORFGBG")
    assert first_palette() is DARK
