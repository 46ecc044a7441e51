"""``preview response``, the lists, and what the command line says when it is not understood."""

from __future__ import annotations

import csv
import io
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import scipy.signal
import soundfile

from preview.cli import main


def run(capsys, *words: str) -> tuple[int, str, str]:
    code = main(list(words))
    out, err = capsys.readouterr()
    return code, out, err


def report_of(capsys, *words: str) -> dict:
    code, out, err = run(capsys, *words, "--json")
    assert (code, err) == (0, "")
    report = json.loads(out)
    assert (report["preview"], report["format"]) == ("0.1.0", 1)
    return report


def test_response_json_agrees_with_the_closed_form(capsys):
    report = report_of(capsys, "response", "--at", "20,1k,20k")
    f = np.array([20.0, 1000.0, 20000.0])
    assert report["frequency_hz"] == f.tolist()
    # inverting low-pass: -R2/R1 / (1 + s R2 C1), 10k, 100k, 1n
    x = 2 * np.pi * f * 100e3 * 1e-9
    np.testing.assert_allclose(report["gain_db"], 20 - 10 * np.log10(1 + x**2), atol=1e-6)
    np.testing.assert_allclose(report["phase_deg"], 180 - np.degrees(np.arctan(x)), atol=1e-6)
    np.testing.assert_allclose(report["group_delay_s"], 1e-4 / (1 + x**2), rtol=1e-6)
    assert report["corners_hz"] == [pytest.approx(1591.549, abs=0.001)]
    assert report["passband_gain_db"] == pytest.approx(20.0, abs=1e-6)
    np.testing.assert_allclose(report["input_impedance_ohm"], 10e3)
    np.testing.assert_allclose(report["output_impedance_ohm"], 0.0, atol=1e-9)


def test_as_heard_is_within_a_hundredth_of_a_db_and_says_so(capsys):
    analog = report_of(capsys, "response")
    as_heard = report_of(capsys, "response", "--as-heard", "--rate", "44.1k")
    assert not analog["as_heard"]
    assert as_heard["as_heard"]
    assert as_heard["sample_rate_hz"] == 44100
    count = len(as_heard["frequency_hz"])
    difference = np.abs(np.array(as_heard["gain_db"]) - analog["gain_db"][:count])
    assert 0 < difference.max() < 0.01
    assert as_heard["corners_hz"] == [pytest.approx(1591.549, rel=1e-3)]


@pytest.mark.parametrize("prewarp", [None, "1k"])
def test_sections_are_scipys_bilinear_transform_of_the_circuit(capsys, prewarp):
    words = ["--prewarp", prewarp] if prewarp else []
    report = report_of(capsys, "response", "--sections", "--rate", "48k", *words)
    fs = 48000.0
    if prewarp:
        fs = np.pi * 1000 / np.tan(np.pi * 1000 / 48000)
    b, a = scipy.signal.bilinear([-10.0], [1e-4, 1.0], fs=fs)
    (row,) = report["sections"]
    f = np.array([10.0, 1000.0, 15000.0])
    _, ours = scipy.signal.sosfreqz(np.array([row]), f, fs=48000)
    _, theirs = scipy.signal.freqz(b, a, f, fs=48000)
    np.testing.assert_allclose(ours, theirs, rtol=1e-9)


def test_csv_has_one_line_of_names_and_one_a_frequency(capsys):
    code, out, _ = run(capsys, "response", "--csv", "--at", "100,1k")
    rows = list(csv.DictReader(io.StringIO(out)))
    assert code == 0
    assert [float(row["frequency_hz"]) for row in rows] == [100.0, 1000.0]
    assert float(rows[1]["gain_db"]) == pytest.approx(18.5549, abs=1e-4)


def test_the_table_has_units(capsys):
    code, out, _ = run(capsys, "response", "--at", "1k")
    assert code == 0
    for words in ("corners 1.59 kHz", "18.555 dB", "147.86 deg", "71.7 µs", "10 kΩ"):
        assert words in out


@pytest.mark.parametrize(
    ("words", "code"),
    [
        (["response", "--at", "20,,1k"], 2),
        (["response", "--at", "-5"], 2),
        (["response", "--at", "30k", "--as-heard"], 2),
        (["response", "--rate", "1 MHz", "--as-heard"], 2),
        (["response", "--prewarp", "40k", "--sections"], 2),
        (["response", "--json", "--csv"], 2),
        (["response", "--prewarp", "1k"], 2),
        (["response", "--rate", "48k"], 2),
        (["response", "--rate", "", "--as-heard"], 2),
        (["response", "--sections", "--at", "1k"], 2),
        (["response", "--sections", "--as-heard"], 2),
        (["response", "--stage", "/"], 5),
        (["listen", ""], 2),
        (["render", "", "out.wav"], 2),
        (["render", "in.wav", ""], 2),
        (["render", "in.wav", "out.wav", "--depth", ""], 2),
        (["response", "--analog", "--as-heard"], 2),
        (["response", "--load", "0"], 2),
        (["response", "--stage", "nope"], 5),
        (["stages", "nope"], 5),
        (["nope"], 2),
        (["--nope"], 2),
        (["listen", "--live", "--signal", "sine 1k 1V"], 2),
        (["listen", "in.wav", "--signal", "sine 1k 1V"], 2),
        (["listen", "--signal", "sine 1k"], 2),
        (["listen", "--input", "feed"], 2),
        (["listen", "--end", "never"], 2),
        (["listen", "-"], 2),
        (["listen", "nowhere.wav"], 3),
    ],
)
def test_refusals_have_their_code_and_one_or_two_plain_lines(capsys, words, code):
    got, out, err = run(capsys, *words)
    assert got == code, err
    assert out == ""
    lines = err.splitlines()
    assert 1 <= len(lines) <= 2
    assert lines[0].startswith("preview: ")
    assert "Traceback" not in err
    assert "inside the program" not in err


def test_stages_lists_every_stage_and_prints_one(capsys):
    code, out, _ = run(capsys, "stages")
    assert code == 0
    names = [line.split()[0] for line in out.splitlines()]
    assert {"inverting-low-pass", "inverting-high-pass", "inverting-band-pass"} <= set(names)
    assert [row["name"] for row in report_of(capsys, "stages")["stages"]] == names
    code, out, _ = run(capsys, "stages", "inverting-low-pass")
    assert code == 0
    assert "[parts]" in out
    assert "toml" in report_of(capsys, "stages", "inverting-low-pass")


def test_opamps_lists_the_built_in_types(capsys):
    assert [row["name"] for row in report_of(capsys, "opamps")["opamps"]][:2] == ["perfect", "ideal"]
    code, out, _ = run(capsys, "opamps")
    assert code == 0
    assert "no limit but the rails" in out


def test_devices_lists_what_there_is_or_says_what_is_missing(capsys):
    code, _, err = run(capsys, "devices")
    assert code in (0, 4)
    assert "Traceback" not in err


def test_version_and_help_are_exit_0(capsys):
    assert run(capsys, "--version")[:2] == (0, "preview 0.1.0\n")
    code, out, _ = run(capsys, "listen", "--help")
    assert code == 0
    assert "--silent" in out
    assert "--live" in out


def test_an_error_inside_the_program_is_a_line_and_its_trace_is_there_on_request(capsys, monkeypatch):
    from preview.circuit import library

    def broken() -> None:
        raise RuntimeError("boom \x1b[31m")

    monkeypatch.setattr(library, "stage_names", broken)
    code, out, err = run(capsys, "stages")
    assert (code, out) == (1, "")
    assert "Traceback" not in err
    assert "\x1b" not in err
    monkeypatch.setenv("PREVIEW_DEBUG", "1")
    assert "Traceback" in run(capsys, "stages")[2]


def test_the_desk_needs_a_terminal_and_says_how_it_understood_the_options(tmp_path):
    import soundfile

    path = tmp_path / "tone.wav"
    soundfile.write(path, np.zeros(100), 48000)
    done = subprocess.run(
        [sys.executable, "-m", "preview", "listen", path, "--part", "R1=4k7"],
        capture_output=True,
        text=True,
        stdin=subprocess.DEVNULL,
        check=False,
    )
    assert done.returncode == 2
    assert "4.7 kΩ" in done.stderr
    assert "needs a terminal" in done.stderr


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--signal", "sine 1k +4 dBu"], "test signal sine 1 kHz 1.73616351 V"),
        (["--live"], "live input begins muted"),
    ],
)
def test_a_test_signal_or_live_input_takes_the_place_of_a_recording(capsys, words, said):
    code, _, err = run(capsys, "listen", *words)
    assert code == 2
    assert said in err
    assert "needs a terminal" in err


def test_the_demo_is_the_announcement_at_its_own_full_scale():
    from preview.engine.demo import demo_recording

    demo = demo_recording()
    assert demo.path.name.startswith("announcement")
    assert demo.path.exists()
    assert demo.full_scale == "+18 dBu"
    assert demo.stage


def test_without_the_demo_folder_it_says_so(tmp_path: Path):
    from preview.engine.demo import demo_recording
    from preview.errors import AudioFileError

    with pytest.raises(AudioFileError, match="not beside the program"):
        demo_recording(tmp_path)


def test_response_says_how_the_options_were_understood(capsys):
    code, out, err = run(capsys, "response", "--at", "1k", "--part", "R1=4k7", "--source", "600")
    assert code == 0
    assert "passband" in out
    assert "4.7 kΩ (4700 ohm)" in err
    assert "source 600 = 600 Ω" in err


def test_what_is_hardly_meant_is_a_warning_with_its_cure(capsys):
    code, _, err = run(capsys, "response", "--supply", "9", "--at", "1k")
    assert code == 0
    assert "preview: warning: U1 rests at 0 V, and its output reaches 0 V to 9 V" in err
    assert "half the supply" in err
    assert "warning" not in run(capsys, "response", "--at", "1k")[2]


STATIC = """
title = "Volume"
supply = { positive = "9 V", negative = "0 V" }
outputs = ["w"]
[parts]
R1 = { kind = "resistor", nodes = ["in", "out"], value = "10k" }
P1 = { kind = "potentiometer", ends = ["gnd", "out"], wiper = "w", value = "10k", taper = "log" }
S1 = { kind = "switch", nodes = ["w", "gnd"], closed = true }
"""


def test_response_follows_position_switch_and_output(capsys, tmp_path):
    """Closed form: a divider of 10k and 10k, whose track gives an eighth of it to the wiper at half a turn."""
    path = tmp_path / "volume.toml"
    path.write_text(STATIC, "utf-8")
    stage = ("response", "--stage", str(path), "--at", "1k", "--part", "S1=open")
    half = report_of(capsys, *stage, "--part", "P1=50%", "--output", "w")
    assert half["gain_db"][0] == pytest.approx(
        20 * np.log10(0.5 / 8), abs=1e-5
    )  # the open switch loads a little
    assert half["understood"]["parts"] == {"R1": 1e4, "P1": 0.5, "S1": 0.0}
    assert half["understood"]["output"] == "w"
    assert report_of(capsys, *stage)["gain_db"][0] == pytest.approx(20 * np.log10(0.5), abs=1e-5)
    muted = report_of(capsys, *stage[:-2], "--output", "w")
    assert muted["gain_db"][0] < -110.0


def test_a_circuit_that_runs_away_does_not_open_the_desk(capsys, tmp_path):
    # + gets half of the output back, - an eleventh: more positive than negative feedback
    (tmp_path / "away.toml").write_text(
        'title = "x"\nsupply = { positive = "15 V", negative = "-15 V" }\n[parts]\n'
        'R1 = { kind = "resistor", nodes = ["in", "p"], value = "10k" }\n'
        'R2 = { kind = "resistor", nodes = ["p", "out"], value = "10k" }\n'
        'R3 = { kind = "resistor", nodes = ["m", "out"], value = "10k" }\n'
        'R4 = { kind = "resistor", nodes = ["m", "gnd"], value = "1k" }\n'
        'U1 = { kind = "opamp", plus = "p", minus = "m", out = "out", type = "ideal" }\n'
    )
    soundfile.write(tmp_path / "in.wav", np.zeros(100), 48000)
    for words in (
        ["listen", tmp_path / "in.wav"],
        ["render", tmp_path / "in.wav", tmp_path / "o.wav"],
        ["response"],
    ):
        code, out, err = run(capsys, *map(str, words), "--stage", str(tmp_path / "away.toml"))
        assert (code, out) == (5, "")
        assert "positive feedback" in err
    assert not (tmp_path / "o.wav").exists()


@pytest.mark.parametrize("encoding", ["ascii", "latin-1"])
def test_files_and_pipes_get_utf_8_whatever_the_locale(encoding):
    environment = {**os.environ, "PYTHONIOENCODING": encoding}
    for words, told in ((["response", "--at", "1k"], "10 kΩ"), (["stages", "inverting-low-pass"], "▒▒▒▒")):
        done = subprocess.run(
            [sys.executable, "-m", "preview", *words], capture_output=True, env=environment, timeout=60
        )
        assert done.returncode == 0, done.stderr
        assert told in done.stdout.decode("utf-8")


def test_a_closed_or_full_stderr_does_not_stop_the_work_or_spill_into_stdout():
    words = f"{sys.executable} -m preview response --at 1k --csv"
    for redirection in ("2>&-", *(["2>/dev/full"] if os.path.exists("/dev/full") else [])):
        done = subprocess.run(
            f"exec {words} {redirection}", shell=True, stdout=subprocess.PIPE, text=True, timeout=60
        )
        assert done.returncode == 0
        assert done.stdout.startswith("frequency_hz,")
        assert len(done.stdout.splitlines()) == 2


def test_a_closed_stdout_is_no_error_inside_the_program():
    done = subprocess.run(
        f"exec {sys.executable} -m preview stages >&-",
        shell=True,
        stderr=subprocess.PIPE,
        text=True,
        timeout=60,
    )
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs a device that is always full")
def test_a_full_disk_behind_a_report_is_exit_3_in_plain_words():
    with open("/dev/full", "wb") as full:
        done = subprocess.run(
            [sys.executable, "-m", "preview", "stages"], stdout=full, stderr=subprocess.PIPE, text=True
        )
    assert (done.returncode, done.stderr) == (3, "preview: standard output: disk full\n")


def test_a_broken_stage_of_ones_own_does_not_hide_the_others(capsys, tmp_path, monkeypatch):
    monkeypatch.setattr("preview.circuit.library.user_stage_folder", lambda: tmp_path)
    (tmp_path / "broken.toml").write_text("not a stage [")
    (tmp_path / "folder.toml").mkdir()
    good = run(capsys, "stages", "inverting-low-pass")[1]
    (tmp_path / "mine.toml").write_text(good, encoding="utf-8")
    code, out, err = run(capsys, "stages", "--json")
    assert code == 0
    names = {row["name"] for row in json.loads(out)["stages"]}
    assert {"mine", "inverting-low-pass"} <= names
    assert not {"broken", "folder"} & names
    assert [line.startswith("preview: warning: ") for line in err.splitlines()] == [True, True]


@pytest.mark.parametrize("command", [["stages"], ["opamps"], ["opamps", "TL072"]])
def test_csv_has_the_rows_of_json(command, capsys):
    assert main([*command, "--json"]) == 0
    body = json.loads(capsys.readouterr().out)
    expected = body[command[0]] if len(command) == 1 else [body]
    assert main([*command, "--csv"]) == 0
    rows = list(csv.DictReader(io.StringIO(capsys.readouterr().out)))
    assert [row["name"] for row in rows] == [row["name"] for row in expected]
    for row, wanted in zip(rows, expected, strict=True):
        for key, value in wanted.items():
            if isinstance(value, float):
                assert float(row[key]) == value


def test_render_csv_has_a_row_for_each_op_amp_with_the_figures_of_the_file(tmp_path, capsys):
    source = tmp_path / "tone.wav"
    soundfile.write(source, 0.1 * np.sin(np.arange(4800) / 10), 48_000, subtype="FLOAT")
    assert main(["render", str(source), str(tmp_path / "out.wav"), "--csv"]) == 0
    (row,) = csv.DictReader(io.StringIO(capsys.readouterr().out))
    assert row["name"] == "U1"
    assert row["frames"] == "4800"
    assert row["slew_limit_v_per_s"] == ""
    assert float(row["input_peak_v"]) == pytest.approx(0.1 * 8.70, rel=0.01)


def test_response_answers_with_sign_sections_step_and_as_drawn(capsys):
    words = ("response", "--at", "100,1k", "--source", "1k", "--load", "2k", "--stage", "inverting-high-pass")
    report = report_of(capsys, *words)
    # 11k and 100 nF: 144.686 Hz; 100k / 11k
    assert report["passband_gain"] == pytest.approx(-100 / 11, rel=1e-6)
    assert report["passband_polarity"] == "inverting"
    assert [pole["f0_hz"] for pole in report["poles"]] == [pytest.approx(144.686, abs=5e-4)]
    assert report["step"]["peak_gain"] == pytest.approx(-100 / 11)
    drawn = report["as_drawn"]
    assert drawn["corners_hz"] == [pytest.approx(159.155, abs=5e-4)]
    assert drawn["passband_gain_change_db"] == pytest.approx(20 * np.log10(10 / 11), abs=1e-6)
    assert len(drawn["gain_db"]) == len(drawn["phase_deg"]) == 2
    code, out, _ = run(capsys, *words)
    assert code == 0
    for text in ("x 9.091, inverting", "144.7 Hz", "step ", "as drawn", "-0.83 dB", "-9.09 %"):
        assert text in out
    code, out, _ = run(capsys, *words, "--csv")
    rows = list(csv.DictReader(io.StringIO(out)))
    assert [float(row["drawn_gain_db"]) for row in rows] == pytest.approx(drawn["gain_db"])


def test_response_of_a_cascade_tells_what_each_stage_does_in_its_place(capsys):
    words = ("response", "--at", "1k", "--stage", "inverting-high-pass", "--stage", "inverting-low-pass")
    report = report_of(capsys, *words)
    assert [row["output"] for row in report["stages"]] == ["1.out", "out"]
    assert sum(row["gain_db"][0] for row in report["stages"]) == pytest.approx(report["gain_db"][0])
    assert "after 1, inverting-high-pass" in run(capsys, *words)[1]


def test_response_draws_the_curve_and_writes_a_picture(capsys, tmp_path):
    code, out, _ = run(capsys, "response", "--at", "1k", "--draw", "--plot", str(tmp_path / "a.svg"))
    assert code == 0
    assert "^ corners 1.592 kHz" in out
    assert (tmp_path / "a.svg").read_text("utf-8").startswith("<?xml")
    report = report_of(capsys, "response", "--at", "1k", "--plot", str(tmp_path / "b.PNG"))
    assert report["passband_gain"] == pytest.approx(-10.0)
    assert (tmp_path / "b.PNG").read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("words", "code", "told"),
    [
        (["--plot", "a.pdf"], 2, "ends in .png or .svg"),
        (["--plot", ""], 2, "ends in .png or .svg"),
        (["--plot", "nowhere/at/all.png"], 3, "nowhere/at: no such folder"),
        (["--draw", "--json"], 2, "--draw does not go with --json"),
        (["--draw", "--csv"], 2, "--draw does not go with --json"),
        (["--draw", "--sections"], 2, "--draw does not go with --sections"),
        (["--plot", "a.png", "--sections"], 2, "--plot does not go with --sections"),
    ],
)
def test_a_picture_that_cannot_be_is_refused(capsys, words, code, told):
    got, out, err = run(capsys, "response", *words)
    assert (got, out) == (code, "")
    assert told in err
    assert "Traceback" not in err
