"""A stage's file that is edited while it is heard."""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path

import pytest

from preview.circuit.library import find_stage, open_stages, stage_source
from preview.circuit.parts import Supply
from preview.engine.messages import SetCircuit
from preview.ui.app import DeskApp
from preview.ui.changes import with_setting
from preview.ui.desk import Desk
from preview.ui.opamps import with_opamp_type


class Clock:
    """A clock that is set by hand."""

    now_s = 100.0

    def __call__(self) -> float:
        self.now_s += 1.0
        return self.now_s


def edit(file: Path, old: str, new: str) -> None:
    """Change the text of a file, at another time than before."""
    stamp = file.stat().st_mtime_ns
    text = file.read_text("utf-8")
    assert old in text
    file.write_text(text.replace(old, new), "utf-8")
    os.utime(file, ns=(stamp + 10**9, stamp + 10**9))


@pytest.fixture
def file(tmp_path) -> Path:
    file = tmp_path / "mine.toml"
    file.write_text(stage_source("inverting-low-pass"), "utf-8")
    return file


@pytest.fixture
def desk(session, engine, file) -> Desk:
    desk = Desk(session.with_stage(find_stage(str(file))), engine, now_s=Clock())
    desk.take(engine.snapshot)
    assert desk.stage_watch.look() is None
    return desk


def value(desk: Desk, name: str) -> float:
    return desk.session.stage.part(name).value


def test_an_edited_file_is_heard_and_can_be_taken_back(desk, engine, file) -> None:
    assert desk.stage_watch.look() is None
    edit(file, '"100k"', '"47k"')
    said = desk.stage_watch.look()
    assert said == ("mine.toml was edited and is read anew; u takes that back", "information")
    assert value(desk, "R2") == 47e3
    assert desk.before.stage.part("R2").value == 47e3, "it is the file's value now"
    assert desk.stage_watch.look() is None, "once"
    desk.method("undo")()
    assert value(desk, "R2") == 100e3


def test_what_was_set_on_the_desk_stays(desk, file) -> None:
    desk.change(with_setting(desk.session, "R1", 22e3))
    desk.change(with_opamp_type(desk.session, "TL072")[0])
    desk.change(replace(desk.session, supply=Supply(9.0, -9.0)))
    edit(file, '"100k"', '"47k"')
    desk.stage_watch.look()
    assert (value(desk, "R1"), value(desk, "R2")) == (22e3, 47e3)
    assert desk.session.stage.opamps[0].type == "TL072"
    assert desk.session.supply == Supply(9.0, -9.0)
    desk.method("reset_part")()
    assert value(desk, "R1") == 10e3


def test_another_wiring_is_another_circuit(desk, engine, file) -> None:
    more = 'C9 = { kind = "capacitor", nodes = ["out", "gnd"], value = "10p" }'
    edit(file, "[parts]", f"[parts]\n{more}")
    desk.stage_watch.look()
    assert isinstance(engine.sent[-1], SetCircuit)
    assert "C9" in engine.sent[-1].netlist.values


def test_what_is_hardly_meant_in_an_edited_file_is_said(desk, file) -> None:
    edit(file, "[parts]", '[parts]\nS1 = { kind = "switch", nodes = ["out", "gnd"], closed = true }')
    text, severity = desk.stage_watch.look()
    assert severity == "warning"
    assert (
        "mine.toml was edited and is read anew; warning: S1 shorts gnd and the output of U1 (open it" in text
    )


def test_a_file_that_became_wrong_leaves_what_is_heard(desk, engine, file) -> None:
    sent = list(engine.sent)
    edit(file, '"100k"', '"100z"')
    text, severity = desk.stage_watch.look()
    assert severity == "error"
    assert "mine.toml" in text
    assert text.endswith("what is heard stays as it was")
    assert engine.sent == sent
    assert desk.stage_watch.look() is None, "said once, not again and again"
    edit(file, '"100z"', '"47k"')
    assert desk.stage_watch.look()[1] == "information"
    assert value(desk, "R2") == 47e3


def test_a_file_that_is_away_for_a_moment_is_no_error(desk, file) -> None:
    text = file.read_text("utf-8")
    file.unlink()
    assert desk.stage_watch.look() is None
    file.write_text(text.replace('"100k"', '"47k"'), "utf-8")
    assert desk.stage_watch.look() is not None
    assert value(desk, "R2") == 47e3


def test_a_stage_that_comes_with_the_program_is_not_watched(session, engine) -> None:
    desk = Desk(session, engine, now_s=Clock())
    assert desk.stage_watch.look() is None


def test_a_stage_of_a_cascade_is_read_anew_and_the_others_stay(session, engine, file) -> None:
    stage = open_stages(["inverting-high-pass", str(file)])
    desk = Desk(session.with_stage(stage), engine, now_s=Clock())
    desk.take(engine.snapshot)
    assert desk.stage_watch.look() is None
    desk.change(with_setting(desk.session, "1.R2", 22e3))
    desk.change(with_setting(desk.session, "2.R1", 22e3))
    edit(file, '"100k"', '"47k"')
    assert desk.stage_watch.look()[1] == "information"
    assert [value(desk, name) for name in ("1.R2", "2.R1", "2.R2")] == [22e3, 22e3, 47e3]
    sent = list(engine.sent)
    edit(file, '"47k"', '"47z"')
    text, severity = desk.stage_watch.look()
    assert severity == "error"
    assert "mine.toml [parts.R2]" in text
    assert engine.sent == sent
    assert value(desk, "2.R2") == 47e3


def test_a_stage_put_behind_is_watched_too_and_keeps_what_was_set(desk, file) -> None:
    desk.change(with_setting(desk.session, "R1", 22e3))
    desk.method("cascade")().take("rc-low-pass")
    assert desk.stage_watch.look() is None
    edit(file, '"100k"', '"47k"')
    desk.stage_watch.look()
    assert (value(desk, "1.R1"), value(desk, "1.R2")) == (22e3, 47e3)


async def test_the_desk_looks_by_itself(make_app, session, file) -> None:
    app: DeskApp = make_app(session=session.with_stage(find_stage(str(file))))
    app.desk.now_s = Clock()
    async with app.run_test(size=(80, 24)) as pilot:
        await pilot.pause(0.1)
        edit(file, '"100k"', '"47k"')
        while value(app.desk, "R2") != 47e3:
            await pilot.pause(0.02)
        assert "read anew" in app.foot.message
