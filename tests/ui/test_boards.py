"""What the panels draw: bars on an axis of volts, the curve in dots, the schematic with values."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest
from rich.color import Color, ColorSystem

from preview.circuit.library import find_stage, stage_names
from preview.circuit.opamp import OpAmpReading
from preview.circuit.parts import Supply
from preview.meters.reading import LevelReading
from preview.ui.changes import with_value
from preview.ui.desk import Desk
from preview.ui.figures import Figures, heard_band_hz
from preview.ui.panels.curve import CurvePanel, _column
from preview.ui.panels.figures import FiguresPanel, corner_text, heard_text
from preview.ui.panels.header import HeaderPanel
from preview.ui.panels.meters import MetersPanel
from preview.ui.panels.parts import PartsPanel
from preview.ui.panels.schematic import SchematicPanel, annotated, drawing_width
from preview.ui.panels.timeline import TimelinePanel
from preview.ui.theme import DARK, LIGHT, PALETTES, Look, first_palette
from preview.ui.widgets.board import fit, heading, row_cells, spread
from preview.ui.widgets.dots import DotField
from preview.ui.widgets.levelbar import VoltAxis, level_bar, scale_line
from preview.ui.words import clock, dbu, duration, full_scale, hertz, rails, volts
from preview.values.levels import parse_full_scale
from preview.values.quality import Quality


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


# ---- meters ----


def test_equal_steps_on_the_axis_are_equal_ratios() -> None:
    axis = VoltAxis.up_to(10.0, 100)
    decade = axis.place(10.0) - axis.place(1.0)
    assert axis.place(1.0) - axis.place(0.1) == pytest.approx(decade)
    assert axis.place(10.0) == pytest.approx(100 * 60 / 63)  # 3 dB below the end of 63 dB
    assert axis.place(0.0) == -math.inf


def test_the_scale_marks_stand_where_the_bars_end() -> None:
    axis = VoltAxis.up_to(10.0, 120)
    line = scale_line(axis)
    for mark_v, label in ((0.1, "0.1"), (1.0, "1 "), (10.0, "10")):
        assert line[int(axis.place(mark_v)) :].startswith(label.strip())


def _bar(**levels: float) -> str:
    axis = VoltAxis.up_to(15.0, 60)
    given = {"rms_v": 0.0, "peak_v": 0.0, "hold_v": 0.0, "wall_v": 15.0, "rail": True} | levels
    return text_of(level_bar(axis, DARK, **given))


def test_a_bar_tells_rms_peak_hold_and_rail_by_shape() -> None:
    bar = _bar(rms_v=0.5, peak_v=2.0, hold_v=5.0)
    assert re.fullmatch(r"▆+▂+ +╿ *▐░+", bar), bar
    assert len(bar) == 60


def test_silence_has_no_bar_and_the_wall_stays() -> None:
    assert re.fullmatch(r" +▐░+", _bar())


def test_a_level_at_the_rail_touches_the_wall() -> None:
    bar = _bar(rms_v=10.0, peak_v=15.0, hold_v=15.0)
    assert " " not in bar[: bar.index("▐")]


def test_full_scale_of_the_input_looks_unlike_a_rail() -> None:
    assert "▐" not in _bar(rail=False)
    assert "┊" in _bar(rail=False)


def test_no_limit_means_no_wall() -> None:
    assert _bar(wall_v=None).strip() == ""


def _meters(desk: Desk, width: int = 80, height: int = 6, now_s: float = 0.0) -> list[str]:
    panel = MetersPanel(desk, Look(), now_s=lambda: now_s)
    return [text_of(r) for r in panel.rows(width, height)]


def test_the_meters_show_volts_dbu_and_the_room_to_the_rail(desk, engine) -> None:
    desk.take(
        replace(
            engine.snapshot,
            output=LevelReading((3.0, 1.0), (7.5, 1.0), (0.7746, 0.5)),
            opamps=(OpAmpReading("U1", 7.5, 7.5, -7.0, 6.02, 12, 0.034, 1e5),),
            limited_blocks=2,
        )
    )
    lines = _meters(desk)
    assert lines[3].rstrip().endswith("6.0")  # 20 log10(15 / 7.5)
    assert "775 mV" in lines[3]
    assert "+0.0" in lines[3]
    assert "7.50 V" in lines[3]
    assert "6.0 dB to the rails ±15 V" in lines[5]
    assert "CLIP ×12" in lines[5]
    assert "clipped 34 ms" in lines[5]
    assert "device limiter ×2" in lines[5]
    assert all(len(line) <= 80 for line in lines)


def test_the_clip_light_is_a_word_in_lower_case_until_something_clips(desk) -> None:
    assert "clip ×0" in _meters(desk)[5]


def test_the_input_is_measured_against_full_scale(desk, engine) -> None:
    full_scale_v = desk.session.full_scale.volts
    hold = (full_scale_v / 2.0, full_scale_v / 2.0)
    desk.take(replace(engine.snapshot, input=LevelReading(hold, hold, hold)))
    assert _meters(desk)[1].rstrip().endswith("6.0")


def test_more_channels_than_rows_are_folded_into_the_loudest(desk, engine) -> None:
    level = tuple(float(n) for n in range(1, 7))
    reading = LevelReading(level, level, level)
    desk.take(replace(engine.snapshot, input=reading, output=reading))
    lines = _meters(desk, height=6)
    assert lines[1].startswith(" in 1")
    assert lines[2].startswith(" in 2+ ")
    assert lines[4].startswith(" out 2+"), "a label is never cut"
    assert "6.00 V" in lines[2]


def test_in_bypass_the_lower_bars_say_so_and_have_no_rail(desk, engine) -> None:
    level = (2.0, 2.0)
    desk.take(replace(engine.snapshot, bypass=True, output=LevelReading(level, level, level)))
    for line in _meters(desk)[3:5]:
        assert line.startswith(" byp ")
        assert "▐" not in line
        assert line.endswith("-")


def test_a_visit_to_the_rail_from_before_the_counts_were_cleared_is_not_hidden(desk, engine) -> None:
    at_the_rail = OpAmpReading("U1", 15.0, 15.0, 15.0, 0.0, 0, 0.437, 0.0)
    desk.take(replace(engine.snapshot, opamps=(at_the_rail,)))
    assert "CLIP ×1  clipped 437 ms" in _meters(desk)[5]


def test_in_a_small_window_the_clip_count_goes_before_an_idle_limiter(desk, engine) -> None:
    clipped = OpAmpReading("U1", 15.0, 15.0, -15.0, 0.0, 123, 0.5, 0.0)
    desk.take(replace(engine.snapshot, opamps=(clipped,)))
    assert "CLIP ×123" in _meters(desk, width=60)[5]
    desk.take(replace(engine.snapshot, opamps=(clipped,), limited_blocks=2))
    assert "device limiter ×2" in _meters(desk, width=60)[5]


def test_nothing_below_a_microvolt_is_called_a_level(desk, engine) -> None:
    quiet = (4e-7, 4e-7)
    desk.take(replace(engine.snapshot, output=LevelReading(quiet, quiet, quiet)))
    assert re.search(r" 0 V +- +0 V +0 V", _meters(desk)[3])


def test_on_a_single_supply_the_op_amp_knows_its_room(desk, engine) -> None:
    desk.change(replace(desk.session, supply=Supply(9.0, 0.0)))
    desk.take(
        replace(
            engine.snapshot,
            output=LevelReading((4.0, 4.0), (4.0, 4.0), (1.0, 1.0)),
            opamps=(OpAmpReading("U1", 4.0, 4.0, 0.5, 1.25, 0, 0.0, 0.0),),
        )
    )
    assert _meters(desk)[3].rstrip().endswith("1.2")


def test_a_peak_falls_back_at_a_steady_rate(desk, engine) -> None:
    now = [0.0]
    panel = MetersPanel(desk, Look(), now_s=lambda: now[0])
    desk.take(replace(engine.snapshot, output=LevelReading((10.0, 10.0), (10.0, 10.0), (1.0, 1.0))))
    panel.rows(80, 6)
    desk.take(replace(engine.snapshot, output=LevelReading((0.0, 0.0), (10.0, 10.0), (0.0, 0.0))))
    now[0] = 20.0 / 26.0
    assert "1.00 V" in text_of(panel.rows(80, 6)[3])  # 20 dB lower


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
    desk.play(True)
    desk.do_bypass()
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
    desk.bypass = True
    line = text_of(HeaderPanel(desk, Look()).rows(width, 3)[2])
    assert "BYPASS: input heard " in line or "BYPASS: you hear the input, not the stage " in line
    assert len(line) == width


def test_the_deviation_is_not_cut_in_a_small_window(desk) -> None:
    desk.figures.now = replace(_low_pass(), error_db=1.2e-4, sample_rate_hz=48e3)
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
    desk.seek(300_000)
    desk.do_region_start()
    line = text_of(panel.rows(80, 1)[0])
    assert "0:06.2" in line
    assert "region 0:06.2 to 0:12.5" in line
    assert line.index("◆") < line.index(")")
    desk.seek(0)
    line = text_of(panel.rows(80, 1)[0])
    assert line.index("◆") < line.index("(") < line.index(")")
    assert len(line) == 80


# ---- parts and schematic ----


def test_the_list_marks_selection_change_and_odd_values(desk) -> None:
    desk.set_value(4321.0)
    lines = [text_of(r) for r in PartsPanel(desk, Look()).rows(36, 11)]
    assert lines[1].startswith("▸ R1 4.321 kΩ")
    assert "≠E24" in lines[1]
    assert "was 10k" in lines[1]
    assert "▸" not in lines[2]
    assert "the input impedance" in " ".join(lines)


def test_a_list_longer_than_the_panel_follows_the_selection(desk) -> None:
    desk.open_stage(find_stage("non-inverting-gain"))
    desk.choose(4)
    lines = [text_of(r) for r in PartsPanel(desk, Look()).rows(36, 4)]
    assert lines[-1].startswith("▸ C1")


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
    desk.set_value(4700.0)
    lines = [text_of(r) for r in SchematicPanel(desk, Look()).rows(57, 11)]
    assert any("▸R1 4k7" in line for line in lines)


def test_a_value_too_long_for_the_drawing_leaves_the_wires_alone(session) -> None:
    stage = with_value(session, "R1", 4321.0).stage
    stage = replace(stage, drawing="  R1 │ out")
    assert "".join(text for text, _ in annotated(stage, None)[0]) == "  R1 │ out"


def test_a_designator_inside_a_longer_one_is_not_taken_for_it(session) -> None:
    stage = replace(session.stage, drawing="R11      R1      xR1")
    named = [name for _, name in annotated(stage, None)[0] if name]
    assert named == ["R1"]


def test_a_stage_without_a_drawing_is_listed(desk) -> None:
    desk.session = replace(desk.session, stage=replace(desk.session.stage, drawing=""))
    lines = [text_of(r) for r in SchematicPanel(desk, Look()).rows(57, 11)]
    assert any("R1  10 kΩ  from in to sum" in line for line in lines)
    assert any("U1  ideal  + gnd, - sum, out out" in line for line in lines)


# ---- curve ----


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
    f = np.geomspace(10.0, 100e3, 201)
    h = -10.0 / (1.0 + 1j * f / corner_hz)
    return Figures(f, 20 * np.log10(abs(h)), np.degrees(np.angle(h)), (corner_hz,), 20.0, 0.00042, 48e3)


def test_the_curve_marks_the_corner_where_it_lies(desk) -> None:
    desk.figures.now = desk.figures.before = _low_pass()
    lines = [text_of(r) for r in CurvePanel(desk, Look()).rows(80, 24)]
    at = lines[1].index("▾ 1.59 kHz")
    assert at == 5 + _column(1591.549, 80 - 6)
    assert sum(line[at : at + 1] == "╎" for line in lines) > 10
    assert "100k" in lines[-1]


def test_the_curve_bends_at_its_corner(desk) -> None:
    desk.figures.now = desk.figures.before = _low_pass()
    lines = [text_of(r) for r in CurvePanel(desk, Look()).rows(80, 24)][2:-1]

    def height(column: int) -> int:
        return next(y for y, line in enumerate(lines) if 0x2800 < ord(line[column]) < 0x2900)

    assert height(10) == height(40), "flat below the corner"
    assert height(78) - height(65) >= 4, "20 dB a decade above it"


def test_two_corners_that_meet_do_not_overwrite_each_other(desk) -> None:
    desk.figures.now = replace(_low_pass(), corners_hz=(1000.0, 1300.0, 99e3))
    lines = [text_of(r) for r in CurvePanel(desk, Look()).rows(80, 24)]
    assert lines[1].split() == ["▾", "1.00", "kHz", "99.0", "kHz", "▾"]
    assert lines[5].count("╎") == 3


def test_the_curve_is_drawn_again_only_when_what_it_shows_has_changed(desk) -> None:
    desk.figures.now = _low_pass(1591.5)
    panel = CurvePanel(desk, Look())
    first = panel.rows(80, 20)
    assert panel.rows(80, 20) is first
    desk.phase_shown = True
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
    f = np.geomspace(10.0, 100e3, 50)
    desk.figures.now = Figures(f, np.full(50, gain_db), np.zeros(50), (), gain_db, 0.0001, 48e3)
    assert len(CurvePanel(desk, Look()).rows(60, 12)) == 12


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
