"""The signal path: levels on an axis of volts, the room to every limit, which row is worst."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest

from preview.circuit.opamp import OpAmpReading
from preview.circuit.parts import Supply
from preview.meters.reading import LevelReading
from preview.ui.desk import Desk
from preview.ui.opamps import with_opamp_type
from preview.ui.panels.path import PathPanel
from preview.ui.signalpath import State, path_rows, worst_of
from preview.ui.theme import DARK, Look
from preview.ui.units import LevelUnit
from preview.ui.widgets.levelbar import VoltAxis, level_bar, scale_line


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


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


# ---- the rows ----


def _lines(desk: Desk, width: int = 80, height: int = 6, now_s: float = 0.0) -> list[str]:
    panel = PathPanel(desk, Look(), now_s=lambda: now_s)
    return [text_of(r) for r in panel.rows(width, height)]


def _say(desk: Desk, engine, **fields: object) -> None:
    desk.take(replace(engine.snapshot, **fields))


def _level(volts: float) -> LevelReading:
    return LevelReading((volts, volts), (volts, volts), (volts, volts))


def _reading(name: str = "U1", **fields: object) -> OpAmpReading:
    return replace(OpAmpReading(name, 0.0, 0.0, 0.0, math.inf, 0, 0.0, 0.0), **fields)


def test_the_path_runs_from_source_to_output_in_order(desk) -> None:
    labels = [line.split()[0] for line in _lines(desk)[1:]]
    assert labels == ["in", "in", "U1", "out", "out"]


def test_the_path_shows_volts_and_the_room_to_the_rail(desk, engine) -> None:
    half = _reading(peak_v=7.5, high_v=7.5, low_v=-7.0, headroom_db=6.02, slew_peak_v_per_s=1e5)
    _say(desk, engine, output=LevelReading((3.0, 1.0), (7.5, 1.0), (0.7746, 0.5)), opamps=(half,))
    lines = _lines(desk)
    assert re.search(r"775 mV +7\.50 V +6\.0", lines[4])  # 20 log10(15 / 7.5)
    assert re.search(r"7\.50 V +6\.0 +×0 +◂ tightest", lines[3])
    assert all(len(line) == 80 for line in lines[1:])


def test_levels_are_written_in_the_unit_that_is_set(desk, engine) -> None:
    _say(desk, engine, output=LevelReading((1.0, 1.0), (1.0, 1.0), (0.774597, 0.5)))
    desk.view.unit = LevelUnit.DBU
    assert re.search(r"\+0\.0 +-0\.8", _lines(desk)[4])  # 0.7746 V rms is 0 dBu; 1 V peak is -0.79 dBu
    desk.view.unit = LevelUnit.DBV
    assert re.search(r"-2\.2 +-3\.0", _lines(desk)[4])  # 20 log10 0.7746; 1 V peak is 0.7071 V rms
    desk.view.unit = LevelUnit.DBFS
    full_scale_v = desk.session.full_scale.volts
    _say(desk, engine, output=_level(full_scale_v / math.sqrt(2.0)))
    # AES17: a sine at full scale has an rms of 0 dBFS; a peak 3.01 dB lower is at -3.0
    assert re.search(r"\+0\.0 +-3\.0", _lines(desk)[4])


def test_the_unit_goes_round(desk) -> None:
    seen = []
    for _ in range(5):
        desk.method("next_unit")()
        seen.append(desk.view.unit.value)
    assert seen == ["dBu", "dBV", "dBFS", "V", "dBu"]
    assert _lines(desk)[0].startswith(" dBu")


def test_the_scale_has_the_marks_of_its_unit() -> None:
    axis = VoltAxis.up_to(10.0, 120)
    line = scale_line(axis, LevelUnit.DBU, 8.7)
    # 0 dBu is 1.0954 V peak of a sine
    at = int(axis.place(math.sqrt(2.0) * math.sqrt(0.6)))
    assert line[at : at + 2] == "0 "
    assert line[int(axis.place(math.sqrt(2.0) * math.sqrt(0.6) * 10.0 ** (10 / 20))) :].startswith("+10")


def test_clipping_is_a_word_and_a_count(desk, engine) -> None:
    _say(desk, engine, opamps=(_reading(peak_v=15.0, headroom_db=0.0, clip_events=12, clipped_s=0.034),))
    line = _lines(desk, width=120)[3]
    assert "×12" in line
    assert "34 ms" in line
    assert "◂ CLIPS" in line


def test_a_visit_to_the_rail_from_before_the_counts_were_cleared_is_not_hidden(desk, engine) -> None:
    _say(desk, engine, opamps=(_reading(peak_v=15.0, headroom_db=0.0, clipped_s=0.437),))
    assert re.search(r"×1 +◂ CLIPS", _lines(desk)[3])


def test_slew_and_current_are_shown_in_percent_of_the_limit(desk, engine) -> None:
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    (site,) = desk.sites()
    reading = _reading(
        peak_v=7.0,
        headroom_db=6.0,
        slew_peak_v_per_s=0.25 * site.model.slew_up_v_per_s,
        slew_limit_v_per_s=site.model.slew_up_v_per_s,
        current_peak_a=2.5e-3,
        current_limit_a=25e-3,
    )
    _say(desk, engine, opamps=(reading,))
    assert re.search(r"6\.0 +25 % +10 %", _lines(desk)[3])


@pytest.mark.parametrize(
    ("fields", "word"),
    [
        ({"headroom_db": 2.9}, "near"),
        ({"slew_peak_v_per_s": 13e6, "slew_limit_v_per_s": 13e6}, "SLEWS"),
        ({"slew_peak_v_per_s": 12.5e6, "slew_limit_v_per_s": 13e6}, "near"),
        ({"current_limit_a": 25e-3, "current_peak_a": 25e-3, "current_limited_s": 0.001}, "CURRENT"),
        ({"input_range_events": 2, "input_range_s": 0.001}, "RANGE"),
        ({"unsolved_steps": 3, "clip_events": 4}, "UNSOLVED"),
    ],
)
def test_each_state_has_a_word(desk, engine, fields, word) -> None:
    _say(desk, engine, opamps=(_reading(peak_v=1.0, **({"headroom_db": 20.0} | fields)),))
    assert word in _lines(desk)[3]


def test_a_recording_at_full_scale_is_suspect(desk, engine) -> None:
    _say(desk, engine, input=_level(desk.session.full_scale.volts))
    assert "FULL" in _lines(desk)[1]


def test_the_worst_is_the_one_at_a_limit_then_the_one_with_least_room(two_opamps, engine) -> None:
    desk = two_opamps
    first = _reading("U1", peak_v=14.0, headroom_db=0.6)
    second = _reading("U2", peak_v=2.0, headroom_db=17.5)
    _say(desk, engine, opamps=(first, second))
    assert worst_of(path_rows(desk)).label == "U1"
    _say(desk, engine, opamps=(first, replace(second, clip_events=1)))
    worst = worst_of(path_rows(desk))
    assert (worst.label, worst.state) == ("U2", State.CLIPS)
    marked = [line for line in _lines(desk, height=7) if "◂" in line]
    assert len(marked) == 1
    assert marked[0].split()[0] == "U2"


def test_where_rows_are_scarce_the_worst_op_amp_keeps_its_own(two_opamps, engine) -> None:
    desk = two_opamps
    quiet, clips = _reading("U1", peak_v=1.0, headroom_db=23.5), _reading("U2", peak_v=15.0, clip_events=2)
    _say(desk, engine, opamps=(quiet, clips))
    labels = [line.split()[0] for line in _lines(desk, height=4)[1:]]
    assert labels == ["in", "U2", "out"]


def test_the_live_level_of_an_op_amp_falls_while_its_hold_stays(desk, engine) -> None:
    _say(desk, engine, opamps=(_reading(peak_v=10.0, headroom_db=3.5),), opamp_peaks_v=(0.1,))
    bar = _lines(desk, width=120)[3]
    assert re.search(r"100 mV +10\.0 V", bar)
    assert bar.index("▂") < bar.index("╿")


def test_the_input_is_measured_against_full_scale(desk, engine) -> None:
    _say(desk, engine, input=_level(desk.session.full_scale.volts / 2.0))
    assert re.search(r" 6\.0 ", _lines(desk)[1])


def test_more_channels_than_rows_are_folded_into_the_loudest(desk, engine) -> None:
    level = tuple(float(n) for n in range(1, 7))
    reading = LevelReading(level, level, level)
    _say(desk, engine, input=reading, output=reading)
    lines = _lines(desk, height=6)
    assert [line.split()[0] for line in lines[1:]] == ["in", "in", "U1", "out", "out"]
    assert lines[2].startswith(" in 2+")
    assert lines[5].startswith(" out 2+"), "a label is never cut"
    assert "6.00 V" in lines[2]
    assert "6.00 V" in _lines(desk, height=4)[1], "in one row it is the loudest of all"


def test_in_bypass_the_lower_bars_say_so_and_have_no_rail(desk, engine) -> None:
    _say(desk, engine, bypass=True, output=_level(2.0))
    for line in _lines(desk)[4:6]:
        assert line.startswith(" byp ")
        assert "▐" not in line


def test_nothing_below_a_microvolt_is_called_a_level(desk, engine) -> None:
    _say(desk, engine, output=_level(4e-7))
    assert re.search(r" 0 V +0 V", _lines(desk)[4])
    desk.view.unit = LevelUnit.DBU
    assert re.search(r" - +- ", _lines(desk)[4])


def test_on_a_single_supply_the_op_amp_knows_its_room(desk, engine) -> None:
    desk.change(replace(desk.session, supply=Supply(9.0, 0.0)))
    level = LevelReading((4.0, 4.0), (4.0, 4.0), (1.0, 1.0))
    _say(desk, engine, output=level, opamps=(_reading(peak_v=4.0, high_v=4.0, low_v=0.5, headroom_db=1.25),))
    assert re.search(r"4\.00 V +1\.2 ", _lines(desk)[4])


def test_a_peak_falls_back_at_a_steady_rate(desk, engine) -> None:
    now = [0.0]
    panel = PathPanel(desk, Look(), now_s=lambda: now[0])
    _say(desk, engine, output=LevelReading((10.0, 10.0), (10.0, 10.0), (1.0, 1.0)))
    panel.rows(120, 6)
    _say(desk, engine, output=LevelReading((0.0, 0.0), (10.0, 10.0), (0.0, 0.0)))
    now[0] = 20.0 / 26.0
    assert re.search(r"1\.00 V +10\.0 V", text_of(panel.rows(120, 6)[4]))  # 20 dB lower


@pytest.mark.parametrize("kind", ["perfect", "ideal", "TL072"])
@pytest.mark.parametrize("width", [40, 60, 80, 100, 120, 160])
def test_a_row_is_never_longer_than_the_screen_is_wide(desk, engine, kind, width) -> None:
    desk.change(with_opamp_type(desk.session, kind)[0])
    clipped = _reading(peak_v=15.0, headroom_db=0.0, clip_events=12345, clipped_s=123.4, current_peak_a=0.01)
    _say(desk, engine, opamps=(clipped,))
    if width >= 80:
        assert all(len(line) <= width for line in _lines(desk, width=width))
