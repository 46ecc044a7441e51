"""Noise and power-on from the command line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import soundfile

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


@pytest.mark.parametrize(
    "option", [["--part-noise", "loud"], ["--part-noise", "200 dB"], ["--part-noise", "--noise-seed", "x"]]
)
def test_what_cannot_be_meant_is_refused(tmp_path: Path, option: list[str]) -> None:
    quiet = tmp_path / "quiet.wav"
    soundfile.write(quiet, np.zeros((100, 1)), RATE)
    assert main(["render", str(quiet), str(tmp_path / "out.wav"), *option]) == 2
