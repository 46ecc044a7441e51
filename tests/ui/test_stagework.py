"""Another stage, one more behind it, the last one away."""

from __future__ import annotations

import pytest

from preview.circuit.library import find_stage, stage_names, stage_source
from preview.circuit.parts import Supply
from preview.engine.messages import SetCircuit
from preview.errors import CircuitError, UnknownNameError
from preview.ui.app import DeskApp
from preview.ui.asking import Menu, Question
from preview.ui.changes import render_command, with_setting
from preview.ui.desk import Desk
from preview.ui.opamps import with_opamp_type
from preview.ui.phrases import answer_of
from preview.ui.plain import PlainDesk
from preview.ui.screens.chooser import ChooserScreen
from tests.ui.test_plain import Talk


@pytest.fixture
def desk(session, engine) -> Desk:
    desk = Desk(session, engine)
    desk.take(engine.snapshot)
    return desk


def behind(desk: Desk, name: str) -> str:
    """Put that stage behind the present ones; what is said."""
    menu = desk.method("cascade")()
    assert isinstance(menu, Menu)
    told = menu.take(name)
    assert isinstance(told, str)
    return told


def values(desk: Desk) -> dict[str, float]:
    return {part.designator: part.setting for part in desk.session.stage.settable}


def test_a_stage_behind_is_a_cascade_that_keeps_what_was_set(desk, engine) -> None:
    desk.change(with_setting(desk.session, "R2", 47e3))
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    desk.method("supply")().take("±12")
    told = behind(desk, "rc-high-pass")
    assert told.startswith("stage 2, rc-high-pass, is driven by 1.out; its parts are 2.")
    assert desk.session.stage.opened_as == ("inverting-low-pass", "rc-high-pass")
    assert values(desk)["1.R2"] == 47e3
    assert next(o.type for o in desk.session.stage.opamps) == "TL072"
    assert desk.session.supply == Supply(12.0, -12.0)
    assert isinstance(engine.sent[-1], SetCircuit)
    assert set(engine.sent[-1].netlist.values) >= {"1.R1", "1.R2", "2.R1", "2.C1"}
    desk.method("reset_all")()
    assert values(desk)["1.R2"] == 100e3, "the value from before"


def test_the_last_stage_goes_and_what_was_set_in_the_others_stays(desk) -> None:
    behind(desk, "rc-high-pass")
    behind(desk, "rc-low-pass")
    desk.change(with_setting(desk.session, "1.R2", 22e3))
    assert desk.method("cascade_drop")() == "without stage 3, rc-low-pass"
    assert values(desk)["1.R2"] == 22e3
    assert desk.method("cascade_drop")() == "without stage 2, rc-high-pass"
    assert desk.session.stage.name == "inverting-low-pass"
    assert values(desk)["R2"] == 22e3
    assert desk.method("cascade_drop")() == "this is a single stage; & puts another one behind it"
    desk.method("undo")()
    assert values(desk)["1.R2"] == 22e3


def test_the_command_that_renders_it_names_both_stages(desk) -> None:
    from preview.circuit.library import open_stages

    behind(desk, "rc-low-pass")
    desk.change(with_setting(desk.session, "2.R1", 22e3))
    words = render_command(desk.session, open_stages(desk.session.stage.opened_as))
    assert "--stage inverting-low-pass --stage rc-low-pass --part 2.R1=" in words
    assert "--part 1." not in words


def test_stages_drawn_with_other_rails_are_named(desk) -> None:
    assert "drawn with different supplies" in behind(desk, "single-supply-gain")


def test_a_stage_that_cannot_run_on_these_rails_is_refused_and_nothing_changes(desk, engine) -> None:
    desk.method("supply")().take("±20")  # an ideal op-amp takes any; the OPA2134 36 V
    sent, was = list(engine.sent), desk.session
    with pytest.raises(CircuitError, match=r"2\.U1"):
        behind(desk, "rc-low-pass")
    assert desk.session is was
    assert engine.sent == sent


def test_the_chooser_offers_the_cascade(desk) -> None:
    def menu() -> Menu:
        return desk.method("choose_stage")()

    assert answer_of(menu(), "one more behind ...")
    with pytest.raises(Exception, match="not one of them"):
        answer_of(menu(), "without the last")
    further = menu().take(answer_of(menu(), "one more behind ..."))
    assert isinstance(further, Menu)
    assert [c.answer for c in further.choices][:-1] == list(stage_names())
    further.take("rc-low-pass")
    assert menu().take(answer_of(menu(), "without the last")) == "without stage 2, rc-low-pass"


def test_a_file_of_ones_own_goes_behind_too(desk, tmp_path) -> None:
    file = tmp_path / "mine.toml"
    file.write_text(stage_source("rc-low-pass"), "utf-8")
    menu = desk.method("cascade")()
    question = menu.take(menu.choices[-1].answer)
    assert isinstance(question, Question)
    assert "R-C low-pass with buffer" in question.understand(str(file))
    with pytest.raises(UnknownNameError):
        question.understand("no-such-stage")
    question.take(str(file))
    assert desk.session.stage.opened_as == ("inverting-low-pass", str(file))


def test_what_is_hardly_meant_in_a_file_is_said_when_it_is_opened(desk, tmp_path) -> None:
    file = tmp_path / "mine.toml"
    short = 'S1 = { kind = "switch", nodes = ["out", "gnd"], closed = true }'
    file.write_text(stage_source("inverting-low-pass").replace("[parts]", f"[parts]\n{short}"), "utf-8")
    menu = desk.method("choose_stage")()
    told = menu.take(menu.choices[-1].answer).take(str(file))
    assert told.startswith("warning: S1 shorts gnd and the output of U1 (open it")


async def test_keys_make_a_cascade_and_take_its_last_stage_away(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("ampersand")
        await pilot.pause()
        assert isinstance(app.screen, ChooserScreen)
        await pilot.press("enter")
        await pilot.pause()
        assert app.desk.session.stage.opened_as == ("inverting-low-pass", stage_names()[0])
        assert "is driven by 1.out" in app.foot.message
        await pilot.press("f3", "underscore")
        await pilot.pause()
        assert app.desk.session.stage.name == "inverting-low-pass"


async def test_the_choosers_first_row_makes_a_cascade(make_app) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        above = stage_names().index("inverting-low-pass")
        await pilot.press("s", *["up"] * (above + 1), "enter")
        await pilot.pause()
        assert app.screen.menu.title == "The next stage of the cascade"
        await pilot.press("down", "enter")
        await pilot.pause()
        assert app.desk.session.stage.opened_as == ("inverting-low-pass", stage_names()[1])


def test_in_lines(session, engine, tmp_path) -> None:
    from tests.ui.conftest import first_order_figures

    (tmp_path / "hearing-caution-seen").touch()
    talk = Talk(session, engine, tmp_path, first_order_figures)
    assert isinstance(talk.desk, PlainDesk)
    said = "\n".join(talk.say("cascade rc-low-pass"))
    assert "stage 2, rc-low-pass, is driven by 1.out" in said
    assert talk.desk.desk.session.stage.opened_as == ("inverting-low-pass", "rc-low-pass")
    talk.say("2.R1=22k")
    assert values(talk.desk.desk)["2.R1"] == 22e3
    assert "without stage 2, rc-low-pass" in "\n".join(talk.say("cascade drop"))
    assert "single stage" in "\n".join(talk.say("cascade drop"))
    said = "\n".join(talk.say("stage", "one more behind ...", "rc-low-pass"))
    assert "is driven by 1.out" in said
    assert talk.desk.desk.session.stage.name == find_stage("inverting-low-pass").name + " + rc-low-pass"
