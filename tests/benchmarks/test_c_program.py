"""The kernel of op-amps as they are against a C program of the same clean steps; ``pytest -m benchmark -s``."""

from __future__ import annotations

import ctypes
import shutil
import subprocess
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpModel
from preview.dsp.cores import MacroCore
from tests.nets import LOW_PASS, TWO_SECTIONS, with_models

pytestmark = [
    pytest.mark.benchmark,
    pytest.mark.timeout(600),
    pytest.mark.skipif(shutil.which("gcc") is None, reason="needs gcc"),
]

Real = NDArray[np.float64]
STEPS = 16 * 48_000
MODEL = OpAmpModel(
    "test",
    gain_bandwidth_hz=3e6,
    open_loop_gain=2e5,
    slew_up_v_per_s=13e6,
    slew_down_v_per_s=13e6,
    output_resistance_ohm=125.0,
    current_source_a=30e-3,
    current_sink_a=30e-3,
)


def compiled_for(folder: Path, n: int, k: int, walls: int, *flags: str) -> Callable[..., int]:
    library = folder / f"clean_{n}_{k}{len(flags)}.so"
    source = Path(__file__).with_name("clean_steps.c")
    sizes = [f"-DN={n}", f"-DK={k}", f"-DG={walls}"]
    subprocess.run(
        ["gcc", "-O3", *flags, "-shared", "-fPIC", *sizes, "-o", str(library), str(source)], check=True
    )
    function = ctypes.CDLL(str(library)).clean_steps
    array = np.ctypeslib.ndpointer(np.float64, flags="C_CONTIGUOUS")
    function.restype = ctypes.c_long
    function.argtypes = [array, ctypes.c_int, array, ctypes.c_long, *[array] * 5]
    return function


def best_of(times: int, work: Callable[[], object]) -> float:
    """Shortest processor time [s]."""
    best = np.inf
    for _ in range(times):
        began = time.process_time()
        work()
        best = min(best, time.process_time() - began)
    return best


@pytest.mark.parametrize(("circuit", "states"), [(LOW_PASS, 2), (TWO_SECTIONS, 4)], ids=["N=2", "N=4"])
def test_kernel_takes_at_most_twice_the_time_of_c(circuit: Netlist, states: int, tmp_path: Path) -> None:
    step_s = 1.0 / STEPS
    core = MacroCore(with_models(circuit, MODEL), 1, step_s)
    matrices = core.matrices(core.values_of(circuit)[None])
    k = len(circuit.opamps)
    walls = matrices[10].shape[2]
    assert matrices[0].shape[1] == states + 4
    u = np.zeros((1, STEPS + 3))
    u[0] = 0.05 * np.sin(2 * np.pi * 997 * step_s * np.arange(-1, STEPS + 2))
    by_kernel, by_c = np.zeros((1, STEPS)), np.zeros(STEPS)

    def kernel() -> None:
        core.reset(matrices)
        core.run(matrices, u, by_kernel, STEPS, 0, 0)

    M = np.ascontiguousarray(matrices[0][0].T)[: states + k + walls + 1]
    up, down = core._fixed[:2]
    low = np.concatenate([matrices[9][0, 0], matrices[10][0, 0], -down])
    high = np.concatenate([matrices[9][0, 1], matrices[10][0, 1], up])
    extremes, v = np.zeros((2 * k + walls, 2)), np.zeros(states)

    def plain(function: Callable[..., int]) -> None:
        core.reset(matrices)
        v[:] = core._state[0]
        extremes[:, 0], extremes[:, 1] = -np.inf, np.inf
        assert function(M, M.shape[1], u[0], STEPS, v, low, high, extremes, by_c) == STEPS

    kernel()
    kernel_s = best_of(7, kernel)
    found = {}
    for name, flags in (("-O3", ()), ("-O3 -march=native", ("-march=native",))):
        function = compiled_for(tmp_path, states, k, walls, *flags)
        plain(function)
        np.testing.assert_allclose(by_kernel[0], by_c, rtol=0, atol=1e-12)
        np.testing.assert_allclose(core_extremes(core, kernel, k, walls), extremes[: k + walls], atol=1e-12)
        found[name] = kernel_s / best_of(7, lambda f=function: plain(f))  # type: ignore[misc] # a default holds it
    print(f"\nN = {states}: kernel {1e9 * kernel_s / STEPS:.1f} ns a step; times C: ", end="")
    print(", ".join(f"{ratio:.2f} ({name})" for name, ratio in found.items()))
    assert found["-O3"] <= 2.0


def core_extremes(core: MacroCore, kernel: Callable[[], None], k: int, walls: int) -> Real:
    """Highest and lowest of the inner voltages and walls over the run; the rest is not counted twice."""
    kernel()
    return np.asarray(core._extremes[0, : k + walls, :2])
