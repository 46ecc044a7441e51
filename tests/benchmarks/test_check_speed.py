"""How fast recordings are checked, and in how much memory; run with ``pytest -m benchmark -s``.

``PREVIEW_BENCHMARK_S`` sets the length of the recording, an hour where it is not given.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import soundfile

from tests.benchmarks.test_speed import RATE, programme

pytestmark = [pytest.mark.benchmark, pytest.mark.timeout(3600)]

LENGTH_S = int(os.environ.get("PREVIEW_BENCHMARK_S", "3600"))

_CHECK = """
import json, resource, sys, time
from preview.cli import main
began = time.process_time()
code = main(["check", *sys.argv[1:]])
used = resource.getrusage(resource.RUSAGE_SELF)
print(json.dumps({"cpu_s": time.process_time() - began, "kib": used.ru_maxrss}), file=sys.stderr)
sys.exit(code)
"""


def recording(path: Path, seconds: float, peak: float = 0.5) -> Path:
    block = (programme(10.0, peak=peak) * 32767).astype(np.int16)
    with soundfile.SoundFile(path, "w", RATE, 2, "PCM_16") as file:
        for _ in range(round(seconds / 10)):
            file.write(block)
    return path


def checked(*words: object) -> tuple[dict, dict, float]:
    """The report, what it took, and the time on the clock [s]."""
    began_s = time.perf_counter()
    done = subprocess.run(
        [sys.executable, "-c", _CHECK, *map(str, words), "--json"], capture_output=True, text=True, check=True
    )
    return json.loads(done.stdout), json.loads(done.stderr.splitlines()[-1]), time.perf_counter() - began_s


@pytest.mark.parametrize("opamp", ["ideal", "TL072"])
@pytest.mark.parametrize("full_scale", ["1 V", "3 V"])
def test_an_hour_of_stereo_is_checked_at_20_times_real_time_in_300_mb(
    tmp_path: Path, opamp: str, full_scale: str
) -> None:
    words = ("--opamp", opamp, "--full-scale", full_scale, "--workers", "1")
    checked(recording(tmp_path / "warm.wav", 10), *words)
    report, took, clock_s = checked(recording(tmp_path / "long.wav", LENGTH_S), *words)
    clips = sum(o["clip_events"] for o in report["opamps"])
    ratio, mb = LENGTH_S / took["cpu_s"], took["kib"] * 1024 / 1e6
    print(
        f"\n{opamp}, {full_scale}, {LENGTH_S} s of stereo, {clips} clip events, {report['proof']}: "
        f"{ratio:.1f} x real time per core, {mb:.0f} MB at most, {clock_s:.0f} s on the clock"
    )
    assert mb < 300.0
    if clips == 0:  # what clips is run a second time, at the level found
        assert ratio >= 20.0


@pytest.mark.parametrize("opamp", ["ideal", "TL072"])
@pytest.mark.parametrize(("full_scale", "most"), [("1 V", 1.5), ("+18 dBu", 3.0)])
def test_a_check_takes_little_more_than_a_render(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], opamp: str, full_scale: str, most: float
) -> None:
    from preview.cli import main

    audio, options = recording(tmp_path / "a.wav", 60), ("--opamp", opamp, "--full-scale", full_scale)

    def cpu_s(*words: object) -> float:
        began_s = time.process_time()
        assert main([*map(str, words), *options]) == 0
        return time.process_time() - began_s

    check = ("check", audio, "--workers", "1")
    cpu_s(*check)
    ratio = min(cpu_s(*check) / cpu_s("render", audio, tmp_path / "out.wav") for _ in range(2))
    capsys.readouterr()
    print(f"\n{opamp}, {full_scale}: a check takes {ratio:.2f} times as long as a render")
    assert ratio <= most


def test_two_workers_are_1_8_times_as_fast_as_one(tmp_path: Path) -> None:
    if len(os.sched_getaffinity(0)) < 2:
        pytest.skip("one core")
    for i in range(8):
        recording(tmp_path / f"{i}.wav", LENGTH_S / 8)
    words = ("--full-scale", "1 V", "--workers")
    checked(recording(tmp_path.parent / "warm.wav", 10), *words, "1")
    times = [checked(tmp_path, *words, n)[2] for n in ("1", "2")]
    print(
        f"\n{LENGTH_S} s in 8 files: one worker {times[0]:.1f} s, two {times[1]:.1f} s: {times[0] / times[1]:.2f} x"
    )
    assert times[0] / times[1] >= 1.8
