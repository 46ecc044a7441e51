"""The response: where curves, corners, cursor and spectrum lie, and what is said about them."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from preview.circuit.drive import SourceModel
from preview.engine.messages import SpectrumReading
from preview.ui.desk import Desk
from preview.ui.figures import Figures, compute_figures, heard_band_hz, job_of
from preview.ui.panels.response import ResponsePanel, cursor_text
from preview.ui.texts import corner_text, heard_text
from preview.ui.theme import Look
from preview.ui.view import Axis, Behind, Ghost
from preview.ui.widgets.dots import DotField
from preview.ui.widgets.plot import FrequencyAxis
from preview.ui.widgets.spectrum import VoltScale
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


# ---- what else is in the plot ----


def _rows(desk: Desk, width: int = 80, height: int = 24) -> list[str]:
    return [text_of(r) for r in ResponsePanel(desk, Look()).rows(width, height)]


def _styles(desk: Desk, width: int = 80, height: int = 24) -> dict[str, str]:
    """Each style of dots in the plot, with the text that has it."""
    found: dict[str, str] = {}
    for cells in ResponsePanel(desk, Look()).rows(width, height)[2:-1]:
        for segment in cells:
            if any(0x2800 < ord(ch) < 0x2900 for ch in segment.text):
                found[segment.style.color.name] = found.get(segment.style.color.name, "") + segment.text
    return found


def test_the_axis_runs_from_1_hz_to_1_mhz_or_over_the_audio_band(desk) -> None:
    desk.figures.now = _low_pass()
    assert _rows(desk)[-1].split() == ["1", "Hz", "10", "100", "1k", "10k", "100k", "1M"]
    desk.method("axis")()
    assert desk.view.axis is Axis.AUDIO
    assert _rows(desk)[-1].split() == ["100", "Hz", "1k", "10k"]
    assert "▾ 1.59 kHz" in _rows(desk)[1]


def test_the_curve_is_bright_as_far_as_it_is_heard(desk) -> None:
    now = _low_pass()
    heard = np.where(now.frequency_hz <= 21.6e3, now.gain_db, np.nan)
    desk.figures.now = replace(now, heard_db=heard)
    look = Look()
    bright, plain = look.palette.output.color.name, look.palette.plain.color.name
    styles = _styles(desk)
    assert set(styles) == {bright, plain}
    axis = FrequencyAxis(1.0, 1e6, 74)
    assert abs(sum(0x2800 < ord(ch) < 0x2900 for ch in styles[bright]) - axis.column(21.6e3)) <= 6


def test_as_drawn_is_a_curve_of_its_own_where_source_or_load_make_a_difference(desk, session) -> None:
    now = _low_pass()
    desk.figures.now = replace(now, drawn_db=now.gain_db + 12.0)
    assert "as drawn" in _rows(desk)[0]
    assert len(_styles(desk)) == 2
    desk.change(replace(desk.session, source=SourceModel(10e3)))
    found = compute_figures(job_of(desk.session, 0.0))
    # 10 kilohm before the 10 kilohm at the input halve the gain: 6.02 dB
    assert found.at(found.drawn_db, 100.0) - found.at(found.gain_db, 100.0) == pytest.approx(6.02, abs=0.01)
    assert compute_figures(job_of(session, 0.0)).drawn_db is None


def test_what_is_heard_is_computed_as_far_as_the_sample_rate_reaches(session) -> None:
    found = compute_figures(job_of(session, 48e3))
    assert found.at(found.heard_db, 1e3) == pytest.approx(found.at(found.gain_db, 1e3), abs=0.001)
    assert math.isnan(found.at(found.heard_db, 30e3))


def test_the_ghost_is_of_before_of_the_last_setting_or_none(desk) -> None:
    desk.figures.now, desk.figures.before, desk.figures.last = (
        _low_pass(),
        _low_pass(500.0),
        _low_pass(5000.0),
    )
    assert "⠒ ⠒ before" in _rows(desk)[0]
    before = _rows(desk)
    assert desk.method("ghost")() == "behind the response: the setting before the last change"
    assert desk.view.ghost is Ghost.LAST
    assert "⠒ ⠒ last" in _rows(desk)[0]
    assert _rows(desk)[2:] != before[2:]
    desk.method("ghost")()
    assert "⠒ ⠒" not in _rows(desk)[0]
    assert len(_styles(desk)) == 1
    desk.view.ghost = Ghost.BEFORE
    desk.figures.before = desk.figures.now
    assert "⠒ ⠒" not in _rows(desk)[0], "the same curve is no ghost"


def test_phase_is_dotted_with_its_own_labels(desk) -> None:
    desk.figures.now = _low_pass()
    desk.method("phase")()
    lines = _rows(desk)
    assert "phase (dotted)" in lines[0]
    assert lines[2].endswith(" 180°")
    assert lines[-2].endswith("-180°")


# ---- cursor ----


def test_the_cursor_reads_gain_and_phase(desk) -> None:
    desk.figures.now = _low_pass()
    desk.view.put_cursor(1591.549)
    # 3.01 dB below 20 dB; inverting: 180 degrees less 45
    assert cursor_text(desk, 78).startswith("1.59 kHz: +16.99 dB +135°")
    lines = _rows(desk)
    assert "+16.99 dB" in lines[1]
    assert sum("┃" in line for line in lines) > 10


def test_the_cursor_begins_at_the_corner_and_steps_by_a_twelfth_of_an_octave(desk) -> None:
    desk.figures.now = _low_pass()
    desk.method("cursor_off")()
    assert desk.view.cursor_hz == 1591.549
    desk.view.put_cursor(1000.0)
    for _ in range(12):
        desk.method("cursor_up")()
    assert desk.view.cursor_hz == pytest.approx(2000.0)
    for _ in range(24):
        desk.method("cursor_down")()
    assert desk.view.cursor_hz == pytest.approx(500.0)
    desk.view.put_cursor(5e6)
    assert desk.view.cursor_hz == 1e6
    assert desk.method("cursor_off")() == "no cursor"


def test_what_does_not_fit_of_the_reading_is_left_out_from_the_end(desk) -> None:
    now = _low_pass()
    desk.figures.now = replace(
        now, drawn_db=now.gain_db, heard_db=now.gain_db, noise_v_rthz=np.full(201, 5e-8)
    )
    desk.view.put_cursor(100.0)
    whole = cursor_text(desk, 200)
    for words in ("drawn +19.98", "heard +19.983", "noise 50 nV/√Hz"):
        assert words in whole
    assert "noise" not in cursor_text(desk, 50)
    assert len(cursor_text(desk, 30)) <= 30
    assert cursor_text(desk, 30).startswith("100 Hz: +19.98 dB")


# ---- spectrum and noise ----

# Exact mid-band frequencies of sixths of an octave, base ten, index 0 at 1 kHz: IEC 61260-1:2014, 5.2.
CENTER_HZ = tuple(1000.0 * 10.0 ** (0.3 * (2 * n + 1) / 12.0) for n in range(-34, 26))


def _spectrum(desk: Desk, engine, tone_hz: float, out_vrms: float = 1.0, in_vrms: float = 0.1) -> None:
    at = min(range(len(CENTER_HZ)), key=lambda n: abs(math.log(CENTER_HZ[n] / tone_hz)))
    quiet = [1e-9] * len(CENTER_HZ)
    out, into = list(quiet), list(quiet)
    out[at], into[at] = out_vrms, in_vrms
    desk.take(replace(engine.snapshot, spectrum=SpectrumReading(CENTER_HZ, tuple(into), tuple(out))))


def test_a_tone_stands_in_its_band_on_the_scale_of_volts(desk, engine) -> None:
    desk.figures.now = _low_pass()
    desk.view.behind = Behind.BOTH
    _spectrum(desk, engine, 200.0)
    lines = _rows(desk, 120, 24)
    axis = FrequencyAxis(1.0, 1e6, 120 - 12)
    column = 5 + axis.column(200.0)
    body = [line[column] for line in lines[2:-1]]
    assert "░" in body
    assert "╴" in body
    assert lines[2].rstrip().endswith("10V"), "a limit of 15 V peak, 10.6 V rms: the scale begins at 10 V rms"
    scale = VoltScale.of(desk)
    height = len(lines) - 3
    # 1 V and 0.1 V are 20 dB and 40 dB below the top of 140 dB
    assert body.index("╴") == int(scale.dots(np.array([0.1]), height)[0]) // 4
    far = 5 + axis.column(20.0)
    assert not any(line[far] in "░╴" for line in lines[2:-1])


def test_input_or_output_alone_or_neither_can_be_shown(desk, engine) -> None:
    desk.figures.now = _low_pass()
    desk.view.behind = Behind.BOTH
    _spectrum(desk, engine, 200.0)
    seen = []
    for _ in range(4):
        text = "".join(_rows(desk, 120, 24)[2:-1])
        seen.append(("░" in text, "╴" in text))
        desk.method("spectrum")()
    assert seen == [(True, True), (True, False), (False, True), (False, False)]


def test_the_cursor_reads_the_band_in_the_unit_that_is_set(desk, engine) -> None:
    desk.figures.now = _low_pass()
    _spectrum(desk, engine, 200.0, out_vrms=0.774597)
    desk.view.put_cursor(200.0)
    assert "in 100 mV out 775 mV" in cursor_text(desk, 120)
    desk.method("next_unit")()
    assert "out +0.0 dBu" in cursor_text(desk, 120)
    desk.view.put_cursor(50e3)
    assert "out" not in cursor_text(desk, 120), "no band so high"


def test_the_noise_floor_is_comparable_with_the_spectrum(desk, session) -> None:
    # White noise of 1 µV/√Hz in a sixth of an octave at 1 kHz: width 1000 (2^(1/12) - 2^(-1/12)) = 115.589 Hz.
    band_v = VoltScale.noise_band_v(np.array([1000.0]), np.array([1e-6]))
    assert band_v[0] == pytest.approx(1e-6 * math.sqrt(115.589), rel=1e-4)
    desk.figures.now = compute_figures(job_of(session, 48e3))
    without = _styles(desk)
    desk.method("noise_floor")()
    assert len(_styles(desk)) == len(without) + 1


def test_the_spectrum_is_drawn_a_few_times_a_second_only(desk, engine) -> None:
    now = [0.0]
    desk.figures.now = _low_pass()
    desk.view.behind = Behind.BOTH
    panel = ResponsePanel(desk, Look(), now_s=lambda: now[0])
    _spectrum(desk, engine, 200.0)
    first = panel.rows(80, 20)
    _spectrum(desk, engine, 2000.0)
    now[0] = 0.05
    assert panel.rows(80, 20) is first
    now[0] = 0.2
    assert panel.rows(80, 20) is not first


async def test_a_click_puts_the_cursor(make_app) -> None:
    app = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        while app.desk.figures.now is None:
            await pilot.pause(0.01)
        await pilot.pause()
        await pilot.click("#response", offset=(25, 6))
        await pilot.pause()
        assert app.desk.view.cursor_hz is not None
        assert "cursor at" in app.foot.message
        assert "┃" in "".join(text_of(r) for r in app.response.painted)


@pytest.mark.parametrize("width", [12, 20, 28, 44, 58, 110])
@pytest.mark.parametrize("height", [2, 4, 8, 20])
def test_the_plot_fits(desk, engine, width, height) -> None:
    desk.figures.now = replace(_low_pass(), noise_v_rthz=np.full(201, 1e-7))
    desk.figures.before = _low_pass(500.0)
    desk.view.behind, desk.view.noise = Behind.BOTH, True
    desk.view.put_cursor(1e3)
    _spectrum(desk, engine, 200.0)
    lines = _rows(desk, width, height)
    assert len(lines) <= height
    assert all(len(line) <= width for line in lines[2:])
