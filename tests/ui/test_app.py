"""The desk as a whole: first run, sizes, a stopped engine, colours, what it loads."""

from __future__ import annotations

import asyncio
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from xml.etree import ElementTree

import pytest
from rich.color import Color
from textual.events import Resize
from textual.geometry import Size
from textual.pilot import Pilot

from preview.engine.messages import Notice, Play, SetPart, SetVolume
from preview.errors import DeviceError
from preview.meters.reading import LevelReading
from preview.ui.app import DeskApp
from preview.ui.figures import Figures, compute_figures, job_of
from preview.ui.link import AnswerWatch
from preview.ui.picture import desk_svg
from preview.ui.screens.pages import CautionScreen


async def until(pilot: Pilot, condition: Callable[[], bool], seconds: float = 10.0) -> None:
    """Let the desk run until the condition holds; fails at the deadline."""
    give_up_s = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < give_up_s, "did not come true in time"
        await pilot.pause(0.01)


def screen_text(app: DeskApp) -> str:
    """Everything that the panels show."""
    boards = [board for board in app.boards if board.display]
    return "\n".join("".join(s.text for s in row) for board in boards for row in board.painted)


# ---- first run ----


async def test_the_first_run_shows_the_hearing_caution_before_any_sound(make_app, engine, tmp_path) -> None:
    app: DeskApp = make_app(first_run=True)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        assert isinstance(app.screen, CautionScreen)
        assert "-20 dB" in " ".join(app.screen.paragraphs)
        assert engine.sent == [SetVolume(-20.0)]
        await pilot.press("enter")
        await pilot.pause()
        assert Play() in engine.sent
    assert (tmp_path / "hearing-caution-seen").exists()


async def test_leaving_the_caution_keeps_the_desk_silent_and_asks_again(make_app, engine, tmp_path) -> None:
    app: DeskApp = make_app(first_run=True)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        await pilot.press("escape")
        await pilot.pause()
        assert not isinstance(app.screen, CautionScreen)
        assert Play() not in engine.sent
    assert not (tmp_path / "hearing-caution-seen").exists()


async def test_a_later_run_plays_at_once(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)):
        assert engine.sent == [SetVolume(-20.0), Play()]


async def test_a_config_folder_that_cannot_be_written_is_no_error(make_app, tmp_path, engine) -> None:
    (tmp_path / "file").touch()
    app: DeskApp = make_app(first_run=True, config=tmp_path / "file" / "below")
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        await pilot.press("enter")
        await pilot.pause()
        assert Play() in engine.sent


# ---- sizes ----


async def test_80_by_24_has_meters_parts_curve_figures_and_keys(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await until(pilot, lambda: app.desk.figures.now is not None)
        text = screen_text(app)
        for words in (
            "announcement.wav",
            "Inverting low-pass",
            "full scale +18 dBu = 8.70 V peak",
            "silent clock",
            "dropouts 0",
            "in L",
            "out R",
            "clips",
            "×0",
            "R1 10 kΩ",
            "▾ 1.59 kHz",
            "heard response within 0.0004 dB of the circuit to 20 kHz (standard)",
            "? help",
        ):
            assert words in text, words
        assert "schematic" not in text
        await pilot.press("v")
        await pilot.pause()
        text = screen_text(app)
        assert "▸R1 10k" in text
        assert "▾ 1.59 kHz" not in text


@pytest.mark.parametrize("size", [(120, 24), (120, 40), (160, 48), (200, 60)])
async def test_from_120_columns_curve_and_schematic_stand_together(make_app, size) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=size) as pilot:
        await until(pilot, lambda: app.desk.figures.now is not None)
        await pilot.pause()
        text = screen_text(app)
        assert "▸R1 10k" in text
        assert "▾ 1.59 kHz" in text
        assert "═╧═ gnd" in text, "the drawing is whole"


@pytest.mark.parametrize("size", [(1, 1), (20, 5), (40, 12), (60, 16), (79, 23)])
async def test_a_small_window_is_no_error(make_app, engine, size) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=size) as pilot:
        await pilot.press("right", "v", "d", "question_mark", "escape", "equals_sign", "escape")
        await pilot.pause()
        assert SetPart("R1", 11e3) in engine.sent


async def test_the_window_may_change_its_size(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.resize_terminal(80, 24)
        await until(pilot, lambda: app.response.size.width == 44)
        assert not app.circuit.display or app.circuit.size.width == 0
        await pilot.resize_terminal(160, 48)
        await until(pilot, lambda: app.circuit.size.width > 57)


async def test_a_size_that_the_library_has_lost_is_taken_all_the_same(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.pause()
        # as on a machine so busy that the library's timer of 8 ms is over before it begins: it never fires, and as
        # long as it stands no other is set
        app._resize_timer = app.set_timer(3600.0, lambda: None)
        for width, height in ((80, 24), (1, 1), (120, 40)):
            app.post_message(Resize(Size(width, height), Size(width, height)))
            await until(pilot, lambda: app.screen.outer_size == (width, height))  # noqa: B023 - done within the turn
        await until(pilot, lambda: app.head.outer_size.width == 120)


@pytest.mark.parametrize("channels", [1, 2, 6])
async def test_the_meters_take_any_number_of_channels(make_app, engine, channels) -> None:
    level = LevelReading((1.0,) * channels, (2.0,) * channels, (0.5,) * channels)
    engine.say(input=level, output=level)
    app: DeskApp = make_app()
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.pause()
        text = "\n".join("".join(s.text for s in row) for row in app.path.painted)
        assert text.count("500 mV") == 2 * channels


# ---- figures ----


async def test_corner_and_gain_are_shown_before_and_after(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("down", "right_square_bracket")  # R2 100 k -> 220 k
        await until(pilot, lambda: app.desk.figures.now is not app.desk.figures.before)
        line = "".join(s.text for s in app.figures.painted[0])
        assert "corner 1.59 kHz → 723 Hz" in line  # 1 / (2 pi 220 kohm 1 nF)
        assert "gain 20.0 dB → 26.8 dB" in line  # 20 log10 22


async def test_keys_stay_quick_while_a_figure_takes_long(make_app, engine) -> None:
    started: list[float] = []

    def slow(job) -> Figures:
        started.append(job.netlist.values["R1"])
        time.sleep(0.3)  # stands for a long computation; it is what this test is about
        return Figures(problem="slow")

    app: DeskApp = make_app(make_figures=slow)
    async with app.run_test(size=(80, 24)) as pilot:
        await until(pilot, lambda: bool(started))
        for _ in range(10):
            await pilot.press("right")
        assert engine.sent[-1].value == app.desk.parts.part.value
        await until(pilot, lambda: app.desk.parts.part.value in started)
        assert len(started) < 11, "values that were passed over are not computed one by one"


async def test_a_circuit_without_figures_says_why(make_app, session) -> None:
    app: DeskApp = make_app(make_figures=lambda *_: Figures(problem="the circuit is not stable"))
    async with app.run_test(size=(80, 24)) as pilot:
        await until(pilot, lambda: app.desk.figures.now is not None)
        assert "the circuit is not stable" in screen_text(app)


def test_the_real_figures_are_those_of_the_stage_file(session) -> None:
    figures = compute_figures(job_of(session, 48e3))
    expected = {expect.what: expect.value for expect in session.stage.expects if not expect.parts}
    assert figures.corners_hz == pytest.approx((expected["corner_hz"],), rel=1e-5)
    assert figures.passband_gain_db == pytest.approx(expected["passband_gain_db"], abs=1e-3)
    assert figures.error_db is not None
    assert 0.0 < figures.error_db < 0.01  # the promise of the standard quality


# ---- the engine ----


async def test_an_engine_that_stops_is_replaced_and_plays_on_at_its_place(make_app, engine) -> None:
    new, began = type(engine)(), []
    app: DeskApp = make_app(restart=lambda left: began.append(left) or new)
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("right")
        engine.say(position_frame=123_456, playing=True)
        await until(pilot, lambda: app.desk.listening.position_frame == 123_456)
        engine.alive = False
        await until(pilot, lambda: app.desk.link is new)
        assert engine.closed
        (left,) = began
        assert left.session.netlist().values["R1"] == 11e3
        assert left.session.full_scale == app.desk.session.full_scale
        assert left.start_frame == 123_456
        assert new.sent == [Play()]
        assert "runs again" in app.foot.message


async def test_an_engine_that_stops_again_at_once_is_left_to_the_person(make_app, engine) -> None:
    engines = [type(engine)(), type(engine)()]
    app: DeskApp = make_app(restart=lambda left: engines.pop(0))
    second, third = engines
    async with app.run_test(size=(80, 24)) as pilot:
        engine.alive = False
        await until(pilot, lambda: app.desk.link is second)
        second.alive = False
        await until(pilot, lambda: app.desk.stopped)
        assert "ENGINE STOPPED: no sound. Press R" in screen_text(app)
        await pilot.press("R")
        await until(pilot, lambda: app.desk.link is third)
        assert Play() not in third.sent, "sound starts by hand then"
        await pilot.press("space")
        assert third.sent[-1] == Play()
        assert "ENGINE STOPPED" not in screen_text(app)


async def test_an_engine_that_hangs_is_replaced(make_app, engine) -> None:
    new = type(engine)()
    app: DeskApp = make_app(restart=lambda left: new)
    async with app.run_test(size=(80, 24)) as pilot:
        await until(pilot, lambda: app.desk.snapshot is not None)
        await pilot.press("R")
        assert app.foot.message == "the engine is running"
        await until(
            pilot, lambda: engine.closed and app.desk.link is new
        )  # it lives, but says nothing any more
        assert not app.desk.unanswered


async def test_an_engine_that_hangs_and_cannot_be_replaced_is_said(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await until(pilot, lambda: app.desk.unanswered)
        assert "ENGINE DOES NOT ANSWER. Press R" in screen_text(app)


async def test_a_desk_that_was_suspended_paints_everything_again(make_app, monkeypatch) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        asked = []
        monkeypatch.setattr(app, "refresh", lambda **how: asked.append(how))
        app.app_resume_signal.publish(app)
        # with less, only what changes from then on is painted over the shell's text
        await until(pilot, lambda: {"layout": True} in asked)
        monkeypatch.undo()


def test_an_engine_that_still_starts_or_speaks_again_is_not_overdue() -> None:
    watch = AnswerWatch()
    assert not any(watch.late(False) for _ in range(2000)), "the first start may compile for long"
    watch.late(True)
    assert [watch.late(False) for _ in range(75)] == [False] * 74 + [True]
    assert not watch.late(True)


async def test_an_engine_that_will_not_start_again_is_an_error_on_the_desk(make_app, engine) -> None:
    def fail(left: object) -> None:
        raise DeviceError("no audio device", "plug one in")

    app: DeskApp = make_app(restart=fail)
    async with app.run_test(size=(80, 24)) as pilot:
        engine.alive = False
        await until(pilot, lambda: app.desk.stopped)
        await pilot.press("R")
        await until(pilot, lambda: "no audio device" in app.foot.message)
        assert app.desk.stopped
        await pilot.press("right", "b", "space")  # the desk itself goes on
        assert app.desk.listening.bypass


async def test_notices_of_the_engine_are_shown_cleaned_and_without_markup(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        engine.waiting.append(Notice("[bold]the card\x1b[2J went away[/bold]", "warning"))
        await until(pilot, lambda: "went away" in app.foot.message)
        text = screen_text(app)
        assert "caution: [bold]the card?[2J went away[/bold]" in text
        assert "\x1b" not in text


async def test_a_long_message_is_not_cut(make_app, engine) -> None:
    app: DeskApp = make_app()
    message = "error at the very start " + "words " * 25 + "the end of it"
    async with app.run_test(size=(80, 24)) as pilot:
        engine.waiting.append(Notice(message, "error"))
        await until(pilot, lambda: "the end of it" in screen_text(app))


async def test_a_value_that_steps_out_of_range_is_said(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        app.desk.parts.set(1e12)
        await pilot.press("right")
        await pilot.pause()
        assert "out of range" in app.foot.message
        assert app.desk.parts.part.value == 1e12


async def test_file_names_are_neither_markup_nor_control_codes(make_app, session) -> None:
    app: DeskApp = make_app(session=replace(session, audio=Path("[red]x[bold]\x1b]0;y\x07.wav")))
    async with app.run_test(size=(160, 48)) as pilot:
        await pilot.pause()
        assert "[red]x[bold]?]0;y?.wav" in screen_text(app)
        await pilot.press("w")
        await pilot.pause()
        assert "[red]x[bold]?]0;y?.wav" in app.screen.paragraphs[0]


async def test_a_click_selects_a_part_and_seeks(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.click("#parts", offset=(6, 3))
        await pilot.pause()
        assert app.desk.parts.part.designator == "C1"
        await pilot.click("#timeline", offset=(40, 0))
        await pilot.pause()
        assert 200_000 < app.desk.listening.position_frame < 400_000


# ---- colours ----


@pytest.mark.parametrize("no_color", ["1", None])
@pytest.mark.parametrize("keys", [(), ("k",)], ids=["dark", "light"])
async def test_without_colours_text_still_differs_from_its_ground(
    make_app, monkeypatch, no_color, keys
) -> None:
    if no_color is None:
        monkeypatch.delenv("NO_COLOR", raising=False)
    else:
        monkeypatch.setenv("NO_COLOR", no_color)
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press(*keys, "b")
        await pilot.pause()
        seen = 0
        for y in range(24):
            for segment in app.screen._compositor.render_strips()[y]:
                strip = segment.style
                if not segment.text.strip() or strip is None:
                    continue
                colours = {Color.parse(strip.color.name), Color.parse(strip.bgcolor.name)}
                assert len(colours) == 2, f"unreadable: {segment.text!r}"
                if no_color:
                    assert all(len(set(c.get_truecolor())) == 1 for c in colours), "grey only"
                seen += 1
        assert seen > 40
        assert "BYPASS" in screen_text(app)


# ---- the picture and the imports ----


async def test_a_picture_of_the_desk_needs_no_terminal_and_refers_to_nothing(session, engine) -> None:
    snapshot = replace(engine.snapshot, playing=True)
    svg = await asyncio.to_thread(desk_svg, session, snapshot=snapshot, size=(120, 44))
    root = ElementTree.fromstring(svg)
    texts = " ".join(node.text or "" for node in root.iter("{http://www.w3.org/2000/svg}text"))
    assert "Inverting low-pass" in texts
    assert "1.59 kHz" in texts
    assert "▶" in texts
    assert svg.count("http") == 1, "the name space only"


def said_by(code: str) -> str:
    """What a Python of its own prints."""
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    return done.stdout.strip()


def test_the_desk_loads_neither_sound_nor_compiler_nor_plots() -> None:
    code = (
        "import sys, preview.ui.app\n"
        "names = ['numba', 'sounddevice', 'soundfile', 'soxr', 'matplotlib', 'scipy.signal']\n"
        "print([name for name in names if name in sys.modules])"
    )
    assert said_by(code) == "[]"


def test_the_engine_is_started_before_anything_large_is_loaded() -> None:
    code = (
        "import sys, preview.cli, preview.engine.door\n"
        "preview.cli._parser()\n"
        "names = ['numpy', 'soundfile', 'textual', 'preview.engine.messages']\n"
        "print([name for name in names if name in sys.modules])"
    )
    assert said_by(code) == "[]"


def test_the_figures_of_a_real_op_amp_load_neither_sound_nor_compiler_nor_plots() -> None:
    code = (
        "import sys, preview.ui.app\n"
        "from dataclasses import replace\n"
        "from preview.circuit.library import find_stage\n"
        "from preview.circuit.netlist import netlist\n"
        "from preview.ui.figures import FigureJob, compute_figures\n"
        "stage = find_stage('inverting-low-pass')\n"
        "stage = stage.with_part(replace(stage.opamps[0], type='TL072'))\n"
        "assert not compute_figures(FigureJob(netlist(stage), None, 48e3)).problem\n"
        "names = ['numba', 'sounddevice', 'soundfile', 'soxr', 'matplotlib', 'scipy.signal']\n"
        "print([name for name in names if name in sys.modules])"
    )
    assert said_by(code) == "[]"


def test_the_figures_load_neither_sound_nor_compiler_nor_plots() -> None:
    code = (
        "import sys, preview.ui.app, preview.analysis.response\n"
        "names = ['numba', 'sounddevice', 'soundfile', 'soxr', 'matplotlib', 'scipy.signal']\n"
        "print([name for name in names if name in sys.modules])"
    )
    assert said_by(code) == "[]"
