"""``preview render`` on logs of numbers: in, out, and both."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import scipy.signal
import soundfile

from preview.cli import main

GAIN = ("--stage", "non-inverting-gain", "--quality", "draft", "--opamp", "ideal")


def render(capsys, *words: object) -> tuple[int, str, str]:
    code = main(["render", *map(str, words)])
    out, err = capsys.readouterr()
    return code, out, err


@pytest.fixture
def log(tmp_path: Path) -> Path:
    """Ten seconds at 50 rows a second: a swell of 3 Hz about 0, in g, 2 g at its top."""
    path = tmp_path / "pump.csv"
    t = np.arange(500) / 50
    g = 2.0 * np.sin(2 * np.pi * 3 * t) * scipy.signal.windows.hann(500)
    path.write_text(
        "time [s],accel [g],temp\n" + "".join(f"{a:.2f},{b:.9f},21\n" for a, b in zip(t, g, strict=True))
    )
    return path


def numbers(path: Path, delimiter: str = ",") -> np.ndarray:
    return np.loadtxt(path, delimiter=delimiter, skiprows=2)


def test_a_log_is_rendered_to_a_log_in_volts(capsys, log, tmp_path):
    out = tmp_path / "out.csv"
    words = ("--column", "accel", "--per-unit", "100 mV", "--load", "10k")
    code, text, err = render(capsys, log, out, *GAIN, *words, "--json")
    assert code == 0, err
    report = json.loads(text)
    assert (report["sample_rate_hz"], report["frames"], report["full_scale_v"]) == (
        50.0,
        500,
        pytest.approx(0.1),
    )
    assert report["input"]["peak_v"] == pytest.approx(0.2, rel=5e-3)
    assert out.read_text().splitlines()[1] == "time [s],out [V]"
    rendered = numbers(out)
    np.testing.assert_allclose(rendered[:, 0], np.arange(500) / 50, atol=1e-12)
    # below its low corner: a gain of little more than one, as the exact circuit has it at 3 Hz
    from preview.circuit.library import find_stage
    from preview.circuit.netlist import netlist
    from preview.network.transfer import response

    gain = abs(response(netlist(find_stage("non-inverting-gain"), load_ohm=10e3), [3.0])[0])
    assert np.abs(rendered[:, 1]).max() == pytest.approx(report["input"]["peak_v"] * gain, rel=5e-3)


def test_a_log_begins_settled_at_its_first_value(capsys, tmp_path):
    (tmp_path / "level.csv").write_text(
        "time,v\n" + "".join(f"{i / 20},{1.0 if i < 30 else 0.5}\n" for i in range(60))
    )
    words = ("--stage", "inverting-low-pass", "--part", "C1=10u", "--quality", "draft")  # 1 s
    code, _, _ = render(capsys, tmp_path / "level.csv", tmp_path / "out.csv", *words)
    assert code == 0
    volts = numbers(tmp_path / "out.csv")[:, 1]
    np.testing.assert_allclose(volts[:20], -10.0, atol=0.02)  # no charging at the beginning
    # half a second after the step, whose middle lies between two rows: -5 - 5 exp(-t)
    assert volts[40] == pytest.approx(-5 - 5 * np.exp(-(40 - 29.5) / 20), abs=0.03)


def test_a_rendered_log_reads_back_in_the_same_volts(capsys, log, tmp_path):
    render(capsys, log, tmp_path / "a.tsv", "--column", "2", *GAIN)
    code, text, _ = render(capsys, tmp_path / "a.tsv", tmp_path / "b.wav", *GAIN, "--json")
    assert code == 0
    report = json.loads(text)
    assert report["full_scale_v"] == 1.0
    assert report["input"]["peak_v"] == pytest.approx(np.abs(numbers(tmp_path / "a.tsv", "\t")[:, 1]).max())
    assert soundfile.info(tmp_path / "b.wav").samplerate == 50
    code, text, _ = render(capsys, tmp_path / "b.wav", tmp_path / "c.csv", *GAIN, "--json")
    assert code == 0
    assert json.loads(text)["sample_rate_hz"] == 50


def test_a_recording_is_rendered_to_a_log(capsys, tmp_path):
    soundfile.write(tmp_path / "a.wav", np.full((100, 2), 0.25), 8000, subtype="FLOAT")
    code, _, _ = render(capsys, tmp_path / "a.wav", tmp_path / "out.csv", "--full-scale", "4 V", *GAIN)
    assert code == 0
    lines = (tmp_path / "out.csv").read_text().splitlines()
    assert lines[0].startswith("# full scale 1 V; preview")
    assert lines[1] == "time [s],out 1 [V],out 2 [V]"
    assert len(lines) == 102


@pytest.mark.parametrize(
    ("words", "wanted", "told"),
    [
        (["{log}", "{out}.csv"], 3, "choose the signal with --column"),
        (["{log}", "{out}.csv", "--column", "x"], 3, "no such column"),
        (["{log}", "{out}.csv", "--column", "2", "--rate", "0"], 2, "--rate"),
        (["{log}", "{out}.csv", "--column", "2", "--per-unit", "5"], 2, "--per-unit"),
        (["{log}", "{out}.csv", "--column", "2", "--per-unit", "5 V", "--full-scale", "5 V"], 2, "both say"),
        (["{log}", "{out}.csv", "--column", "2", "--depth", "16"], 2, "leave --depth out"),
        (["{log}", "{out}.wav", "--column", "2", "--rate", "12.5"], 2, "whole sample rates"),
        (["{wav}", "{out}.wav", "--rate", "100"], 2, "--rate is for logs"),
        (["{wav}", "{out}.wav", "--column", "1"], 2, "--column is for logs"),
    ],
)
def test_what_does_not_fit_is_refused_and_nothing_is_left(capsys, log, tmp_path, words, wanted, told):
    soundfile.write(tmp_path / "a.wav", np.zeros(100), 8000)
    before = {p.name for p in tmp_path.iterdir()}
    names = {"log": log, "wav": tmp_path / "a.wav", "out": tmp_path / "out"}
    code, out, err = render(capsys, *(w.format(**names) for w in words))
    assert (code, out) == (wanted, "")
    assert told in err
    assert {p.name for p in tmp_path.iterdir()} == before


def test_a_unit_of_voltage_in_a_columns_name_is_its_scale(capsys, tmp_path):
    path = tmp_path / "bridge.csv"
    path.write_text("time [ms],level (mV)\n" + "".join(f"{100 * i},{2000 + i % 2}\n" for i in range(50)))
    code, text, err = render(capsys, path, tmp_path / "out.csv", *GAIN, "--json")
    assert code == 0, err
    report = json.loads(text)
    assert report["full_scale_v"] == pytest.approx(1e-3)
    assert report["input"]["peak_v"] == pytest.approx(2.001)
    assert main(["check", str(path), *GAIN, "--json"]) == 0
    checked = json.loads(capsys.readouterr().out)
    assert checked["input"]["peak_v"] == pytest.approx(2.001)
    stated = render(capsys, path, tmp_path / "out.csv", *GAIN, "--per-unit", "1 V", "--json")
    assert json.loads(stated[1])["full_scale_v"] == 1.0


def test_a_steady_log_stays_steady_to_its_last_row(capsys, tmp_path):
    path, out = tmp_path / "dc.csv", tmp_path / "out.csv"
    path.write_text("time,level\n" + "".join(f"{i / 10:.1f},2.5\n" for i in range(300)))
    code, text, err = render(capsys, path, out, "--opamp", "ideal", "--part", "R2=20k", "--json")
    assert code == 0, err
    np.testing.assert_allclose(numbers(out)[:, 1], -5.0, atol=1e-9)  # R2/R1 = 2, inverted
    report = json.loads(text)
    assert report["output"]["peak_v"] == pytest.approx(5.0, abs=1e-9)
    assert report["response_error_db"] < 0.01  # of 10 rows a second, looked at below their edge
