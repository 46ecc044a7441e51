"""``preview render``: its files, its report, and every input it cannot use."""

from __future__ import annotations

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


@pytest.fixture
def tone(tmp_path: Path) -> Path:
    """A quarter of a second at 1 kHz, stereo, 0.5 and 0.25 of full scale, faded in and out."""
    path = tmp_path / "tone.wav"
    frames = RATE_HZ // 4
    sine = np.sin(2 * np.pi * 1000 * np.arange(frames) / RATE_HZ) * scipy.signal.windows.tukey(frames, 0.2)
    soundfile.write(path, np.stack([0.5 * sine, 0.25 * sine], axis=1), RATE_HZ, subtype="FLOAT")
    return path


def render(capsys, *words: object) -> tuple[int, str, str]:
    code = main(["render", *map(str, words)])
    out, err = capsys.readouterr()
    return code, out, err


def check_refusal(code: int, wanted: int, out: str, err: str, folder: Path, names: set[str]) -> None:
    """The contract of a refusal: its code, plain lines on stderr, nothing on stdout, no new file."""
    assert code == wanted, err
    assert out == ""
    told = [line for line in err.splitlines() if line.startswith("preview: ")]
    assert len(told) == 1, err
    assert "Traceback" not in err
    assert "inside the program" not in err
    assert all(ch.isprintable() or ch == "\n" for ch in err)
    assert {path.name for path in folder.iterdir()} == names


def test_json_has_every_key_of_the_contract(capsys, tone, tmp_path):
    code, out, err = render(
        capsys, tone, tmp_path / "out.wav", "--json", "--full-scale", "4 V", "--part", "R1=4k7"
    )
    assert code == 0
    assert "4.7 kΩ" in err
    report = json.loads(out)
    assert (report["preview"], report["format"], report["command"]) == ("0.1.0", 1, "render")
    assert report["sample_rate_hz"] == RATE_HZ
    assert report["frames"] == RATE_HZ // 4
    assert report["channels"] == 2
    assert report["full_scale_v"] == 4.0
    assert report["quality"] == "standard"
    assert report["realtime_ratio"] > 0
    assert 0 <= report["response_error_db"] < 0.01
    assert report["input"]["peak_v"] == pytest.approx(2.0)
    # 2 V at 1 kHz through -100k/4k7 (1 / sqrt(1 + (1000 / 1591.5)^2)) would be 36 V: it is at the 15 V rails
    assert report["output"]["peak_v"] > 15.0
    assert report["understood"]["parts"] == {"R1": 4700.0, "R2": 100000.0, "C1": 1e-9}
    (opamp,) = report["opamps"]
    assert opamp["name"] == "U1"
    assert opamp["peak_v"] == 15.0
    assert opamp["headroom_db"] == 0.0
    # twice a period and channel, 0.25 s of 1 kHz, less in the fades; the channel of 1 V asks for 18 V and clips too
    assert 800 < opamp["clip_events"] <= 1000
    assert 0 < opamp["clipped_s"] < 0.5
    assert opamp["slew_peak_v_per_s"] > 0
    assert opamp["slew_limit_v_per_s"] is None
    # all of it comes through R2 and C1 from R1: at least 15 V / 100k, at most 2 V / 4k7
    assert 15 / 100e3 <= opamp["current_peak_a"] <= 2 / 4700


def test_without_json_there_is_a_line_for_peaks_and_for_each_op_amp(capsys, tone, tmp_path):
    code, out, _ = render(capsys, tone, tmp_path / "out.wav", "--full-scale", "1 V")
    assert code == 0
    assert "in   peak 500 mV" in out
    # 0.5 V x 10 / sqrt(1 + (1000 / 1591.5)^2) = 4.234 V; 15 V is 10.99 dB above
    assert "out  peak 4.23 V" in out
    assert "headroom 11.0 dB" in out
    assert "x real time" in out


@pytest.mark.parametrize(("name", "told"), [("o.au", True), ("o.w64", True), ("o.wav", False)])
def test_a_file_that_cannot_carry_its_full_scale_says_so(capsys, tone, tmp_path, name, told):
    code, out, _ = render(capsys, tone, tmp_path / name, "--full-scale", "4 V")
    assert code == 0
    assert ('--full-scale "4 V"' in out) == told
    stated = soundfile.SoundFile(tmp_path / name).comment
    assert ("full scale 4 V" in stated) != told


def test_the_full_scale_survives_the_way_through_the_comment(capsys, tone, tmp_path):
    render(capsys, tone, tmp_path / "a.wav")  # +18 dBu: sqrt(0.6) V rms * 10 ** 0.9 * sqrt(2)
    code, out, _ = render(capsys, tmp_path / "a.wav", tmp_path / "b.wav", "--json")
    assert code == 0
    assert json.loads(out)["full_scale_v"] == pytest.approx(1.2**0.5 * 10**0.9, rel=5e-9)


def test_an_existing_output_is_replaced(capsys, tone, tmp_path):
    out = tmp_path / "out.wav"
    out.write_text("old")
    assert render(capsys, tone, out)[0] == 0
    assert soundfile.info(out).frames == RATE_HZ // 4


@pytest.mark.parametrize(
    ("name", "depth", "subtype"),
    [
        ("out.wav", None, "FLOAT"),
        ("out.wav", "16", "PCM_16"),
        ("out.flac", "24", "PCM_24"),
        ("out.aiff", "float", "FLOAT"),
    ],
)
def test_the_ending_and_the_depth_say_what_is_written(capsys, tone, tmp_path, name, depth, subtype):
    words = ["--depth", depth] if depth else []
    assert render(capsys, tone, tmp_path / name, *words)[0] == 0
    assert soundfile.info(tmp_path / name).subtype == subtype


def test_an_integer_file_never_clips_where_the_circuit_did_not(capsys, tone, tmp_path):
    # 1 V full scale, 4.23 V out: four times full scale, but under the rails
    code, out, _ = render(
        capsys, tone, tmp_path / "out.wav", "--depth", "24", "--json", "--full-scale", "1 V"
    )
    report = json.loads(out)
    assert code == 0
    assert report["output"]["over_count"] == 0
    assert report["output"]["full_scale_v"] == 15.0
    peak = np.abs(soundfile.read(tmp_path / "out.wav")[0]).max() * 15.0
    assert peak == pytest.approx(report["output"]["peak_v"], abs=15 * 2**-23)


def test_stdin_to_stdout_is_the_same_as_file_to_file(tone, tmp_path):
    assert main(["render", str(tone), str(tmp_path / "out.wav"), "--quality", "draft"]) == 0
    piped = subprocess.run(
        [sys.executable, "-m", "preview", "render", "-", "-", "--quality", "draft"],
        input=tone.read_bytes(),
        capture_output=True,
        check=True,
    )
    assert b"x real time" in piped.stderr
    (tmp_path / "piped.wav").write_bytes(piped.stdout)
    one = soundfile.read(tmp_path / "out.wav", dtype="float32")[0]
    # the header of a stream does not know its length; the samples follow it
    tail = np.frombuffer(piped.stdout[-one.nbytes :], np.float32).reshape(-1, 2)
    assert np.array_equal(one, tail)


def silent_file(path: Path, frames: int = 100) -> None:
    soundfile.write(path, np.zeros(frames), RATE_HZ)


def bad_missing(folder: Path) -> Path:
    return folder / "nowhere.wav"


def bad_empty(folder: Path) -> Path:
    (folder / "bad.wav").write_bytes(b"")
    return folder / "bad.wav"


def bad_zero_frames(folder: Path) -> Path:
    silent_file(folder / "bad.wav", 0)
    return folder / "bad.wav"


def bad_random(folder: Path) -> Path:
    (folder / "bad.wav").write_bytes(np.random.default_rng(1).bytes(5000))
    return folder / "bad.wav"


def bad_text(folder: Path) -> Path:
    (folder / "bad.wav").write_text("dear diary\n" * 100)
    return folder / "bad.wav"


def bad_folder(folder: Path) -> Path:
    (folder / "bad.wav").mkdir()
    return folder / "bad.wav"


def bad_damaged_flac(folder: Path) -> Path:
    path = folder / "bad.flac"
    noise = np.random.default_rng(2).uniform(-0.5, 0.5, 50000)
    soundfile.write(path, noise, RATE_HZ)
    data = bytearray(path.read_bytes())
    data[60000:60400] = bytes(400)
    path.write_bytes(data)
    return path


def bad_name(folder: Path) -> Path:
    return folder / "bell\x07\x1b[31m.wav"


@pytest.mark.parametrize(
    "make",
    [
        bad_missing,
        bad_empty,
        bad_zero_frames,
        bad_random,
        bad_text,
        bad_folder,
        bad_damaged_flac,
        bad_name,
    ],
)
def test_a_recording_that_cannot_be_used_is_exit_3(capsys, tmp_path, make):
    bad = make(tmp_path)
    before = {path.name for path in tmp_path.iterdir()}
    code, out, err = render(capsys, bad, tmp_path / "out.wav")
    check_refusal(code, 3, out, err, tmp_path, before)


def test_a_truncated_recording_is_rendered_as_far_as_it_goes_with_a_warning(capsys, tone, tmp_path):
    short = tmp_path / "short.wav"
    short.write_bytes(tone.read_bytes()[: -8 * 1000])
    code, _, err = render(capsys, short, tmp_path / "out.wav")
    assert code == 0
    assert "warning" in err
    assert soundfile.info(tmp_path / "out.wav").frames == RATE_HZ // 4 - 1000


def test_samples_that_are_no_numbers_are_taken_as_0_counted_and_told(capsys, tmp_path):
    samples = np.full(1000, 0.1)
    samples[[10, 20, 30]] = [np.nan, np.inf, -np.inf]
    soundfile.write(tmp_path / "odd.wav", samples, RATE_HZ, subtype="FLOAT")
    code, out, err = render(capsys, tmp_path / "odd.wav", tmp_path / "out.wav", "--json")
    assert code == 0
    assert json.loads(out)["input"]["non_finite_count"] == 3
    assert "warning: 3 samples" in err
    assert np.isfinite(soundfile.read(tmp_path / "out.wav")[0]).all()


@pytest.mark.parametrize(
    ("words", "wanted"),
    [
        (["{out}", "--depth", "12"], 2),
        (["{folder}/out.xyz"], 2),
        (["{folder}/out"], 2),
        (["{folder}/out.flac", "--depth", "float"], 2),
        (["{tone}"], 3),
        (["{folder}/../{name}/tone.wav"], 3),
        (["{folder}"], 2),
        (["{folder}/no/such/out.wav"], 3),
        (["{out}", "--part", "R1=4k7", "--part", "R1=10k"], 2),
        (["{out}", "--part", "R1=1e99"], 5),
        (["{out}", "--part", "R1=-5"], 5),
        (["{out}", "--part", "R9=1k"], 5),
        (["{out}", "--opamp", "warp"], 5),
        (["{out}", "--stage", "nowhere"], 5),
        (["{out}", "--stage", "{folder}/nowhere.toml"], 5),
        (["{out}", "--supply", "-15"], 2),
        (["{out}", "--quality", "best"], 2),
        (["{out}", "--bogus"], 2),
        ([], 2),
    ],
)
def test_what_cannot_be_done_is_refused_with_its_code(capsys, tone, tmp_path, words, wanted):
    names = {"folder": tmp_path, "name": tmp_path.name, "tone": tone, "out": tmp_path / "out.wav"}
    code, out, err = render(capsys, tone, *(word.format(**names) for word in words))
    check_refusal(code, wanted, out, err, tmp_path, {"tone.wav"})


HEAD = 'title = "x"\nabout = "x"\nsupply = { positive = "15 V", negative = "-15 V" }\n[parts]\n'
R = 'R1 = { kind = "resistor", nodes = ["in", "sum"], value = "10k" }\n'
F = 'R2 = { kind = "resistor", nodes = ["sum", "out"], value = "10k" }\n'
U = 'U1 = { kind = "opamp", plus = "gnd", minus = "sum", out = "out", type = "ideal" }\n'


@pytest.mark.parametrize(
    "text",
    [
        HEAD + R + F + U + 'C9 = { kind = "capacitor", nodes = ["a", "b"], value = "1n" }\n',  # floats
        HEAD + R.replace('"in"', '"gnd"') + F + U,  # no in
        HEAD + R + F.replace('"out"', '"gnd"') + U.replace('"out"', '"x"'),  # no out
        HEAD + R + F + U.replace('plus = "gnd", minus = "sum"', 'plus = "sum", minus = "gnd"'),  # positive
        HEAD + R + F + U + U,  # two parts of one name
        HEAD + R + F + U + U.replace("U1", "U2"),  # two outputs on one node
        HEAD + R.replace('"10k"', '"-1"') + F + U,
        HEAD + R.replace("resistor", "flux") + F + U,
        "not toml at all [",
        "",
    ],
)
def test_a_circuit_that_cannot_be_computed_is_exit_5(capsys, tone, tmp_path, text):
    (tmp_path / "bad.toml").write_text(text)
    code, out, err = render(capsys, tone, tmp_path / "out.wav", "--stage", tmp_path / "bad.toml")
    check_refusal(code, 5, out, err, tmp_path, {"tone.wav", "bad.toml"})


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs a device that is always full")
def test_a_full_disk_is_exit_3_and_leaves_nothing(capsys, tone, tmp_path, monkeypatch):
    from preview.audio import writers

    def full(*_: object) -> None:
        with open("/dev/full", "wb", buffering=0) as device:
            device.write(b"x")

    monkeypatch.setattr(writers, "write_all", full)
    code, out, err = render(capsys, tone, tmp_path / "out.wav")
    check_refusal(code, 3, out, err, tmp_path, {"tone.wav"})
    assert "disk full" in err


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_an_interrupt_is_exit_130_and_leaves_nothing(tmp_path, number):
    # ten minutes at fine quality take far longer than this test
    path = tmp_path / "long.wav"
    soundfile.write(path, np.zeros((RATE_HZ * 600, 1), np.float32), RATE_HZ, subtype="PCM_16")
    process = subprocess.Popen(
        [sys.executable, "-m", "preview", "render", path, tmp_path / "out.wav", "--quality", "fine"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    deadline = time.monotonic() + 60
    while not any(p.name.endswith(".part") and p.stat().st_size > 100_000 for p in tmp_path.iterdir()):
        assert process.poll() is None, process.communicate()[1]
        assert time.monotonic() < deadline
        time.sleep(0.01)  # polling a process, with a deadline
    process.send_signal(number)
    out, err = process.communicate(timeout=30)
    assert process.returncode == 130
    assert out == ""
    assert "interrupted" in err
    assert "Traceback" not in err
    assert [p.name for p in tmp_path.iterdir()] == ["long.wav"]


def test_a_reader_that_goes_away_is_quiet(tone):
    process = subprocess.Popen(
        [sys.executable, "-m", "preview", "response", "--csv"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    assert process.stdout is not None
    assert process.stderr is not None
    process.stdout.close()
    err = process.stderr.read()
    assert process.wait(30) == 0
    assert all(line.startswith("  ") for line in err.splitlines()), err  # what was understood, no complaint


def test_a_cascade_is_rendered_as_one_circuit(tmp_path, capsys):
    source = tmp_path / "tone.wav"
    soundfile.write(
        source, 0.01 * np.sin(2 * np.pi * 159.155 * np.arange(48_000) / 48_000), 48_000, subtype="FLOAT"
    )
    words = [
        "--stage",
        "inverting-high-pass",
        "--stage",
        "inverting-low-pass",
        "--quality",
        "draft",
        "--json",
    ]
    assert main(["render", str(source), str(tmp_path / "out.wav"), *words]) == 0
    report = json.loads(capsys.readouterr().out)
    assert [row["name"] for row in report["opamps"]] == ["1.U1", "2.U1"]
    # the high-pass at its own corner, 20 - 3.01 dB, times the low-pass a decade below its corner, 20 - 0.043 dB
    samples, _ = soundfile.read(tmp_path / "out.wav")
    gain_db = 20 * np.log10(np.abs(samples[24_000:47_000]).max() / 0.01)
    assert gain_db == pytest.approx(40.0 - 3.0103 - 0.0432, abs=0.002)
