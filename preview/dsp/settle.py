"""A circuit that has long had the first value of its signal: where logs of numbers begin."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.dsp.block import Volts
from preview.dsp.stage import StageProcessor
from preview.errors import CircuitError
from preview.network.stability import closed_loop_poles

__all__ = ["memory_s", "settle"]

LONGEST_S, TIMES = 60.0, 20.0
"""Longest time that is waited for [s], and how many of the circuit's longest time constants are."""


def memory_s(netlist: Netlist, times: float) -> float:
    """So many of the longest time constants of the circuit [s]; inf where they are not known."""
    try:
        slow = np.abs(closed_loop_poles(netlist).real)
    except CircuitError:
        return np.inf
    slow = slow[slow > 1e-3]
    return times / float(slow.min()) if slow.size else 0.0


def settle(stage: StageProcessor, first_v: NDArray[np.float64]) -> None:
    """Run a stage at rest until it has come to rest with the first value of each channel [V], shape (channels,)."""
    wait_s = min(memory_s(stage.netlist, TIMES), LONGEST_S)
    frames = stage.latency_frames + int(wait_s * stage.sample_rate_hz)
    volts: Volts = np.repeat(first_v[None], min(frames, 4096), axis=0)
    out = np.empty_like(volts)
    for start in range(0, frames, 4096):
        count = min(4096, frames - start)
        stage.process(volts[:count], out[:count])
    stage.clear_readings()
