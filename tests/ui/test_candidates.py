"""Candidates: kept, heard at once, compared; each with a history of its own."""

from __future__ import annotations

from dataclasses import replace

import pytest

from preview.circuit.drive import LoadModel, SourceModel
from preview.circuit.library import find_stage
from preview.circuit.parts import Supply
from preview.engine.messages import (
    CandidateReading,
    DropCandidate,
    KeepCandidate,
    ListenNull,
    SelectCandidate,
    SetMatch,
    SetPart,
    SetQuality,
)
from preview.errors import UsageError
from preview.ui.app import DeskApp
from preview.ui.asking import Menu, Page, Question
from preview.ui.changes import with_setting
from preview.ui.desk import Desk
from preview.ui.differences import differences
from preview.ui.opamps import with_opamp_type
from preview.ui.panels.candidates import CandidatesPanel
from preview.ui.panels.header import HeaderPanel
from preview.ui.theme import Look
from preview.ui.view import Shown


class Clock:
    """A clock that is set by hand."""

    now_s = 100.0

    def __call__(self) -> float:
        return self.now_s


def text_of(row) -> str:
    return "".join(segment.text for segment in row)


@pytest.fixture
def clock() -> Clock:
    return Clock()


@pytest.fixture
def desk(session, engine, clock) -> Desk:
    desk = Desk(session, engine, now_s=clock)
    desk.take(engine.snapshot)
    return desk


def value(desk: Desk, name: str = "R1") -> float:
    return desk.session.stage.part(name).value


# ---- keeping and hearing ----


def test_keeping_goes_on_in_a_copy_and_leaves_the_first_as_it_was(desk, engine) -> None:
    desk.parts.set(22e3)
    said = desk.method("candidate_keep")()
    kept, selected = engine.sent[-2:]
    assert (kept.letter, kept.netlist.values["R1"]) == ("B", 22e3)
    assert selected == SelectCandidate("B")
    assert said.startswith("A is kept; you go on in B")
    desk.parts.set(33e3)
    desk.method("candidate_flip")()
    assert (desk.candidates.letter, value(desk)) == ("A", 22e3)
    desk.method("candidate_flip")()
    assert (desk.candidates.letter, value(desk)) == ("B", 33e3)


def test_hearing_another_candidate_sends_nothing_but_its_letter(desk, engine) -> None:
    desk.method("candidate_keep")()
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    desk.change(replace(desk.session, supply=Supply(9.0, -9.0)))
    sent = len(engine.sent)
    desk.candidates.hear("A")
    desk.candidates.hear("B")
    assert engine.sent[sent:] == [SelectCandidate("A"), SelectCandidate("B")], (
        "it is ready: no crossfade anew"
    )
    assert desk.session.supply == Supply(9.0, -9.0)


def test_each_candidate_has_a_history_of_its_own(desk) -> None:
    desk.parts.set(11e3)
    desk.method("candidate_keep")()
    desk.parts.set(22e3)
    desk.candidates.hear("A")
    assert desk.method("undo")() == "taken back"
    assert value(desk) == 10e3
    assert desk.method("undo")() == "nothing to take back"
    desk.candidates.hear("B")
    assert value(desk) == 22e3
    desk.method("undo")()
    assert value(desk) == 11e3
    assert desk.method("undo")() == "nothing to take back", "B began as a copy"


def test_what_is_common_to_all_stays_when_another_is_heard(desk, engine) -> None:
    desk.method("candidate_keep")()
    desk.method("next_quality")()
    desk.method("full_scale")().take("5 V")
    sent = len(engine.sent)
    desk.candidates.hear("A")
    assert desk.session.full_scale.text == "5 V peak"
    assert desk.session.quality.value == "fine"
    assert not any(isinstance(command, SetQuality) for command in engine.sent[sent:])


def test_a_candidate_may_be_another_stage(desk) -> None:
    desk.method("candidate_keep")()
    desk.open_stage(find_stage("inverting-high-pass"))
    desk.parts.set(33e3)
    desk.candidates.hear("A")
    assert desk.session.stage.name == "inverting-low-pass"
    assert desk.before.stage.name == "inverting-low-pass"
    desk.candidates.hear("B")
    assert (desk.session.stage.name, value(desk)) == ("inverting-high-pass", 33e3)


def test_next_goes_round_and_flip_goes_to_and_fro(desk) -> None:
    desk.method("candidate_keep")()
    desk.method("candidate_keep")()
    heard = []
    for name in ("candidate_next", "candidate_next", "candidate_flip", "candidate_flip", "candidate_next"):
        desk.method(name)()
        heard.append(desk.candidates.letter)
    assert heard == ["A", "B", "A", "B", "C"]


def test_alone_there_is_nothing_to_compare_and_that_is_said(desk, engine) -> None:
    sent = list(engine.sent)
    for name in ("candidate_flip", "candidate_next", "null", "candidate_copy", "candidate_drop"):
        assert "only one candidate" in desk.method(name)()
    assert "no candidate D" in desk.method("hear_d")()
    assert engine.sent == sent


def test_the_26th_is_the_last(desk, engine) -> None:
    for _ in range(25):
        desk.method("candidate_keep")()
    assert desk.candidates.letters[-1] == "Z"
    sent = list(engine.sent)
    assert "26 candidates" in desk.method("candidate_keep")()
    assert engine.sent == sent


# ---- copy, rename, drop ----


def test_a_copy_can_be_taken_back_in_the_candidate_it_replaced(desk, engine) -> None:
    desk.method("candidate_keep")()
    desk.parts.set(47e3)
    menu = desk.method("candidate_copy")()
    assert isinstance(menu, Menu)
    assert [choice.answer for choice in menu.choices] == ["A"]
    assert menu.take("A") == "A is now a copy of B"
    assert isinstance(engine.sent[-1], KeepCandidate)
    assert engine.sent[-1].netlist.values["R1"] == 47e3
    desk.candidates.hear("A")
    assert value(desk) == 47e3
    desk.method("undo")()
    assert value(desk) == 10e3
    assert engine.sent[-1] == SetPart("R1", 10e3)


def test_a_name_is_kept_with_the_letter_and_cleaned_on_the_screen(desk) -> None:
    question = desk.method("candidate_rename")()
    assert isinstance(question, Question)
    assert question.take("  the   warm one ") == "A, the warm one"
    assert desk.candidates.title("A") == "A, the warm one"
    with pytest.raises(UsageError, match="41 characters"):
        question.understand("x" * 41)
    question.take("evil\x1b[31m")
    lines = [text_of(r) for r in CandidatesPanel(desk, Look()).rows(60, 10)]
    assert "\x1b" not in "".join(lines)


def test_a_candidate_that_is_not_heard_can_be_dropped(desk, engine) -> None:
    desk.method("candidate_keep")()
    menu = desk.method("candidate_drop")()
    assert [choice.answer for choice in menu.choices] == ["A"], "the one that is heard stays"
    menu.take("A")
    assert engine.sent[-1] == DropCandidate("A")
    assert desk.candidates.letters == ("B",)
    desk.method("candidate_keep")()
    assert desk.candidates.letters == ("A", "B"), "its letter is free again"


# ---- differences ----


def test_differences_name_parts_op_amps_supply_source_load_and_limits(session) -> None:
    changed = with_setting(session, "R1", 22e3)
    changed = with_opamp_type(changed, "TL072")[0]
    changed = replace(
        changed,
        supply=Supply(12.0, -12.0),
        source=SourceModel(600.0),
        load=LoadModel(10e3),
        without=("slew",),
    )
    assert differences(session, changed) == [
        "R1 10k → 22k",
        "U1 ideal → TL072",
        "supply ±15 V → ±12 V",
        "source none → 600R",
        "load none → 10k",
        "without nothing → slew",
    ]
    assert differences(session, session) == []


def test_another_stage_is_one_difference_and_not_one_for_each_part(session) -> None:
    other = session.with_stage(find_stage("inverting-high-pass"))
    assert differences(session, other)[0] == "stage Inverting low-pass → Inverting high-pass"
    assert not any(line.startswith("R") for line in differences(session, other))


def test_the_list_of_differences_is_a_page_of_its_own(desk) -> None:
    desk.method("candidate_keep")()
    desk.parts.set(22e3)
    page = desk.method("candidate_differences")()
    assert isinstance(page, Page)
    assert page.title == "From A to B"
    assert page.paragraphs == ("R1 10k → 22k",)
    desk.method("candidate_keep")()
    menu = desk.method("candidate_differences")()
    assert menu.take("B").paragraphs == ("nothing: they are the same",)


# ---- loudness and null ----


def test_match_is_shown_with_its_gain_and_can_be_off(desk, engine, clock) -> None:
    desk.method("candidate_keep")()
    assert "volts stay" in desk.method("match")()
    assert engine.sent[-1] == SetMatch(True)
    readings = (CandidateReading("A", True, -18.24, 0.0), CandidateReading("B", True, -14.81, -3.43))
    desk.take(replace(engine.snapshot, candidates=readings, match=True, match_db=-3.43))
    lines = [text_of(r) for r in CandidatesPanel(desk, Look()).rows(60, 10)]
    assert "matched loudness" in lines[0]
    assert "-18.2 LUFS" in lines[2]
    assert lines[3].startswith("▸ B")
    assert "-14.8 LUFS" in lines[3]
    assert "-3.4" in lines[3]
    assert "candidate B heard, matched -3.4 dB" in text_of(HeaderPanel(desk, Look()).rows(120, 3)[2])
    desk.method("match")()
    assert engine.sent[-1] == SetMatch(False)
    lines = [text_of(r) for r in CandidatesPanel(desk, Look()).rows(60, 10)]
    assert "each as loud as it is" in lines[0]
    assert "off" in lines[3]


def test_null_listening_is_told_in_capitals_and_ends_by_the_same_key(desk, engine) -> None:
    desk.method("candidate_keep")()
    assert "B minus A" in desk.method("null")()
    assert engine.sent[-1] == ListenNull(("B", "A"))
    for width in (80, 120):
        assert "NULL" in text_of(HeaderPanel(desk, Look()).rows(width, 3)[2])
    desk.method("null")()
    assert engine.sent[-1] == ListenNull(None)
    desk.method("null")()
    desk.candidates.hear("A")
    assert desk.candidates.null is None, "hearing one candidate ends it"


def test_the_engine_has_the_last_word_on_match_and_null(desk, engine, clock) -> None:
    desk.method("candidate_keep")()
    desk.method("null")()
    desk.take(replace(engine.snapshot, null=None))
    assert desk.candidates.null == ("B", "A"), "it may not have heard of it yet"
    clock.now_s += 1.0
    desk.take(replace(engine.snapshot, null=None))
    assert desk.candidates.null is None


def test_a_new_engine_gets_every_candidate(desk, engine) -> None:
    desk.method("candidate_keep")()
    desk.parts.set(22e3)
    desk.method("candidate_keep")()
    desk.parts.set(47e3)
    desk.candidates.hear("B")
    desk.method("match")()
    began = desk.as_left()
    assert began.letter == "B"
    assert began.session.netlist().values["R1"] == 22e3
    assert {letter: circuit.values["R1"] for letter, circuit in began.candidates} == {"A": 10e3, "C": 47e3}
    assert began.match


# ---- the screen ----


@pytest.mark.parametrize("width", [24, 36, 44, 58, 110])
@pytest.mark.parametrize("height", [3, 6, 12])
def test_the_panel_fits_and_the_heard_one_is_in_view(desk, width, height) -> None:
    for _ in range(9):
        desk.method("candidate_keep")()
    rows = CandidatesPanel(desk, Look()).rows(width, height)
    assert len(rows) <= height
    if width >= 44:
        assert all(len(text_of(r)) <= width for r in rows)
    assert any(text_of(r).startswith("▸ J") for r in rows)


async def test_a_click_hears_a_candidate(make_app, engine) -> None:
    app: DeskApp = make_app()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.press("K", "right", "f5")
        await pilot.pause()
        assert app.desk.view.shown is Shown.CANDIDATES
        await pilot.click("#candidates", offset=(3, 2))
        await pilot.pause()
        assert engine.sent[-1] == SelectCandidate("A")
        text = "\n".join(text_of(r) for r in app.candidates.painted)
        assert "from B to A" in text
        assert "R1 11k → 10k" in text
