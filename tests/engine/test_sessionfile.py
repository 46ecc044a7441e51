"""Sessions as files: what is saved opens as it was, and a crash leaves what it had."""

from __future__ import annotations

import math
import os
import subprocess
import sys
import time
import tomllib
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from preview.circuit.drive import NO_LOAD, LoadModel
from preview.circuit.library import find_stage, stage_names, with_overrides
from preview.engine.autosave import Autosave, left_behind
from preview.engine.sessionfile import Saved, SavedCandidate, load, save
from preview.engine.tomltext import toml_text
from preview.errors import CircuitError, SessionFileError
from preview.session import AtEnd
from preview.values.quality import Quality
from preview.values.stimulus import parse_stimulus
from tests.engine.running import session_of


def saved_of(audio: Path | None = Path("bells.flac"), **changes) -> Saved:
    low = session_of(audio, quality=Quality.FINE, at_end=AtEnd.STOP, load=LoadModel(10e3))
    other = replace(
        low,
        stage=with_overrides(find_stage("inverting-high-pass"), {"R1": "4k7"}, {None: "TL072"})[0],
        without=("slew", "noise"),
        load=NO_LOAD,
    )
    candidates = (SavedCandidate("A", low, "as drawn"), SavedCandidate("B", other))
    return replace(Saved(candidates, "B", 48_000, (100, 200_000), -12.5, bypass=True, match=True), **changes)


def without_expects(saved: Saved) -> Saved:
    """Published figures of a stage belong to its own file."""
    return replace(
        saved,
        candidates=tuple(
            replace(one, session=replace(one.session, stage=replace(one.session.stage, expects=())))
            for one in saved.candidates
        ),
    )


def test_what_is_saved_opens_as_it_was(tmp_path):
    path = tmp_path / "a.session.toml"
    saved = saved_of()
    save(path, saved)
    assert load(path) == without_expects(saved)
    assert load(path).session.netlist() == saved.session.netlist()
    save(path, saved_of(region=None, letter="A"))
    assert load(path).region is None
    assert load(path).session.load == LoadModel(10e3)
    assert [one.name for one in tmp_path.iterdir()] == ["a.session.toml"]


@pytest.mark.parametrize("name", stage_names())
def test_every_bundled_stage_survives(tmp_path, name):
    stage = find_stage(name)
    saved = Saved((SavedCandidate("A", session_of(None, stage=stage, supply=stage.supply)),))
    save(tmp_path / "x", saved)
    again = load(tmp_path / "x").session.stage
    assert again == replace(stage, expects=())
    assert again.drawing == stage.drawing


def test_a_test_signal_and_live_input_survive(tmp_path):
    for changes in (
        {"stimulus": parse_stimulus("two-tone 60 7k 4:1 1V")},
        {"live": True, "live_device": "ears"},
    ):
        saved = Saved((SavedCandidate("A", session_of(None, **changes)),))
        save(tmp_path / "x", saved)
        assert load(tmp_path / "x") == without_expects(saved)


def test_the_file_is_for_people_too(tmp_path):
    save(tmp_path / "x", saved_of())
    table = tomllib.loads((tmp_path / "x").read_text("utf-8"))
    assert table["format"] == 1
    second = table["saved"]["candidates"][1]["session"]
    assert second["without"] == ["slew", "noise"]
    assert {part["designator"]: part.get("value") for part in second["stage"]["parts"]}["R1"] == 4700.0


@pytest.mark.parametrize(
    ("change", "what"),
    [
        (lambda t: t.replace("format = 1", "format = 2"), "reads sessions of format 1"),
        (lambda t: t.replace("format = 1", ""), "format = None"),
        (lambda t: t.replace('letter = "B"', 'letter = "X"', 1), "no single candidate X"),
        (
            lambda t: t.replace("value = 4700.0", 'value = "4k7"'),
            r"parts\[\d\].value: '4k7' is not what belongs",
        ),
        (lambda t: t.replace("value = 4700.0", "valeu = 4700.0"), "unknown key valeu"),
        (lambda t: t.replace('quality = "fine"', 'quality = "best"'), "quality: 'best' is not"),
        (lambda t: t.replace('is = "TwoTerminal"', 'is = "Path"', 1), "no such kind Path"),
        (lambda t: t.replace("supply]", "supplies]", 1), "unknown key supplies"),
        (lambda t: t[: len(t) // 2] + '"', "not TOML|missing"),
        (lambda t: "[saved\n", "not TOML"),
        (lambda t: "format = 1\n", "candidates is missing"),
    ],
)
def test_what_is_no_session_is_refused_with_the_place(tmp_path, change, what):
    path = tmp_path / "x"
    save(path, saved_of())
    path.write_text(change(path.read_text("utf-8")), "utf-8")
    with pytest.raises(SessionFileError, match=what):
        load(path)


def test_a_circuit_that_cannot_be_computed_is_refused_as_everywhere(tmp_path):
    path = tmp_path / "x"
    save(path, saved_of())
    path.write_text(path.read_text("utf-8").replace("value = 4700.0", "value = -4700.0"), "utf-8")
    with pytest.raises(CircuitError, match="R1"):
        load(path)


def test_a_file_that_cannot_be_read_or_written_is_said(tmp_path):
    with pytest.raises(SessionFileError, match="cannot be read: No such file"):
        load(tmp_path / "none")
    with pytest.raises(SessionFileError, match="cannot be written"):
        save(tmp_path / "none" / "x", saved_of())
    with pytest.raises(SessionFileError, match="not text"):
        save(tmp_path / "x", saved_of(Path(os.fsdecode(b"\xff.wav"))))
    assert list(tmp_path.iterdir()) == []
    (tmp_path / "bytes").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(SessionFileError, match="not TOML"):
        load(tmp_path / "bytes")


def test_a_write_that_fails_leaves_the_old_file_whole(tmp_path, monkeypatch):
    path = tmp_path / "x"
    save(path, saved_of(position_frame=1))

    def full(_number: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(SessionFileError, match="No space left"):
        save(path, saved_of(position_frame=2))
    assert load(path).position_frame == 1
    assert [one.name for one in tmp_path.iterdir()] == ["x"]


TEXT = st.text(st.characters(blacklist_categories=["Cs"]), max_size=20)
LEAF = st.booleans() | st.integers(-(2**60), 2**60) | st.floats(allow_nan=False) | TEXT
TABLES = st.recursive(
    st.dictionaries(TEXT, LEAF | st.lists(LEAF, max_size=3), max_size=4),
    lambda inner: st.dictionaries(TEXT, inner | st.lists(inner, min_size=1, max_size=3), max_size=3),
    max_leaves=12,
)


@given(TABLES)
def test_any_table_reads_back_as_it_was(table):
    assert tomllib.loads(toml_text(table)) == table


def test_numbers_that_are_not_finite_read_back():
    table = tomllib.loads(toml_text({"a": math.inf, "b": -math.inf, "c": math.nan}))
    assert (table["a"], table["b"]) == (math.inf, -math.inf)
    assert math.isnan(table["c"])


def wait_until(condition, seconds: float = 10.0) -> None:
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline
        time.sleep(0.005)  # polling a file, with a deadline


def test_a_desk_that_ends_well_leaves_nothing(tmp_path):
    keeper = Autosave(tmp_path)
    keeper.note(saved_of(position_frame=1))
    wait_until(keeper.path.exists)
    keeper.note(saved_of(position_frame=2))
    assert left_behind(tmp_path) == [], "it is running"
    keeper.close()
    assert list(tmp_path.iterdir()) == []


def test_what_changes_quickly_is_written_at_least_every_two_seconds(tmp_path):
    keeper = Autosave(tmp_path)
    began = time.monotonic()
    frame = 0
    while time.monotonic() < began + 2.2:
        frame += 1
        keeper.note(saved_of(position_frame=frame))
        time.sleep(0.01)  # a desk at work
        if time.monotonic() > began + 2.0:
            assert load(keeper.path).position_frame > 1
    keeper.close(keep=True)
    assert load(keeper.path).position_frame == frame, "the last change is written at the end"


KILLED = """
import sys, time
from pathlib import Path
from preview.engine.autosave import Autosave
from tests.engine.test_sessionfile import saved_of
keeper = Autosave(Path(sys.argv[1]))
keeper.note(saved_of(position_frame=77))
while not keeper.path.exists():
    time.sleep(0.01)
print("kept", flush=True)
time.sleep(60)
"""


def test_a_desk_that_is_killed_leaves_its_session_behind(tmp_path):
    desk = subprocess.Popen([sys.executable, "-c", KILLED, str(tmp_path)], stdout=subprocess.PIPE, text=True)
    assert desk.stdout is not None
    assert desk.stdout.readline() == "kept\n"
    assert left_behind(tmp_path) == []
    desk.kill()
    desk.wait()
    (left,) = left_behind(tmp_path)
    assert left.saved == without_expects(saved_of(position_frame=77))
    left.discard()
    assert left_behind(tmp_path) == []
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written_is_told_once(tmp_path):
    (tmp_path / "file").write_text("")
    told: list[str] = []
    keeper = Autosave(tmp_path / "file" / "desks", told.append)
    keeper.note(saved_of(position_frame=1))
    wait_until(lambda: bool(told))
    keeper.note(saved_of(position_frame=2))
    keeper.close()
    assert len(told) == 1
    assert "not being kept" in told[0]
