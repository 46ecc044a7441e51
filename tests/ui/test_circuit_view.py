"""The circuit view: parts that are clicked, volts at the nodes, a list where there is no drawing."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace

import pytest
from textual.events import MouseScrollDown

from preview.circuit.drive import parse_source
from preview.circuit.library import find_stage
from preview.circuit.opamp import OpAmpReading
from preview.circuit.parts import Supply
from preview.engine.messages import NodePeaks, ProbeNodes
from preview.meters.reading import LevelReading
from preview.ui.app import DeskApp
from preview.ui.desk import Desk
from preview.ui.figures import Figures, compute_figures, job_of
from preview.ui.opamps import with_opamp_type
from preview.ui.panels.circuit import CircuitPanel
from preview.ui.texts import node_lines
from preview.ui.theme import Look
from preview.ui.view import Shown


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


def _lines(desk: Desk, width: int, height: int) -> list[str]:
    return [text_of(r) for r in CircuitPanel(desk, Look()).rows(width, height)]


# ---- volts at the nodes ----


def test_nodes_have_their_direct_voltage_and_the_peaks_that_are_measured(desk, engine) -> None:
    desk.figures.now = Figures(rest_v={"in": 0.0, "sum": 0.003, "out": 0.033, "gnd": 0.0})
    level = LevelReading((1.0, 2.0), (1.25, 2.5), (0.5, 0.5))
    reading = OpAmpReading("U1", 12.5, 12.5, -12.0, 1.6, 0, 0.0, 1e5)
    desk.take(
        replace(engine.snapshot, input=level, output=LevelReading((9.0,), (12.5,), (3.0,)), opamps=(reading,))
    )
    lines = [line.split() for line in node_lines(desk)]
    assert lines == [
        ["node", "direct", "peak"],
        ["in", "0", "V", "2.50", "V"],
        ["sum", "3.00", "mV", "-"],
        ["out", "33.0", "mV", "12.5", "V"],
    ]


def test_peaks_at_inner_nodes_are_asked_for_and_marked(desk, engine) -> None:
    desk.figures.now = Figures(rest_v={"in": 0.0, "sum": 0.003, "out": 0.033, "gnd": 0.0})
    desk.method("node_volts")()
    assert engine.sent[-1] == ProbeNodes(True)
    desk.hear_report(NodePeaks("A", ("sum",), (0.25,), (-1.5,), 0.4))
    lines = node_lines(desk)
    assert lines[2].split() == ["sum", "3.00", "mV", "1.50", "V*"]
    assert lines[-1] == "* whole recording, 40 % so far"
    desk.hear_report(NodePeaks("A", ("sum",), (0.25,), (-1.5,), 1.0))
    assert node_lines(desk)[-1] == "* whole recording"
    desk.parts.set(22e3)
    assert "*" not in "".join(node_lines(desk)), "those were of another circuit"
    desk.hear_report(NodePeaks("B", ("sum",), (0.25,), (-1.5,), 1.0))
    assert "*" not in "".join(node_lines(desk)), "those are of another candidate"
    desk.hear_report(NodePeaks("A", ("sum",), (0.25,), (-1.5,), 1.0))
    desk.listening.set_region(0, 96_000)
    assert "*" not in "".join(node_lines(desk)), "those were of the whole"
    new = type(engine)()
    desk.resume(new, desk.as_left())
    assert ProbeNodes(True) in new.sent
    desk.method("node_volts")()
    assert new.sent[-1] == ProbeNodes(False)


def test_behind_a_source_that_is_not_ideal_the_input_meter_is_at_the_source(desk, engine) -> None:
    desk.change(replace(desk.session, source=parse_source("600")))
    desk.figures.now = Figures(rest_v={"source": 0.0, "in": 0.0, "sum": 0.0, "out": 0.0})
    desk.take(replace(engine.snapshot, input=LevelReading((1.0,), (2.5,), (0.5,))))
    peaks = {line.split()[0]: line.split()[3:] for line in node_lines(desk)[1:]}
    assert peaks["source"] == ["2.50", "V"]
    assert peaks["in"] == ["-"]


def test_the_direct_voltage_is_that_of_the_exact_circuit(desk) -> None:
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    desk.figures.now = compute_figures(job_of(desk.session, 0.0))
    offset_v = desk.sites()[0].model.offset_v
    # offset times noise gain, 1 + 100 kilohm / 10 kilohm; bias currents of a JFET type are negligible
    assert desk.figures.now.rest_v["out"] == pytest.approx(11.0 * offset_v, rel=0.01)
    (line,) = [line for line in node_lines(desk) if line.startswith("out")]
    assert "33.0 mV" in line


def test_in_bypass_the_output_is_not_called_a_peak_of_the_stage(desk, engine) -> None:
    desk.figures.now = Figures(rest_v={"in": 0.0, "out": 0.0})
    loud = LevelReading((7.0,), (7.0,), (7.0,))
    desk.take(replace(engine.snapshot, bypass=True, output=loud, opamps=()))
    (line,) = [line for line in node_lines(desk) if line.startswith("out")]
    assert line.split()[-1] == "-"


@pytest.mark.parametrize(
    ("size", "drawing", "nodes"),
    [((57, 11), False, True), ((110, 12), True, True), ((57, 20), True, True)],
    ids=["instead", "beside", "below"],
)
def test_the_nodes_stand_beside_below_or_instead_of_the_drawing(desk, size, drawing, nodes) -> None:
    desk.figures.now = Figures(rest_v={"in": 0.0, "sum": 0.0, "out": 0.0})
    assert not any("direct" in line for line in _lines(desk, *size)), "on request only"
    desk.method("node_volts")()
    lines = _lines(desk, *size)
    assert any("▸R1 10k" in line for line in lines) is drawing
    assert any("direct" in line for line in lines) is nodes
    assert all(len(line) <= size[0] for line in lines)
    assert len(lines) <= size[1]


# ---- a list where there is no drawing ----


@pytest.fixture
def undrawn(desk) -> Desk:
    desk.session = replace(desk.session, stage=replace(desk.session.stage, drawing=""))
    return desk


def test_the_list_has_columns(undrawn) -> None:
    lines = _lines(undrawn, 57, 8)
    assert lines[1].startswith("▸R1  10 kΩ ")
    places = {line.index("from") for line in lines[1:] if "from" in line}
    assert len(places) == 1
    assert any(re.search(r"U1  ideal +\+ gnd, - sum, out out", line) for line in lines)


def test_the_list_follows_the_selection(undrawn) -> None:
    undrawn.parts.choose_named("C1")
    lines = _lines(undrawn, 57, 3)
    assert any(line.startswith("▸C1") for line in lines)


# ---- the mouse ----


async def test_a_click_on_a_part_of_the_drawing_selects_it(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("f3")
        await pilot.pause()
        assert app.desk.view.shown is Shown.CIRCUIT
        lines = [text_of(r) for r in app.circuit.painted]
        y = next(n for n, line in enumerate(lines) if "C1 1n" in line)
        await pilot.click("#circuit", offset=(lines[y].index("C1"), y))
        await pilot.pause()
        assert app.desk.parts.part.designator == "C1"
        y = next(n for n, line in enumerate(lines) if "U1" in line)
        await pilot.click("#circuit", offset=(lines[y].index("U1"), y))
        await pilot.pause()
        assert app.desk.view.opamp == "U1"
        await pilot.click("#circuit", offset=(0, 0))
        await pilot.pause()
        assert app.desk.parts.part.designator == "C1"


def test_a_supply_is_in_force_for_the_direct_voltages(desk) -> None:
    desk.change(replace(desk.session, supply=Supply(9.0, 0.0)))
    desk.figures.now = compute_figures(job_of(desk.session, 0.0))
    assert not desk.figures.now.problem
    assert desk.figures.now.rest_v["out"] == pytest.approx(0.0, abs=1e-3)


# ---- a drawing larger than its panel ----


@pytest.fixture
def biquad(session, engine) -> Desk:
    """76 columns, 14 lines."""
    desk = Desk(session.with_stage(find_stage("two-integrator-biquad")), engine)
    desk.take(engine.snapshot)
    return desk


@pytest.fixture
def painted(biquad) -> Callable[[int, int], list[str]]:
    """One panel's lines, as often as they are wanted."""
    panel = CircuitPanel(biquad, Look())
    return lambda width, height: [text_of(r) for r in panel.rows(width, height)]


def test_a_drawing_that_fits_says_nothing_of_going_on(desk) -> None:
    assert "more" not in _lines(desk, 57, 11)[0]


def test_a_larger_drawing_says_where_it_goes_on_and_is_moved_there(biquad, painted) -> None:
    whole = [line.rstrip() for line in painted(90, 20)[1:] if line.strip()]
    lines = painted(57, 11)
    assert "more ▾ PgDn ▸ /" in lines[0]
    assert not any("U2" in line and line.rstrip().endswith("lp") for line in lines)
    for _ in range(9):
        biquad.method("pan_right")()
        biquad.method("pan_down")()
        lines = painted(57, 11)
    assert "more ◂ \\ ▴ PgUp" in lines[0]
    assert biquad.view.pan == (20, 4), "it stops at its edge"
    shown = [line.rstrip() for line in lines[1:]]
    assert [line[1:] for line in shown] == [line[1 + 20 :] for line in whole[4:]]
    biquad.method("pan_left")()
    biquad.method("pan_up")()
    assert "more ◂ \\ ▴ PgUp ▾ PgDn ▸ /" in painted(57, 11)[0]


@pytest.mark.parametrize("size", [(57, 11), (40, 6), (30, 4)])
def test_the_selected_part_is_in_view_wherever_it_stands(biquad, painted, size) -> None:
    for part in biquad.session.stage.settable:
        biquad.parts.choose_named(part.designator)
        assert any(f"▸{part.designator}" in line for line in painted(*size)[1:]), part.designator


def test_another_selection_brings_the_drawing_back(biquad, painted) -> None:
    painted(57, 11)
    biquad.method("pan_right")()
    painted(57, 11)
    assert biquad.view.pan == (8, 0)
    biquad.parts.choose_named("R2")
    painted(57, 11)
    assert biquad.view.pan == (0, 0)


async def test_keys_and_wheel_move_the_drawing_and_clicks_find_its_parts(make_app, session) -> None:
    app: DeskApp = make_app(session=session.with_stage(find_stage("two-integrator-biquad")))
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("f3", "slash", "slash", "slash", "pagedown")
        await pilot.pause()
        assert app.desk.view.pan == (20, 2)
        lines = [text_of(r) for r in app.circuit.painted]
        y = next(n for n, line in enumerate(lines) if "R5 10k" in line)
        await pilot.click("#circuit", offset=(lines[y].index("R5"), y))
        await pilot.pause()
        assert app.desk.parts.part.designator == "R5"
        await pilot._post_mouse_events([MouseScrollDown], "#circuit", offset=(5, 5))
        await pilot.pause()
        assert app.desk.view.pan[1] > 0
