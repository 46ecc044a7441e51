"""``preview response --distortion``: what it reports, and what it refuses."""

from __future__ import annotations

import csv
import io
import json

import pytest

from preview.cli import main

QUICK = ("response", "--distortion", "--quality", "draft", "--rate", "48k")


def run(capsys, *words: str) -> tuple[int, str, str]:
    code = main([*QUICK, *words])
    out, err = capsys.readouterr()
    return code, out, err


def test_a_clean_level_and_a_clipped_one(capsys):
    code, out, err = run(capsys, "--level", "0 dBu", "--level", "+10 dBu", "--opamp", "TL072", "--json")
    assert code == 0, err
    report = json.loads(out)
    clean, clipped = report["distortion"]
    assert clean["frequency_hz"] == pytest.approx(997.0, abs=0.05)
    assert clean["level_v"] == pytest.approx(1.0954, rel=1e-4)
    assert clean["gain_db"] == pytest.approx(18.6, abs=0.1)  # 10 / sqrt(1 + (997 / 1591.5)^2)
    assert clean["thd_ratio"] < 1e-6
    assert clean["thd_n_ratio"] > 1e-6  # of noise
    assert clipped["thd_ratio"] == pytest.approx(0.19, abs=0.03)
    assert clipped["thd_of_total_ratio"] < clipped["thd_ratio"]
    assert len(clipped["harmonics_db"]) == 9
    assert [p["kind"] for p in report["two_tone"]] == ["smpte", "ccif", "smpte", "ccif"]
    assert [p["level_dbu"] for p in report["two_tone"]] == pytest.approx([0.0, 0.0, 10.0, 10.0])
    assert report["two_tone"][0]["smpte_rms_ratio"] < 1e-6 < report["two_tone"][2]["smpte_rms_ratio"]
    (begins,) = [o for o in report["onsets"] if o["limit"] == "rail"]
    assert 0.0 < begins["level_dbu"] < 10.0
    assert begins["opamp"] == "U1"


def test_a_sweep_goes_through_the_onset_and_gives_a_table(capsys):
    code, out, _ = run(capsys, "--sweep", "--at", "500", "--csv")
    assert code == 0
    rows = list(csv.DictReader(io.StringIO(out)))
    distortion = [float(row["thd_ratio"]) for row in rows]
    assert distortion[0] < 1e-6 < distortion[-1]
    assert sorted(distortion[-4:]) == distortion[-4:]
    levels = [float(row["level_dbu"]) for row in rows]
    assert levels == sorted(levels)
    code, out, _ = run(capsys, "--at", "500")
    assert code == 0
    assert "clipping begins at 500 Hz with 1.5" in out  # 15 V over 10 / sqrt(1 + (500 / 1591.5)^2)
    assert "not in its model" in out


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--sections"], "does not go with --distortion"),
        (["--noise"], "does not go with --distortion"),
        (["--as-heard"], "does not go with --distortion"),
        (["--sweep", "--level", "1 V"], "does not go with --sweep"),
        (["--level", "5"], "--level"),
        (["--at", "15k"], "--at"),
        (["--rate", "5k"], "--rate"),
    ],
)
def test_what_does_not_go_together_is_exit_2(capsys, words, told):
    code, out, err = run(capsys, *words)
    assert (code, out) == (2, "")
    assert told in err


@pytest.mark.parametrize("word", ["--sweep", "--level=1 V"])
def test_options_of_distortion_alone_are_exit_2(capsys, word):
    assert main(["response", word]) == 2
    assert "is for --distortion" in capsys.readouterr().err
