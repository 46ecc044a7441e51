"""A stage and an op-amp of one's own: one file each in the config folder, and they are there."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.circuit.library import new_stage_file, user_stage_folder
from preview.circuit.opamp_library import user_opamp_folder
from preview.cli import main

OPAMPS = Path(__file__).parents[2] / "preview" / "opamps"


@pytest.fixture(autouse=True)
def config(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A person's config folder, empty."""
    monkeypatch.setenv("XDG_CONFIG_HOME", str(tmp_path / "config"))
    monkeypatch.setenv("HOME", str(tmp_path))
    assert tmp_path in user_stage_folder().parents
    user_stage_folder().mkdir(parents=True)
    user_opamp_folder().mkdir(parents=True)


def report_of(capsys: pytest.CaptureFixture[str], *words: str) -> dict:
    assert main([*words, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_a_stage_is_added_by_one_file(capsys, tmp_path):
    before = [row["name"] for row in report_of(capsys, "stages")["stages"]]
    new_stage_file(user_stage_folder() / "tape-deck.toml")
    rows = report_of(capsys, "stages")["stages"]
    assert [row["name"] for row in rows] == [*before, "tape-deck"]
    assert rows[-1]["file"].endswith("tape-deck.toml")
    assert rows[0]["file"] is None
    assert main(["stages"]) == 0
    assert "My low-pass (your own)" in capsys.readouterr().out
    report = report_of(capsys, "response", "--stage", "tape-deck", "--part", "P1=0", "--at", "1k")
    assert report["gain_db"] == [pytest.approx(0.0, abs=0.03)]  # 10k over 10k, its own corner at 15.9 kHz
    soundfile.write(tmp_path / "in.wav", np.zeros((480, 1)), 48_000)
    rendered = report_of(
        capsys, "render", str(tmp_path / "in.wav"), str(tmp_path / "o.wav"), "--stage", "tape-deck"
    )
    assert rendered["frames"] == 480


def test_an_op_amp_is_added_by_one_file(capsys):
    before = [row["name"] for row in report_of(capsys, "opamps")["opamps"]]
    shutil.copy(OPAMPS / "TL072.toml", user_opamp_folder() / "MINE1.toml")
    assert [row["name"] for row in report_of(capsys, "opamps")["opamps"]] == [*before, "MINE1"]
    own = report_of(capsys, "response", "--opamp", "mine1", "--at", "100k")
    bundled = report_of(capsys, "response", "--opamp", "TL072", "--at", "100k")
    assert own["understood"]["opamps"] == {"U1": "MINE1"}
    assert own["gain_db"] == bundled["gain_db"]


def test_both_are_files_that_a_cascade_takes(capsys, tmp_path):
    new_stage_file(user_stage_folder() / "first.toml")
    new_stage_file(tmp_path / "second.toml")
    words = ("response", "--stage", "first", "--stage", str(tmp_path / "second.toml"), "--at", "10")
    assert report_of(capsys, *words)["gain_db"] == [pytest.approx(40.0, abs=0.01)]


def test_a_new_file_is_written_once_and_says_how_it_is_heard(capsys, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert main(["stages", "--new", "mine.toml"]) == 0
    assert "preview listen --stage ./mine.toml" in capsys.readouterr().out
    assert main(["response", "--stage", "./mine.toml", "--at", "1k"]) == 0
    assert "passband gain 20.00 dB" in capsys.readouterr().out
    assert main(["stages", "--new", "mine.toml"]) == 3
    assert "there is something of that name" in capsys.readouterr().err
    assert report_of(capsys, "stages", "--new", "other.toml")["file"] == "other.toml"
    assert main(["stages", "inverting-low-pass", "--new", "third.toml"]) == 2
    assert not (tmp_path / "third.toml").exists()
