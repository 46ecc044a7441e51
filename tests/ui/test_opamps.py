"""Choosing op-amp types, and the line that says what an op-amp does."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path

import pytest

from preview.circuit import opamp_library
from preview.circuit.opamp import LIMITS
from preview.circuit.opamp_library import find_opamp, opamp_names
from preview.engine.messages import SetCircuit
from preview.errors import CircuitError
from preview.ui.app import DeskApp
from preview.ui.desk import Desk
from preview.ui.figures import compute_figures, job_of
from preview.ui.opamps import opamp_choices, with_opamp_type
from preview.ui.panels.circuit import CircuitPanel
from preview.ui.screens.chooser import ChooserScreen
from preview.ui.theme import Look
from preview.ui.words import limits, milliamperes, slew_of, type_name

SIZES = ((80, 24), (160, 48))


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


def chooser_lines(app: DeskApp) -> list[str]:
    """The rows of the open list as they stand on the screen."""
    return [text_of(r) for r in app.screen.query_one("#choices").painted]


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


@pytest.fixture
def own_folder(monkeypatch, tmp_path) -> Path:
    """An empty folder in place of the person's own op-amps."""
    folder = tmp_path / "opamps"
    folder.mkdir()
    monkeypatch.setattr(opamp_library, "user_opamp_folder", lambda: folder)
    return folder


# ---- the list ----


def test_the_list_has_every_type_with_its_speed_and_slew_rate(own_folder) -> None:
    rows = {row.answer: (row.label, row.about) for row in opamp_choices("ideal")}
    assert tuple(rows) == opamp_names()
    assert tuple(rows)[:2] == ("perfect", "ideal")
    # TL072: 4 MHz and 13 V/us (Motorola data sheet p. 3).
    assert re.fullmatch(r" +4 MHz +13  JFET dual, low noise", rows["TL072"][1])
    assert re.fullmatch(r" +- +-  no limit but the rails", rows["ideal"][1])
    assert len({about.index(find_opamp(name).title) for name, (_, about) in rows.items()}) == 1, "columns"


def test_a_file_of_ones_own_that_is_no_op_amp_says_so_and_the_rest_is_there(own_folder) -> None:
    (own_folder / "bad.toml").write_text("title = 3", "utf-8")
    rows = {row.answer: row.about for row in opamp_choices("ideal")}
    assert rows["bad"].startswith("cannot be used: ")
    assert "TL072" in rows


def test_a_type_from_a_file_is_in_the_list_by_its_short_name(own_folder) -> None:
    path = str(own_folder / "mine.toml")
    (own_folder / "mine.toml").write_text(
        (Path(opamp_library.__file__).parents[1] / "opamps" / "OP27.toml").read_text("utf-8"), "utf-8"
    )
    first = opamp_choices(path)[0]
    assert (first.answer, first.label) == (path, "mine")


def test_a_slew_rate_that_differs_up_and_down_gives_both(own_folder) -> None:
    source = (Path(opamp_library.__file__).parents[1] / "opamps" / "TL072.toml").read_text("utf-8")
    slew = next(line for line in source.splitlines() if line.startswith("slew ="))
    both = (
        slew.replace("slew =", "slew_up =") + "\n" + slew.replace("slew =", "slew_down =").replace("13", "9")
    )
    (own_folder / "uneven.toml").write_text(source.replace(slew, both), "utf-8")
    about = next(row.about for row in opamp_choices("ideal") if row.answer == "uneven")
    assert " 9/13  JFET" in about


@pytest.mark.parametrize("size", SIZES)
async def test_t_lists_the_types_and_enter_takes_one(make_app, engine, own_folder, size) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=size) as pilot:
        await pilot.press("t")
        await pilot.pause()
        assert isinstance(app.screen, ChooserScreen)
        assert any(line.startswith("▸ ideal") for line in chooser_lines(app)), "the one in force is marked"
        while not any(line.startswith("▸ TL072") for line in chooser_lines(app)):
            await pilot.press("down")
            await pilot.pause()
        (line,) = [line for line in chooser_lines(app) if line.startswith("▸ TL072")]
        assert re.search(r" 4 MHz +13  JFET dual, low noise", line)
        heads = text_of(app.screen.query_one(".heads").render_line(0))
        assert heads.rindex("GBW") + 3 == line.index("4 MHz") + 5, "the head stands above its column"
        assert heads.rindex("V/µs") + 4 == line.index("13  JFET") + 2
        await pilot.press("enter")
        await pilot.pause()
        assert isinstance(engine.sent[-1], SetCircuit)
        assert [site.type for site in engine.sent[-1].netlist.opamps] == ["TL072"]
        assert "U1: TL072, JFET dual, low noise" in app.foot.message
        if size == (160, 48):
            assert any(re.match(r" U1 +TL072", text_of(r)) for r in app.path.painted)
        await pilot.press("u")
        await pilot.pause()
        assert [site.type for site in engine.sent[-1].netlist.opamps] == ["ideal"]


@pytest.mark.parametrize("size", SIZES)
async def test_every_row_of_the_list_can_be_reached_and_is_whole(make_app, own_folder, size) -> None:
    app: DeskApp = make_app()
    seen = set()
    async with app.run_test(size=size) as pilot:
        await pilot.press("t")
        await pilot.pause()
        for _ in opamp_names():
            (line,) = [line for line in chooser_lines(app) if line.startswith("▸")]
            title = find_opamp(line.split()[1]).title
            assert title[:40] in line, "what it is has room for 40 cells at 80 columns"
            assert title in line or size == (80, 24)
            seen.add(line.split()[1])
            await pilot.press("down")
            await pilot.pause()
    assert seen == set(opamp_names())


async def test_the_list_shows_that_it_goes_on(make_app, own_folder) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("t")
        await pilot.pause()
        assert chooser_lines(app)[-1].startswith("▾")
        await pilot.press("up", "up")  # past the first row to the last
        await pilot.pause()
        assert chooser_lines(app)[0].startswith("▴")
        assert chooser_lines(app)[-1].startswith("▸")


async def test_leaving_the_list_or_taking_the_type_in_force_changes_nothing(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        sent = list(engine.sent)
        await pilot.press("t", "down", "escape")
        await pilot.press("t", "enter")
        await pilot.pause()
        assert engine.sent == sent
        await pilot.press("u")
        assert app.foot.message == "nothing to take back"


@pytest.mark.parametrize("size", SIZES)
async def test_a_supply_outside_of_the_types_range_is_an_error_and_changes_nothing(
    make_app, engine, own_folder, size
) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=size) as pilot:
        sent = list(engine.sent)
        await pilot.press("t", *["down"] * (opamp_names().index("MCP6002") - 1), "enter")
        await pilot.pause()
        assert "outside the range of MCP6002" in app.foot.message
        assert "error: " in "".join(text_of(r) for r in app.foot.painted)
        assert engine.sent == sent
        assert app.desk.session.stage.opamps[0].type == "ideal"


def test_every_op_amp_of_a_stage_takes_the_type(two_opamps) -> None:
    changed, said = with_opamp_type(two_opamps.session, "TL072")
    assert [opamp.type for opamp in changed.stage.opamps] == ["TL072", "TL072"]
    assert said.startswith("U1, U2: TL072")


def test_the_selected_op_amp_alone_takes_the_type(two_opamps) -> None:
    desk = two_opamps
    assert [desk.method("next_opamp")() for _ in range(3)] == ["op-amp: U1", "op-amp: U2", "op-amp: all"]
    desk.view.opamp = "U2"
    menu = desk.method("opamp_type")()
    assert menu.title == "Op-amp type of U2"
    assert menu.take("TL072").startswith("U2: TL072")
    assert [opamp.type for opamp in desk.session.stage.opamps] == ["ideal", "TL072"]
    assert menu.take("TL072") is None, "the type in force changes nothing"


def test_a_limit_is_taken_away_and_given_back_while_the_rest_stays(desk, engine) -> None:
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    menu = desk.method("opamp_limits")()
    assert [choice.answer for choice in menu.choices] == ["all", *LIMITS]
    menu = menu.take("slew")
    assert desk.session.without == ("slew",)
    model = engine.sent[-1].netlist.opamps[0].model
    assert math.isinf(model.slew_up_v_per_s)
    assert math.isfinite(model.gain_bandwidth_hz)
    assert menu.now == "slew", "the mark stays where it was"
    assert next(c.about for c in menu.choices if c.answer == "slew").startswith("taken away")
    menu.take("swing")
    assert desk.session.without == ("slew", "swing")
    menu.take("slew")
    assert desk.session.without == ("swing",)
    menu.take("all")
    assert desk.session.without == ()
    desk.method("undo")()
    assert desk.session.without == ("swing",)


def test_a_type_that_oscillates_in_this_circuit_is_refused(session) -> None:
    # 1 uF straight on the output: with the output resistance a second pole far below the gain-bandwidth,
    # and the feedback network's own pole (1 megohm with 1 nF at the input) a third.
    r1 = session.stage.part("R1")
    c = replace(session.stage.part("C1"), designator="C9", nodes=("out", "gnd"), value=1e-6)
    c_in = replace(session.stage.part("C1"), designator="C8", nodes=("sum", "gnd"), value=1e-9)
    stage = replace(session.stage, parts=(*session.stage.parts, c, c_in))
    stage = stage.with_part(replace(stage.part("C1"), value=1e-15))
    stage = stage.with_part(replace(stage.part("R2"), value=1e6)).with_part(replace(r1, value=1e6))
    with pytest.raises(CircuitError, match="unstable"):
        with_opamp_type(replace(session, stage=stage), "TL072")


def test_a_real_type_has_figures_of_its_own(session) -> None:
    real, _ = with_opamp_type(session, "LM741")
    ideal = compute_figures(job_of(session, 48e3))
    found = compute_figures(job_of(real, 48e3))
    assert not found.problem
    # Loop gain of finite bandwidth moves the corner down by less than the closed-loop share of the
    # gain-bandwidth: 11 x 1.59 kHz of 1 MHz is 1.7 %.
    assert 0.97 * ideal.corners_hz[0] < found.corners_hz[0] < 0.99 * ideal.corners_hz[0]


def test_the_drawing_names_the_type(desk) -> None:
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    assert any("U1 TL072" in text_of(r) for r in CircuitPanel(desk, Look()).rows(57, 11))


# ---- words ----


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (slew_of(1.9e6, 13e6), "1.9 of 13 V/µs"),
        (slew_of(0.0, 0.5e6), "0.000 of 0.5 V/µs"),
        (slew_of(0.123e6, 1.6e6), "0.12 of 1.6 V/µs"),
        (slew_of(123e6, 2000e6), "123 of 2000 V/µs"),
        (limits(-14.0, 14.0), "±14 V"),
        (limits(0.005, 7.5), "+7.5 V / +5 mV"),
        (limits(0.0, 9.0), "+9 V / 0 V"),
        (limits(-4.5, 12.0), "+12 V / -4.5 V"),
        (milliamperes(1.24e-3), "1.24 mA"),
        (milliamperes(25e-3), "25.0 mA"),
        (type_name("some where/mine.toml"), "mine"),
        (type_name("TL072"), "TL072"),
    ],
)
def test_limits_and_rates_are_written_with_their_units(text, expected) -> None:
    assert text == expected
