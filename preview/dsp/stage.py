"""A stage as a block: volts in, volts out, every op-amp with its rails inside the loop."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.circuit.opamp import OpAmpReading
from preview.dsp import kernels
from preview.dsp.bilinear import RunningStep, running_step
from preview.dsp.block import Volts
from preview.dsp.oversample import LATENCY_FRAMES, design, factor_for
from preview.errors import PartValueError, UnknownNameError
from preview.network.stability import check_stable
from preview.network.statespace import Topology
from preview.values.quality import Quality

__all__ = ["GLIDE_S", "Glide", "StageProcessor"]

Real = NDArray[np.float64]

GLIDE_S = 0.015
"""Time that a part takes from one value to the next [s]."""

BLOCK_FRAMES = 128
"""Frames computed at a time."""


@dataclass(frozen=True, slots=True)
class Glide:
    """A prepared move of part values: matrices at way stations along it."""

    netlist: Netlist
    """The circuit at its end."""
    step: RunningStep
    """Matrices at each way station."""
    steps_per_leg: int
    """Steps from one station to the next."""


class StageProcessor:
    """The running circuit.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels, each with its own copy of the circuit's state.
    quality : Quality
        Steps per frame.

    Raises
    ------
    CircuitError
        The circuit cannot be run.
    """

    def __init__(self, netlist: Netlist, *, sample_rate_hz: float, channels: int, quality: Quality) -> None:
        self.quality = quality
        self.sample_rate_hz = float(sample_rate_hz)
        self.channels = channels
        self.filters = design(factor_for(quality, sample_rate_hz))
        self.step_s = 1.0 / (self.sample_rate_hz * self.filters.factor)
        self._topology = Topology(netlist)
        self._netlist = netlist
        self._glide: Glide | None = None
        self._next: Glide | None = None
        space = self._topology.evaluate(self._topology.values_of(netlist)[None])
        check_stable(netlist, space)
        self._step = running_step(space, self.step_s)
        n, k = self._topology.states, len(netlist.opamps)
        self._low = np.array([o.low_v for o in netlist.opamps])
        self._high = np.array([o.high_v for o in netlist.opamps])
        f, c, b = self.filters, channels, BLOCK_FRAMES
        steps = b * f.factor
        self._x = np.zeros((c, f.up_1.shape[1] - 1 + b))
        self._a = np.zeros((c, f.up_2.shape[1] - 1 + 2 * b))
        self._u = np.zeros((c, steps + 3))
        self._mean = np.zeros((c, steps))
        self._split = np.zeros((c, f.factor // 2, f.down_2.shape[1] - 1 + 2 * b))
        self._w = np.zeros((c, 2, f.down_1.shape[1] - 1 + b))
        self._room = np.zeros((2, 2 * b))
        self._state = np.zeros((c, n + 3 * k + 3))
        self._asked, self._limited = np.zeros((c, k)), np.zeros((c, k), dtype=np.bool_)
        self._stats = np.zeros((c, k, kernels.STATS))
        self._at = 0
        self._free_now = np.zeros(self._step.free.shape[1:])
        self._bound_now = np.zeros(self._step.bound.shape[1:])
        self._work, self._matrix, self._direction = (
            np.zeros((5, 2 * k)),
            np.zeros((2 * k, 2 * k)),
            np.zeros(2 * k),
        )
        chunk = kernels.CHUNK
        self._row, self._drive = np.zeros(n + 3 * k + 1), np.zeros((n + 3 * k + 1, chunk))
        self._track = np.zeros((n + k, chunk + 1))
        self.clear_readings()
        quiet = np.zeros((2, channels))
        self.process(quiet, quiet.copy())
        self.reset()

    @property
    def latency_frames(self) -> int:
        """Delay from input to output [frames]."""
        return LATENCY_FRAMES

    @property
    def netlist(self) -> Netlist:
        """The circuit that holds when every accepted glide has ended."""
        return self._netlist

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""
        return self._glide is not None

    @property
    def ready(self) -> bool:
        """Whether another glide may be handed over."""
        return self._next is None

    def reset(self) -> None:
        """Back to rest: no charge, no current, empty filters."""
        for a in (self._x, self._a, self._u, self._split, self._w, self._state, self._asked):
            a[...] = 0.0
        self._limited[...] = False
        self.clear_readings()

    def plan(self, values: Mapping[str, float]) -> Glide:
        """Prepare a glide to other part values; allocates, so not for the audio thread.

        Parameters
        ----------
        values : mapping
            Ohm, farad or henry by designator.

        Raises
        ------
        UnknownNameError
            No such part.
        PartValueError
            A value that is not a positive number.
        """
        known = self._netlist.values
        for name, value in values.items():
            if name not in known:
                raise UnknownNameError(f"no part {name} in this circuit", f"it has {', '.join(known)}")
            if not (math.isfinite(value) and value > 0.0):
                raise PartValueError(f"{name} = {value}: a part value is a positive number")
        target = self._netlist.with_values(values)
        start = np.log(self._topology.values_of(self._netlist))
        end = np.log(self._topology.values_of(target))
        span = float(np.abs(end - start).max(initial=0.0))
        legs = int(np.clip(np.ceil(16 + 100 * span), 16, 400))
        steps = max(1, round(GLIDE_S / self.step_s / legs))
        along = 0.5 - 0.5 * np.cos(np.pi * np.arange(legs + 1) / legs)
        values_along = np.exp(start + along[:, None] * (end - start))
        values_along[-1] = self._topology.values_of(target)
        return Glide(target, self._matrices(values_along), steps)

    def _matrices(self, values: Real) -> RunningStep:
        """Kernel matrices for sets of values, shape (g, branches)."""
        return running_step(self._topology.evaluate(values), self.step_s)

    def glide(self, plan: Glide) -> None:
        """Take up a prepared glide at the next frame; real-time safe. Call only while ``ready``."""
        self._netlist = plan.netlist
        if self._glide is None:
            self._begin(plan)
        else:
            self._next = plan

    def _begin(self, plan: Glide) -> None:
        self._glide = plan
        self._step = plan.step
        self._at = 0

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``, both (frames, channels)."""
        frames = volts_in.shape[0]
        f = self.filters
        done = 0
        while done < frames:
            count = min(BLOCK_FRAMES, frames - done)
            steps = count * f.factor
            kernels.up_block(volts_in, done, count, self._x, self._a, self._u, f.up_1, f.up_2, self._room[0])
            kernels.run_steps(
                self._step.free,
                self._step.bound,
                self._u,
                self._mean,
                steps,
                self._state,
                self._asked,
                self._limited,
                self._low,
                self._high,
                self._stats,
                self._at,
                self._glide.steps_per_leg if self._glide is not None else 0,
                self._free_now,
                self._bound_now,
                self._work,
                self._matrix,
                self._direction,
                self._row,
                self._track,
                self._drive,
            )
            kernels.keep_last(self._u, steps)
            kernels.down_block(
                self._mean, done, count, self._split, self._w, volts_out, f.down_1, f.down_2, self._room
            )
            if self._glide is not None:
                self._at += steps
                if self._at >= self._glide.steps_per_leg * (self._glide.step.free.shape[0] - 1):
                    self._arrive()
            done += count

    def _arrive(self) -> None:
        """The glide has ended: stay at its last station, or go on to the next glide."""
        ended, self._glide = self._glide, None
        if self._next is not None:
            following, self._next = self._next, None
            self._begin(following)
        elif ended is not None:
            # one station: the last; views, no copies
            self._step = RunningStep(ended.step.free[-1:], ended.step.bound[-1:])

    def clear_readings(self) -> None:
        """Start the readings of every op-amp anew."""
        self._stats[...] = 0.0
        n, k = self._topology.states, self._asked.shape[1]
        self._stats[:, :, kernels.HIGH] = self._state[:, n : n + k]
        self._stats[:, :, kernels.LOW] = self._state[:, n : n + k]

    def readings(self) -> tuple[OpAmpReading, ...]:
        """What each op-amp did since the readings were cleared, worst channel."""
        result = []
        for j, opamp in enumerate(self._netlist.opamps):
            s = self._stats[:, j]
            high, low = float(s[:, kernels.HIGH].max()), float(s[:, kernels.LOW].min())
            result.append(
                OpAmpReading(
                    designator=opamp.designator,
                    peak_v=max(abs(high), abs(low)),
                    high_v=high,
                    low_v=low,
                    headroom_db=_headroom_db(high, low, opamp.high_v, opamp.low_v),
                    clip_events=int(s[:, kernels.EVENTS].sum()),
                    clipped_s=float(s[:, kernels.CLIPPED].sum()) * self.step_s,
                    slew_peak_v_per_s=float(s[:, kernels.SLEW].max()) / self.step_s,
                    current_peak_a=float(s[:, kernels.CURRENT].max()),
                    unsolved_steps=int(s[:, kernels.UNSOLVED].sum()),
                )
            )
        return tuple(result)


def _headroom_db(high_v: float, low_v: float, rail_high_v: float, rail_low_v: float) -> float:
    """Distance to the nearer rail [dB]; inf without rails or signal."""
    room = math.inf
    for peak, rail in ((high_v, rail_high_v), (-low_v, -rail_low_v)):
        if math.isfinite(rail) and peak > 0.0:
            room = min(room, 20.0 * math.log10(rail / peak) if rail > 0.0 else 0.0)
    return max(room, 0.0)
