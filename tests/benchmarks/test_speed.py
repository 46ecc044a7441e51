"""Speed and memory, measured in one run as ratios; run with ``pytest -m benchmark -s``.

Times are processor time of the calling thread where the claim is about one core.
"""

from __future__ import annotations

import os
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
from preview.circuit.netlist import Junction, Netlist, Port, netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.stage import StageProcessor
from preview.values.quality import Quality
from tests.nets import ALL, net, with_models

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


REAL = OpAmpModel(
    "test",
    gain_bandwidth_hz=3e6,
    open_loop_gain=2e5,
    slew_up_v_per_s=13e6,
    slew_down_v_per_s=13e6,
    output_resistance_ohm=125.0,
    current_source_a=30e-3,
    current_sink_a=30e-3,
    input_high_v=0.0,
    offset_v=1e-3,
)
FOUR = net(
    [
        ("R1", "in", "s1", 10e3),
        ("R2", "s1", "o1", 47e3),
        ("C1", "s1", "o1", 1e-9),
        ("R3", "o1", "s2", 10e3),
        ("R4", "s2", "o2", 10e3),
        ("C2", "s2", "o2", 220e-12),
        ("R5", "o2", "a", 10e3),
        ("R6", "a", "b", 10e3),
        ("C3", "a", "o3", 2e-9),
        ("C4", "b", "gnd", 1e-9),
        ("C5", "o3", "c", 100e-9),
        ("R7", "c", "s4", 10e3),
        ("R8", "s4", "out", 22e3),
        ("Rload", "out", "gnd", 2e3),
    ],
    [("gnd", "s1", "o1"), ("gnd", "s2", "o2"), ("b", "o3", "o3"), ("gnd", "s4", "out")],
)
"""Low-pass, inverter, Sallen-Key and high-pass in a row."""


@pytest.mark.parametrize(
    ("count", "circuit", "promised"),
    [(1, ALL["low-pass"], 25.0), (2, ALL["two-sections"], None), (4, FOUR, 10.0)],
)
def test_one_two_and_four_op_amps_as_they_are(count: int, circuit: Netlist, promised: float | None) -> None:
    assert len(circuit.opamps) == count
    found = {}
    for channels in (1, 2):
        for label, peak in (("clean", 0.3), ("20 dB over", 15.0)):
            stage = StageProcessor(
                with_models(circuit, REAL), sample_rate_hz=RATE, channels=channels, quality=Quality.STANDARD
            )
            found[label, channels] = speed(stage, programme(4.0, channels, peak))
            limited = any(r.clip_events for r in stage.readings())
            assert limited == (label != "clean")
    print(f"\n{count} op-amps: " + ", ".join(f"{v:.1f} x {k} {n} ch" for (k, n), v in found.items()))
    assert promised is None or found["clean", 2] >= promised


def test_speed_of_a_diode_clipper() -> None:
    law = Junction(saturation_a=2.5e-9, slope_v=0.0452, series_ohm=0.6)
    both = (Port("D1", "sum", "out", law), Port("D2", "out", "sum", law))
    circuit = replace(with_models(ALL["low-pass"], REAL), ports=both)
    for channels in (1, 2):
        for peak in (0.01, 0.6):
            stage = StageProcessor(circuit, sample_rate_hz=RATE, channels=channels, quality=Quality.STANDARD)
            print(
                f"\ndiode clipper, {peak} V peak, {channels} ch: {speed(stage, programme(2.0, channels, peak)):.1f} x"
            )


_LOAD = """
import resource, time
t = time.perf_counter()
from preview.dsp.stage import load_kernels
load_kernels(compile_missing=True)
print(time.perf_counter() - t, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


def test_time_and_memory_to_compile_and_to_load_every_kernel(tmp_path: Path) -> None:
    environment = os.environ | {"NUMBA_CACHE_DIR": str(tmp_path)}
    found = {}
    for label in ("compiled", "loaded"):
        done = subprocess.run(
            [sys.executable, "-c", _LOAD], capture_output=True, text=True, check=True, env=environment
        )
        seconds, mib = (float(x) for x in done.stdout.split())
        found[label] = seconds
        print(f"\nkernels {label} in {seconds:.1f} s, {mib:.0f} MiB at most")
    assert found["loaded"] < found["compiled"] / 2


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
