"""Noise and power-on from the command line."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.circuit.opamp import LIMITS
from preview.cli import main

RATE = 48_000


def rendered(tmp_path: Path, *more: str) -> np.ndarray:
    quiet, out = tmp_path / "quiet.wav", tmp_path / "out.wav"
    soundfile.write(quiet, np.zeros((RATE // 4, 2)), RATE, subtype="FLOAT")
    stage = [] if "--stage" in more else ["--stage", "inverting-low-pass", "--opamp", "TL072"]
    assert (
        main(["render", str(quiet), str(out), *stage, "--full-scale", "1 V", "--quality", "draft", *more])
        == 0
    )
    return np.asarray(soundfile.read(out)[0])


def test_part_noise_is_heard_and_brought_up(tmp_path: Path) -> None:
    silent, plain = rendered(tmp_path), rendered(tmp_path, "--part-noise")
    loud = rendered(tmp_path, "--part-noise", "40 dB")
    assert np.ptp(silent[:, 0]) < 1e-9
    np.testing.assert_allclose(loud - silent, 100 * (plain - silent), rtol=1e-3, atol=2e-7)
    # 12.1 uV rms between 20 Hz and 20 kHz by `response --noise`; 0.25 s of it scatters by a few per cent
    assert (plain - silent).std() == pytest.approx(12.1e-6, rel=0.15)
    assert not np.array_equal(plain, rendered(tmp_path, "--part-noise", "--noise-seed", "2"))


def test_a_single_supply_stage_thumps_when_it_is_switched_on(tmp_path: Path) -> None:
    settled = rendered(tmp_path, "--stage", "single-supply-gain")[:, 0]
    switched = rendered(tmp_path, "--stage", "single-supply-gain", "--power-on")[:, 0]
    assert np.abs(settled).max() < 0.01  # its output is behind a capacitor
    assert switched[0] == pytest.approx(0.0, abs=0.1)
    assert switched.max() > 1.0  # which takes the bias of half the supply along


def test_a_limit_that_is_taken_away_does_not_limit_and_is_said(tmp_path: Path, capsys) -> None:
    """10 kHz through a gain of 10 with a slow type, the same without its limits, and an ideal op-amp."""
    tone, out = tmp_path / "tone.wav", tmp_path / "out.wav"
    time_s = np.arange(RATE // 10) / RATE
    soundfile.write(tone, np.sin(2 * np.pi * 10e3 * time_s), RATE, subtype="FLOAT")
    common = ["render", str(tone), str(out), "--stage", "inverting-low-pass", "--part", "C1=10p"]
    common += ["--full-scale", "1 V", "--quality", "draft", "--json", "--opamp"]

    def heard(*more: str) -> tuple[np.ndarray, dict]:
        assert main([*common, *more]) == 0
        return np.asarray(soundfile.read(out)[0]), json.loads(capsys.readouterr().out)

    (slow, as_it_is), (ideal, _) = heard("LM358"), heard("ideal")
    assert as_it_is["understood"]["without"] == []
    assert as_it_is["opamps"][0]["slew_peak_v_per_s"] == pytest.approx(0.3e6, rel=0.01), "of the type"
    assert np.ptp(slow) < 0.8 * np.ptp(ideal)
    free, without = heard("LM358", *(word for limit in LIMITS for word in ("--without", limit)))
    assert without["understood"]["without"] == list(LIMITS)
    np.testing.assert_allclose(free, ideal, atol=1e-3 * np.abs(ideal).max())


def test_a_check_and_a_response_go_without_a_limit_too(tmp_path: Path, capsys) -> None:
    """10 kHz that a slow type cannot follow, and the gain at 1 MHz that an op-amp of 1 MHz has none left for."""
    tone = tmp_path / "tone.wav"
    time_s = np.arange(RATE // 10) / RATE
    soundfile.write(tone, np.sin(2 * np.pi * 10e3 * time_s), RATE, subtype="FLOAT")
    stage = ["--stage", "inverting-gain", "--json"]

    def said(*words: str, opamp: str = "LM358") -> dict:
        assert main([*words, *stage, "--opamp", opamp]) == 0
        return json.loads(capsys.readouterr().out)

    check = ["check", str(tone), "--full-scale", "1 V", "--workers", "1"]
    assert said(*check)["opamps"][0]["slew_events"] > 0
    free = said(*check, "--without", "slew")["opamps"][0]
    assert (free["slew_events"], free["slew_limit_v_per_s"]) == (0, None)
    slow, fast, ideal = (
        said("response", "--at", "1M", *more, opamp=opamp)["gain_db"][0]
        for opamp, more in (("LM358", []), ("LM358", ["--without", "speed"]), ("ideal", []))
    )
    assert fast == pytest.approx(ideal, abs=0.1)
    assert slow < fast - 10.0


def test_limits_are_named_as_on_the_desk(tmp_path: Path, capsys) -> None:
    rendered(tmp_path, "--without", "Input  Range", "--without", "noise")
    assert "without input range, noise: taken away from every op-amp" in capsys.readouterr().err


@pytest.mark.parametrize(
    "option",
    [
        ["--part-noise", "loud"],
        ["--part-noise", "200 dB"],
        ["--part-noise", "--noise-seed", "x"],
        ["--without", "rails"],
    ],
)
def test_what_cannot_be_meant_is_refused(tmp_path: Path, option: list[str]) -> None:
    quiet = tmp_path / "quiet.wav"
    soundfile.write(quiet, np.zeros((100, 1)), RATE)
    assert main(["render", str(quiet), str(tmp_path / "out.wav"), *option]) == 2
