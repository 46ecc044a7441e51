"""``preview check``: its report in every shape, its limits, its files, and what it does when stopped."""

from __future__ import annotations

import csv
import io
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import scipy.signal
import soundfile

from preview.cli import main

RATE_HZ = 48000
QUICK = ("--quality", "draft", "--full-scale", "4 V", "--workers", "1")


def write_tone(path: Path, peak: float, seconds: float = 0.25, f: float = 1000.0) -> Path:
    """A sine that is faded in and out, stereo, the second channel at half."""
    frames = round(seconds * RATE_HZ)
    sine = np.sin(2 * np.pi * f * np.arange(frames) / RATE_HZ) * scipy.signal.windows.tukey(frames, 0.2)
    path.parent.mkdir(exist_ok=True, parents=True)
    soundfile.write(path, np.stack([peak * sine, 0.5 * peak * sine], axis=1), RATE_HZ, subtype="FLOAT")
    return path


@pytest.fixture
def tone(tmp_path: Path) -> Path:
    """Half of full scale: 2 V."""
    return write_tone(tmp_path / "tone.wav", 0.5)


@pytest.fixture
def loud(tmp_path: Path) -> Path:
    """Full scale: 4 V, 34 V asked of 15 V rails."""
    return write_tone(tmp_path / "loud.wav", 1.0, 0.5)


def damaged(path: Path) -> Path:
    soundfile.write(path, np.random.default_rng(2).uniform(-0.5, 0.5, 50_000), RATE_HZ)
    data = bytearray(path.read_bytes())
    data[60_000:60_400] = bytes(400)
    path.write_bytes(data)
    return path


def check(capsys, *words: object) -> tuple[int, str, str]:
    code = main(["check", *map(str, words)])
    out, err = capsys.readouterr()
    return code, out, err


def as_json(capsys, *words: object) -> dict:
    code, out, err = check(capsys, *words, "--json")
    assert code == 0, err
    return json.loads(out)


def test_json_has_every_key_of_the_contract(capsys, tone):
    report = as_json(capsys, tone, *QUICK, "--opamp", "TL072", "--part", "R1=20k")
    assert (report["preview"], report["format"], report["command"]) == ("0.1.0", 1, "check")
    (file,) = report["files"]
    for body in (report, file):
        assert body["sample_rate_hz"] == RATE_HZ
        assert body["frames"] == RATE_HZ // 4
        assert body["channels"] == 2
        assert body["full_scale_v"] == 4.0
        assert body["quality"] == "draft"
        assert body["realtime_ratio"] > 0
        assert 0 <= body["response_error_db"] < 0.1
        assert body["input"]["peak_v"] == pytest.approx(2.0, rel=1e-6)
        # gain 5 / sqrt(1 + (1000 / 1591.5)^2)
        assert body["output"]["peak_v"] == pytest.approx(8.47, rel=5e-3)
        assert body["clean_gain_db"] == pytest.approx(20 * np.log10(14 / 8.48), abs=0.05)
        assert body["any_signal_gain_db"] < body["clean_gain_db"]
        (opamp,) = body["opamps"]
        assert opamp["name"] == "U1"
        assert opamp["peak_v"] == pytest.approx(8.48, rel=5e-3)
        assert opamp["headroom_db"] == pytest.approx(body["clean_gain_db"], abs=0.05)
        assert (opamp["clip_events"], opamp["clipped_s"]) == (0, 0.0)
        assert opamp["slew_limit_v_per_s"] == 13e6
        assert 0 < opamp["slew_peak_v_per_s"] < 1e6
        assert 0 < opamp["current_peak_a"] < opamp["current_limit_a"]
        # whatever the signal, 2 V at the input are 10 V at the output and its offset
        assert opamp["bound_v"] == pytest.approx(10.0, rel=0.01)
    assert report["complete"] is True
    assert report["failed"] == []
    assert report["understood"]["parts"]["R1"] == 20000.0


def test_the_table_says_peak_headroom_and_margin(capsys, tone):
    code, out, err = check(capsys, tone, *QUICK, "--part", "R1=20k")
    assert code == 0
    assert "8.47 V" in out
    assert "5.0 dB" in out  # 15 V over 8.47 V
    assert "+4.96 dB" in out
    assert "nothing came to a limit" in out
    assert "stage inverting-low-pass" in err


def test_a_table_that_would_be_empty_is_left_out(capsys, tone):
    for words in ((), ("--no-margin", "--opamp", "perfect")):
        code, out, _ = check(capsys, tone, *QUICK, "--part", "R1=20k", *words)
        assert code == 0
        assert ("clean with" in out) == (not words)
        assert "\nfile\n" not in out


def test_events_are_listed_with_time_codes(capsys, loud):
    code, out, _ = check(capsys, loud, *QUICK, "--events", "--no-margin")
    assert code == 0
    rows = [line for line in out.splitlines() if " rail" in line]
    assert len(rows) > 800  # twice a period and channel, but for the fades
    assert "0:00:00.1" in out
    code, out, _ = check(capsys, loud, *QUICK, "--events", "--csv", "--no-margin")
    events = list(csv.DictReader(io.StringIO(out)))
    assert len(events) == len(rows)
    times = [float(e["start_s"]) for e in events]
    assert times == sorted(times)
    assert {e["side"] for e in events} == {"high", "low"}
    assert {e["channel"] for e in events} == {"1", "2"}


def test_csv_has_a_row_for_each_op_amp_of_each_file(capsys, tone, loud):
    code, out, _ = check(capsys, tone, loud, *QUICK, "--csv")
    assert code == 0
    rows = list(csv.DictReader(io.StringIO(out)))
    assert [Path(r["file"]).name for r in rows] == ["tone.wav", "loud.wav"]
    assert rows[0]["opamp_name"] == "U1"
    assert float(rows[0]["input_peak_v"]) == pytest.approx(2.0)
    assert int(rows[1]["opamp_clip_events"]) > 100
    assert float(rows[1]["clean_gain_db"]) == pytest.approx(20 * np.log10(15 / 33.9), abs=0.05)
    assert rows[1]["proof"] == "whole file"


@pytest.mark.parametrize(
    ("want", "met"),
    [
        ("headroom 0.5 dB", False),
        ("headroom -1 dB", True),
        ("no clips", False),
        ("clips 100000", True),
        ("U1 clips 3", False),
        ("clipped 1 s", True),
        ("clipped 1 ms", False),
        ("slew 100 %", True),
        ("slew 0.5 %", False),
        ("current 50 %", True),
        ("current 0.1 %", False),
        ("margin 0 dB", False),
        ("margin -10 dB", True),
        ("any signal -10 dB", True),
        ("any signal -7 dB", False),
        ("output 20 V", True),
        ("output +20 dBu", False),
        ("dc 1 V", True),
        ("dc 1 mV", False),
        ("loudness 20 LUFS", True),
        ("loudness -16 LUFS", False),
    ],
)
def test_a_limit_that_is_missed_is_exit_1(capsys, loud, want, met):
    code, out, _ = check(capsys, loud, *QUICK, "--opamp", "TL072", "--limit", want, "--json")
    report = json.loads(out)
    assert code == (0 if met else 1)
    (limit,) = report["limits"]
    assert (limit["want"], limit["met"]) == (want, met)
    assert bool(limit["misses"]) != met
    if not met:
        assert limit["misses"][0]["found"]
        code, out, _ = check(capsys, loud, *QUICK, "--opamp", "TL072", "--limit", want)
        assert code == 1
        assert f"missed: {want}" in out


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["--limit", "speed 9"], "no such want"),
        (["--limit", "headroom"], "write headroom 3 dB"),
        (["--limit", "headroom 3"], "write headroom 3 dB"),
        (["--limit", "slew 9 V"], "write slew 80 %"),
        (["--limit", "U1 margin 3 dB"], "is not of one op-amp"),
        (["--limit", "U7 headroom 3 dB"], "no op-amp U7"),
        (["--workers", "0"], "not a number of processes"),
        (["--workers", "many"], "not a number of processes"),
        (["--rate", "100"], "--rate is for logs"),
        (["--cut", "/nowhere/at/all"], "no such folder"),
    ],
)
def test_options_that_are_not_understood_are_exit_2(capsys, tone, words, told):
    code, out, err = check(capsys, tone, *QUICK[:4], *words)
    assert (code, out) == (2, "")
    assert told in err


def test_folders_patterns_and_names_give_each_file_once_in_order(capsys, tmp_path, monkeypatch):
    for name in ("b/two.wav", "b/deep/one.flac", "a.wav", "b/.hidden.wav", "b/.git/x.wav"):
        path = tmp_path / name
        path.parent.mkdir(exist_ok=True, parents=True)
        soundfile.write(path, np.zeros(500), 8000)
    (tmp_path / "b" / "notes.txt").write_text("no signal")
    (tmp_path / "b" / "log.csv").write_text("time,v\n0,0\n0.1,0.1\n0.2,0\n")
    monkeypatch.chdir(tmp_path)
    report = as_json(capsys, "a.wav", "b", "*.wav", "**/*.flac", *QUICK[:2], "--workers", "1")
    assert [f["file"] for f in report["files"]] == ["a.wav", "b/log.csv", "b/two.wav", "b/deep/one.flac"]
    assert report["files"][1]["full_scale_v"] == 1.0
    assert report["files"][0]["full_scale_v"] == pytest.approx(8.7014, rel=1e-4)


@pytest.mark.parametrize(("name", "told"), [("empty", "no recordings"), ("*.wav", "no file has such a name")])
def test_a_folder_or_pattern_without_recordings_is_exit_3(capsys, tmp_path, monkeypatch, name, told):
    (tmp_path / "empty").mkdir()
    monkeypatch.chdir(tmp_path)
    code, out, err = check(capsys, name)
    assert (code, out) == (3, "")
    assert told in err


def test_standard_input_is_refused(capsys):
    code, out, err = check(capsys, "-")
    assert (code, out) == (2, "")
    assert "more than once" in err


def test_a_single_file_that_cannot_be_read_is_one_line_and_exit_3(capsys, tmp_path):
    for path in (tmp_path / "nowhere.wav", damaged(tmp_path / "bad.flac")):
        code, out, err = check(capsys, path, *QUICK)
        assert (code, out) == (3, "")
        assert len([line for line in err.splitlines() if line.startswith("preview: ")]) == 1


@pytest.mark.parametrize("workers", ["1", "2"])
def test_a_damaged_file_is_reported_and_the_rest_is_done(capsys, tmp_path, tone, loud, workers):
    bad = damaged(tmp_path / "bad.flac")
    code, out, err = check(
        capsys, tone, bad, tmp_path / "gone.wav", loud, *QUICK[:4], "--workers", workers, "--json"
    )
    report = json.loads(out)
    assert code == 3
    assert [Path(f["file"]).name for f in report["files"]] == ["tone.wav", "loud.wav"]
    assert [Path(f["file"]).name for f in report["failed"]] == ["bad.flac", "gone.wav"]
    assert "damaged" in report["failed"][0]["message"]
    assert "bad.flac" in err
    assert "Traceback" not in err


def test_a_missed_limit_beside_a_damaged_file_is_exit_3(capsys, tmp_path, loud):
    bad = damaged(tmp_path / "bad.flac")
    assert check(capsys, loud, bad, *QUICK, "--limit", "no clips")[0] == 3


def test_two_workers_find_what_one_finds(capsys, tmp_path):
    for i in range(6):
        write_tone(tmp_path / f"{i}.wav", 0.15 * (i + 1), 0.1 + 0.02 * i)
    reports = [as_json(capsys, tmp_path, *QUICK[:4], "--workers", n) for n in ("1", "2")]
    for report in reports:
        for file in report["files"]:
            del file["realtime_ratio"]
    assert reports[0]["files"] == reports[1]["files"]


def test_the_full_scale_of_each_recording_is_its_own(capsys, tmp_path):
    main(["render", str(write_tone(tmp_path / "x.wav", 0.1)), str(tmp_path / "a.wav"), "--full-scale", "2 V"])
    main(["render", str(tmp_path / "x.wav"), str(tmp_path / "b.wav"), "--full-scale", "3 V"])
    capsys.readouterr()
    report = as_json(capsys, tmp_path / "a.wav", tmp_path / "b.wav", "--quality", "draft", "--workers", "1")
    assert [f["full_scale_v"] for f in report["files"]] == [2.0, 3.0]
    report = as_json(capsys, tmp_path / "a.wav", tmp_path / "b.wav", *QUICK)
    assert [f["full_scale_v"] for f in report["files"]] == [4.0, 4.0]


# -- taking up again, being stopped


def test_a_record_is_taken_up_and_changed_files_are_done_again(capsys, tmp_path, tone, loud):
    record = tmp_path / "results.jsonl"
    words = (tone, loud, *QUICK, "--resume", record)
    first = as_json(capsys, *words)
    size = record.stat().st_size
    _, out, err = check(capsys, *words, "--json")
    assert "2 of 2 files taken" in err
    assert json.loads(out)["files"] == first["files"]  # to the last digit, its speed included
    assert record.stat().st_size == size
    write_tone(loud, 0.9)
    _, out, err = check(capsys, *words, "--json")
    assert "1 of 2 files taken" in err
    assert json.loads(out)["files"][0] == first["files"][0]
    assert json.loads(out)["files"][1]["input"]["peak_v"] == pytest.approx(3.6)
    # other parts, another result
    _, _, err = check(capsys, *words, "--part", "R1=20k", "--json")
    assert "taken" not in err


def test_a_record_with_a_line_cut_off_is_taken_up(capsys, tmp_path, tone, loud):
    record = tmp_path / "results.jsonl"
    words = (tone, loud, *QUICK, "--resume", record)
    as_json(capsys, *words)
    whole = record.read_bytes()
    record.write_bytes(whole[: len(whole) - 200])
    _, _, err = check(capsys, *words, "--json")
    assert "1 of 2 files taken" in err
    _, _, err = check(capsys, *words, "--json")
    assert "2 of 2 files taken" in err


def test_what_is_no_record_is_refused_and_left_alone(capsys, tmp_path, tone):
    for text in ("dear diary\n", "time,v\n0,1\n"):
        (tmp_path / "diary.txt").write_text(text)
        code, out, err = check(capsys, tone, *QUICK, "--resume", tmp_path / "diary.txt")
        assert (code, out) == (3, "")
        assert "is not a record" in err
        assert (tmp_path / "diary.txt").read_text() == text


def started(*words: object) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "preview", "check", *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def wait_for_lines(record: Path, lines: int, process: subprocess.Popen[str]) -> None:
    deadline = time.monotonic() + 120
    while not record.exists() or record.read_bytes().count(b"\n") < lines:
        assert process.poll() is None, process.communicate()[1]
        assert time.monotonic() < deadline
        time.sleep(0.02)  # polling a process, with a deadline


@pytest.mark.parametrize("workers", ["1", "2"])
def test_an_interrupt_keeps_what_is_done_and_is_exit_130(tmp_path, workers):
    write_tone(tmp_path / "a.wav", 0.1, 0.2)
    write_tone(tmp_path / "b.wav", 0.1, 0.2)
    soundfile.write(tmp_path / "c.wav", np.zeros((RATE_HZ * 900, 1), np.float32), RATE_HZ, subtype="PCM_16")
    record = tmp_path / "r.jsonl"
    process = started(tmp_path, "--quality", "fine", "--workers", workers, "--resume", record, "--json")
    wait_for_lines(record, 2, process)
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=30)
    assert process.returncode == 130, err
    assert "interrupted" in err
    assert "Traceback" not in err
    report = json.loads(out)
    assert report["complete"] is False
    assert [Path(f["file"]).name for f in report["files"]] == ["a.wav", "b.wav"]


def children(pid: int) -> list[int]:
    path = Path(f"/proc/{pid}/task/{pid}/children")
    return [int(p) for p in path.read_text().split()]


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="looks at processes as Linux shows them")
def test_after_kill_9_only_the_files_in_progress_are_done_again(tmp_path):
    for i in range(4):
        write_tone(tmp_path / f"{i}.wav", 0.1, 0.2)
    soundfile.write(tmp_path / "z.wav", np.zeros((RATE_HZ * 900, 1), np.float32), RATE_HZ, subtype="PCM_16")
    record = tmp_path / "r.jsonl"
    words = (tmp_path, "--quality", "draft", "--workers", "2", "--resume", record)
    process = started(*words)
    wait_for_lines(record, 4, process)
    workers = children(process.pid)
    process.send_signal(signal.SIGKILL)
    process.wait(10)
    for pipe in (process.stdout, process.stderr):
        assert pipe is not None
        pipe.close()
    (tmp_path / "z.wav").unlink()
    again = started(*words, "--json")
    out, err = again.communicate(timeout=120)
    assert again.returncode == 0, err
    assert "4 of 4 files taken" in err
    assert len(json.loads(out)["files"]) == 4
    deadline = time.monotonic() + 30  # the workers notice that nobody listens, and go
    while any(
        Path(f"/proc/{pid}/cmdline").exists() and b"spawn" in Path(f"/proc/{pid}/cmdline").read_bytes()
        for pid in workers
    ):
        assert time.monotonic() < deadline
        time.sleep(0.05)  # polling processes, with a deadline


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="looks at processes as Linux shows them")
def test_a_worker_that_dies_takes_only_its_file_with_it(tmp_path):
    soundfile.write(tmp_path / "a.wav", np.zeros((RATE_HZ * 900, 1), np.float32), RATE_HZ, subtype="PCM_16")
    for i in range(4):
        write_tone(tmp_path / f"b{i}.wav", 0.1, 0.2)
    record = tmp_path / "r.jsonl"
    process = started(tmp_path, "--quality", "fine", "--workers", "2", "--resume", record, "--json")
    wait_for_lines(record, 4, process)
    for pid in children(process.pid):
        if b"spawn_main" in Path(f"/proc/{pid}/cmdline").read_bytes():
            os.kill(pid, signal.SIGKILL)
    out, err = process.communicate(timeout=60)
    report = json.loads(out)
    assert process.returncode == 1
    assert len(report["files"]) == 4
    assert "signal 9" in report["failed"][0]["message"]
    assert "a.wav" in err


# -- cut-outs


def test_the_worst_moments_are_cut_out_as_they_went_in_and_came_out(capsys, tmp_path):
    frames = 4 * RATE_HZ
    samples = 0.01 * np.random.default_rng(3).normal(0, 1, frames)
    at = round(2.5 * RATE_HZ)
    samples[at : at + 960] += 0.9 * np.hanning(960)
    soundfile.write(tmp_path / "bump.wav", samples, RATE_HZ, subtype="DOUBLE")
    (tmp_path / "cut").mkdir()
    code, _, err = check(capsys, tmp_path / "bump.wav", *QUICK, "--cut", tmp_path / "cut")
    assert code == 0
    names = sorted(p.name for p in (tmp_path / "cut").iterdir())
    assert len(names) == 2
    assert all(name in err for name in names)
    taken, rate = soundfile.read(tmp_path / "cut" / names[0])
    made, _ = soundfile.read(tmp_path / "cut" / names[1])
    assert len(taken) == len(made) == rate
    start = float(names[0].split("-")[1].rstrip("s"))
    assert start == pytest.approx(2.5 + 480 / RATE_HZ - 0.25, abs=0.02)
    near = round(start * RATE_HZ) + np.arange(-48, 49)
    first = min(near, key=lambda n: abs(taken[:100] - samples[n : n + 100]).max())
    np.testing.assert_allclose(taken, samples[first : first + rate], atol=1e-7)
    main(["render", str(tmp_path / "bump.wav"), str(tmp_path / "all.wav"), *QUICK[:4]])
    whole, _ = soundfile.read(tmp_path / "all.wav")
    np.testing.assert_allclose(made, whole[first : first + rate], atol=1e-5)
    comment = soundfile.SoundFile(tmp_path / "cut" / names[1]).comment
    assert "full scale 4 V" in comment
    assert "U1" in comment
