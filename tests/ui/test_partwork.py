"""Setting parts: steps, positions, contacts, ties, undo without an end."""

from __future__ import annotations

from dataclasses import replace

import pytest

from preview.circuit.parts import Potentiometer, Switch
from preview.engine.messages import SetCircuit, SetPart
from preview.errors import NotationError, PartValueError
from preview.ui.app import DeskApp
from preview.ui.asking import Menu, Question
from preview.ui.changes import commands_between, render_command, with_setting
from preview.ui.desk import Desk
from preview.ui.panels.parts import PartsPanel
from preview.ui.partwork import kind_words
from preview.ui.theme import Look
from preview.values.eseries import SERIES


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def controlled(session):
    """The low-pass with a volume control, a ganged one and a switch behind it, in the file's order."""
    pot = Potentiometer("P1", ("out", "gnd"), "gnd", 10e3, "log", 0.5, 0.2, "volume, left")
    parts = (
        *(replace(part, adjust=False) for part in session.stage.valued),
        *session.stage.opamps,
        pot,
        replace(pot, designator="P2", role="volume, right", adjust=False),
        Switch("S1", ("out", "gnd"), False, "mutes"),
    )
    return replace(session, stage=replace(session.stage, parts=parts))


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


@pytest.fixture
def control_desk(controlled, engine) -> Desk:
    desk = Desk(controlled, engine)
    desk.take(engine.snapshot)
    return desk


# ---- order ----


def test_parts_that_an_engineer_would_turn_first_come_first(control_desk) -> None:
    assert [part.designator for part in control_desk.parts.parts] == ["P1", "S1", "R1", "R2", "C1", "P2"]


def test_a_part_is_selected_by_its_name_in_any_case(desk) -> None:
    assert desk.parts.choose_named("c1")
    assert desk.parts.part.designator == "C1"
    assert not desk.parts.choose_named("C9")


# ---- potentiometers and switches ----


def test_a_potentiometer_turns_by_a_hundredth_and_by_a_tenth(control_desk, engine) -> None:
    control_desk.method("value_up")()
    assert engine.sent[-1] == SetPart("P1", 0.51)
    control_desk.method("coarse_up")()
    assert engine.sent[-1] == SetPart("P1", 0.6), "from 51 % the next tenth"
    control_desk.method("coarse_down")()
    assert engine.sent[-1] == SetPart("P1", 0.5)


def test_a_shaft_at_its_end_says_so_and_stays(control_desk, engine) -> None:
    control_desk.parts.set(1.0)
    sent = list(engine.sent)
    with pytest.raises(PartValueError, match="P1 stands at its end"):
        control_desk.method("value_up")()
    assert engine.sent == sent
    for _ in range(10):
        control_desk.method("coarse_down")()
    assert engine.sent[-1] == SetPart("P1", 0.0)
    with pytest.raises(PartValueError, match="start"):
        control_desk.method("value_down")()


def test_a_switch_closes_upwards_and_opens_downwards(control_desk, engine) -> None:
    control_desk.parts.choose_named("S1")
    control_desk.method("value_up")()
    assert engine.sent[-1] == SetPart("S1", 1.0)
    sent = list(engine.sent)
    control_desk.method("coarse_up")()
    assert engine.sent == sent, "closed is closed"
    control_desk.method("value_down")()
    assert engine.sent[-1] == SetPart("S1", 0.0)


def test_positions_and_contacts_are_typed_in_words(control_desk, engine) -> None:
    question = control_desk.method("type_value")()
    assert isinstance(question, Question)
    assert question.now == "50 %"
    assert question.understand("70 %") == "P1: 70 % of the turn, log"
    question.take("70%")
    assert engine.sent[-1] == SetPart("P1", 0.7)
    with pytest.raises(PartValueError, match="beyond the ends"):
        question.understand("120 %")
    control_desk.parts.choose_named("S1")
    question = control_desk.method("type_value")()
    question.take("closed")
    assert engine.sent[-1] == SetPart("S1", 1.0)
    with pytest.raises(NotationError, match="open or closed"):
        question.understand("half")


def test_a_position_is_a_glide_and_another_track_another_circuit(controlled) -> None:
    turned = with_setting(controlled, "P1", 0.25)
    assert commands_between(controlled, turned) == [SetPart("P1", 0.25)]
    stage = controlled.stage.with_part(replace(controlled.stage.part("P1"), value=50e3))
    (command,) = commands_between(controlled, replace(controlled, stage=stage))
    assert isinstance(command, SetCircuit)


def test_neither_has_an_e_series(control_desk) -> None:
    assert control_desk.method("next_series")() == "P1 has no E series"
    assert control_desk.method("nearest_value")() is None


def test_the_command_says_positions_and_contacts(controlled) -> None:
    changed = with_setting(with_setting(controlled, "P1", 0.73), "S1", 1.0)
    command = render_command(changed, controlled.stage)
    assert "--part P1=0.73" in command
    assert "--part S1=closed" in command


def test_the_list_shows_position_taper_and_contact(control_desk) -> None:
    lines = [text_of(r) for r in PartsPanel(control_desk, Look()).rows(36, 11)]
    assert lines[1].startswith("▸ P1 50 %")
    assert "log" in lines[1]
    assert lines[2].startswith("  S1 open")
    wide = text_of(PartsPanel(control_desk, Look()).rows(60, 11)[1])
    assert "────◆────" in wide
    assert "20 %" in wide


# ---- the columns ----


def test_a_row_has_value_series_tolerance_and_what_it_was(desk) -> None:
    desk.method("value_up")()
    line = text_of(PartsPanel(desk, Look()).rows(36, 11)[1])
    assert line.split() == ["▸", "R1", "11", "kΩ", "E24", "1", "%", "was", "10k"]
    assert kind_words(desk.session.stage.part("C1")) == ("E12", "5 %")


@pytest.mark.parametrize("width", [20, 23, 28, 30, 36, 46, 60])
def test_no_row_is_wider_than_its_column(control_desk, width) -> None:
    control_desk.parts.set(0.25)
    for line in PartsPanel(control_desk, Look()).rows(width, 12):
        assert len(text_of(line)) <= width or width < 23


# ---- ties ----


def _tie(desk: Desk, answer: str) -> None:
    menu = desk.method("tie")()
    assert isinstance(menu, Menu)
    assert answer in [choice.answer for choice in menu.choices]
    menu.take(answer)


def test_parts_tied_in_ratio_keep_it_and_glide_together(desk, engine) -> None:
    _tie(desk, "ratio R2")  # 10 kilohm and 100 kilohm
    sent = len(engine.sent)
    desk.method("value_up")()
    assert engine.sent[sent:] == [SetPart("R1", 11e3), SetPart("R2", 110e3)]
    assert desk.parts.tied_to("R1") == ("R2",)
    assert desk.parts.tied_to("R2") == ("R1",)
    desk.method("undo")()
    assert [p.value for p in desk.session.stage.valued[:2]] == [10e3, 100e3], "one step back for both"


def test_parts_tied_equal_take_the_value_and_keep_it(desk) -> None:
    _tie(desk, "equal R2")
    assert desk.session.stage.part("R2").value == 10e3
    desk.parts.set(4.7e3)
    assert desk.session.stage.part("R2").value == 4.7e3


def test_walking_there_and_back_leaves_no_crumbs(desk) -> None:
    _tie(desk, "ratio R2")
    for name in ("value_up", "value_down"):
        for _ in range(100):
            desk.method(name)()
    assert [p.value for p in desk.session.stage.valued[:2]] == [10e3, 100e3]


def test_ties_join_into_one_group_and_come_apart_one_by_one(session, engine) -> None:
    third = replace(session.stage.part("R1"), designator="R3", nodes=("sum", "gnd"))
    desk = Desk(replace(session, stage=replace(session.stage, parts=(*session.stage.parts, third))), engine)
    _tie(desk, "equal R3")
    _tie(desk, "ratio R2")
    assert desk.parts.tied_to("R3") == ("R1", "R2")
    menu = desk.method("tie")()
    assert menu.take("untie") == "R1 moves alone again"
    assert desk.parts.tied_to("R1") == ()
    assert desk.parts.tied_to("R2") == ("R3",)


def test_a_tied_part_that_would_leave_its_range_stops_both(desk, engine) -> None:
    _tie(desk, "ratio R2")
    sent = list(engine.sent)
    with pytest.raises(PartValueError, match="R2, tied to R1"):
        desk.parts.set(1e12)
    assert engine.sent == sent
    assert desk.parts.part.value == 10e3


def test_potentiometers_are_ganged_and_nothing_is_tied_across_kinds(control_desk, engine) -> None:
    assert [c.answer for c in control_desk.method("tie")().choices] == ["equal P2"]
    _tie(control_desk, "equal P2")
    control_desk.method("coarse_up")()
    assert engine.sent[-2:] == [SetPart("P1", 0.6), SetPart("P2", 0.6)]


def test_a_part_of_its_own_kind_alone_cannot_be_tied(desk) -> None:
    desk.parts.choose_named("C1")
    assert desk.method("tie")() == "there is no other capacitor that C1 could be tied to"


def test_the_list_says_what_is_tied(desk) -> None:
    _tie(desk, "ratio R2")
    lines = [text_of(r) for r in PartsPanel(desk, Look()).rows(46, 11)]
    assert "tied" in lines[1]
    assert "tied to R2" in " ".join(lines[4:])


def test_another_stage_has_no_ties(desk, session) -> None:
    from preview.circuit.library import find_stage

    _tie(desk, "ratio R2")
    desk.open_stage(find_stage("inverting-high-pass"))
    assert desk.parts.tied_to("R1") == ()


# ---- undo ----


def test_every_change_can_be_taken_back_and_made_again(desk) -> None:
    ladder = [desk.parts.part.value]
    for _ in range(700):
        desk.method("value_up" if desk.parts.part.value < 1e11 else "reset_part")()
        ladder.append(desk.parts.part.value)
    for value in reversed(ladder[:-1]):
        assert desk.method("undo")() == "taken back"
        assert desk.parts.part.value == value
    assert desk.method("undo")() == "nothing to take back"
    for value in ladder[1:]:
        desk.method("redo")()
        assert desk.parts.part.value == value
    assert desk.method("redo")() == "nothing to make again"


def test_the_nearest_value_of_the_series_is_a_key_away(desk, engine) -> None:
    desk.parts.set(10.6e3)  # E24: 10 and 11 (IEC 60063)
    assert "E24" in desk.method("nearest_value")()
    assert engine.sent[-1] == SetPart("R1", 11e3)
    assert all(value in SERIES["E192"] for value in SERIES["E96"])


# ---- the mouse ----


class _Turn:
    """A turn of the wheel."""

    def stop(self) -> None:
        """Go no further."""


async def test_the_wheel_over_the_list_steps_the_selected_part(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        app.parts.on_mouse_scroll_up(_Turn())
        await pilot.pause()
        assert engine.sent[-1] == SetPart("R1", 11e3)
        app.parts.on_mouse_scroll_down(_Turn())
        await pilot.pause()
        assert engine.sent[-1] == SetPart("R1", 10e3)


async def test_a_click_on_a_hint_is_its_key(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause()
        line = text_of(app.foot.painted[-1])
        await pilot.click("#foot", offset=(line.index("bypass"), 0))
        await pilot.pause()
        assert app.desk.listening.bypass
