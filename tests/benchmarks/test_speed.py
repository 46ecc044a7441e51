"""Speed and memory, measured in one run as ratios; run with ``pytest -m benchmark -s``.

Times are processor time of the calling thread where the claim is about one core.
"""

from __future__ import annotations

import re
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile

from preview.circuit.library import find_stage
from preview.circuit.netlist import netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.nets import ALL

pytestmark = [pytest.mark.benchmark, pytest.mark.timeout(900)]

RATE = 48_000


def programme(seconds: float, channels: int = 2, peak: float = 0.5) -> np.ndarray:
    """Speech-like noise: pink-ish, in bursts; a tenth of it is loud."""
    rng = np.random.default_rng(12)
    n = round(seconds * RATE)
    white = rng.normal(0, 1, (n, channels))
    spectrum = np.fft.rfft(white, axis=0)
    f = np.maximum(np.fft.rfftfreq(n, 1 / RATE), 20.0)
    pink = np.fft.irfft(spectrum / np.sqrt(f)[:, None], n, axis=0)
    envelope = np.abs(np.sin(2 * np.pi * 0.7 * np.arange(n) / RATE)) ** 3
    pink *= envelope[:, None]
    return np.asarray(peak * pink / np.abs(pink).max())


def speed(stage: StageProcessor, volts: np.ndarray) -> float:
    """Signal time over processor time, best of three."""
    out = np.empty_like(volts)
    best = np.inf
    for _ in range(3):
        began = time.process_time()
        for start in range(0, len(volts), 512):
            stage.process(volts[start : start + 512], out[start : start + 512])
        best = min(best, time.process_time() - began)
    return len(volts) / RATE / best


@pytest.mark.parametrize("name", ["inverting-low-pass", "inverting-high-pass", "inverting-band-pass"])
def test_standard_stereo_runs_at_15_times_real_time_on_one_core(name: str) -> None:
    circuit = netlist(find_stage(name))
    found = {}
    for label, peak in (("clean", 0.5), ("clipping", 15.0)):
        stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=2, quality=Quality.STANDARD)
        found[label] = speed(stage, programme(10.0, peak=peak))
    print(f"\n{name}: {found['clean']:.1f} x clean, {found['clipping']:.1f} x with peaks 20 dB over")
    assert found["clean"] >= 15.0
    assert found["clipping"] >= 15.0 / 2


@pytest.mark.parametrize("quality", list(Quality))
def test_speed_of_each_quality(quality: Quality) -> None:
    for name, circuit in ALL.items():
        stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=2, quality=quality)
        print(f"\n{quality}, {name}: {speed(stage, programme(4.0)):.1f} x real time")


@pytest.mark.parametrize("name", ["low-pass", "sallen-key", "two-sections"])
def test_speed_with_real_op_amps(name: str) -> None:
    model = OpAmpModel(
        "test",
        gain_bandwidth_hz=3e6,
        open_loop_gain=2e5,
        slew_up_v_per_s=13e6,
        slew_down_v_per_s=13e6,
        output_resistance_ohm=125.0,
    )
    slow = replace(model, slew_up_v_per_s=0.5e6, slew_down_v_per_s=0.5e6)
    found = {}
    for label, this, peak in (
        ("clean", model, 0.3),
        ("clipping", model, 15.0),
        ("slewing and clipping", slow, 15.0),
    ):
        circuit = replace(ALL[name], opamps=tuple(replace(o, model=this) for o in ALL[name].opamps))
        stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=2, quality=Quality.STANDARD)
        found[label] = speed(stage, programme(4.0, peak=peak))
    print(f"\n{name}: " + ", ".join(f"{v:.1f} x {k}" for k, v in found.items()))
    assert found["clean"] >= 10.0


_RENDER = """
import resource, sys
from preview.cli import main
code = main(["render", sys.argv[1], sys.argv[2], "--stage", "inverting-low-pass", "--json"])
print("peak_kib", resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
sys.exit(code)
"""


def test_a_long_file_takes_no_more_memory_than_a_short_one(tmp_path: Path) -> None:
    found = {}
    for seconds in (10, 600):
        source = tmp_path / f"{seconds}.wav"
        block = programme(10.0).astype(np.float32)
        with soundfile.SoundFile(source, "w", RATE, 2, "FLOAT") as file:
            for _ in range(seconds // 10):
                file.write(block)
        run = subprocess.run(
            [sys.executable, "-c", _RENDER, str(source), str(tmp_path / "out.wav")],
            capture_output=True,
            text=True,
            check=True,
        )
        kib = int(re.search(r"peak_kib (\d+)", run.stdout)[1])  # type: ignore[index] # printed by the child above
        ratio = float(re.search(r'"realtime_ratio": ([0-9.]+)', run.stdout)[1])  # type: ignore[index] # likewise
        found[seconds] = kib / 1024
        print(f"\n{seconds} s: {kib / 1024:.0f} MiB at most, whole render {ratio:.1f} x real time")
    assert abs(found[600] - found[10]) < 20.0


def test_time_to_load_the_kernels_warm() -> None:
    code = (
        "import time; t = time.perf_counter()\n"
        "from preview.dsp.stage import StageProcessor\n"
        "from preview.values.quality import Quality\n"
        "from tests.nets import LOW_PASS\n"
        "StageProcessor(LOW_PASS, sample_rate_hz=48000, channels=2, quality=Quality.STANDARD)\n"
        "print(time.perf_counter() - t)"
    )
    times = [
        float(subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout)
        for _ in range(3)
    ]
    print(f"\nimport, load and first block: {min(times):.2f} s")
    assert min(times) < 5.0
