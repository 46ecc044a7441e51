"""A stage as a block: volts in, volts out, every op-amp with its rails inside the loop."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from preview.circuit.fault import FaultReading
from preview.circuit.netlist import Branch, Netlist, OpAmpSite, Track
from preview.circuit.opamp import IDEAL, OpAmpModel, OpAmpReading
from preview.circuit.parts import PartKind
from preview.compiled import in_cache
from preview.dsp import rate_kernels, visit_kernels
from preview.dsp.block import Volts
from preview.dsp.cores import Core, MacroCore, Matrices, core_for
from preview.dsp.oversample import LATENCY_FRAMES, design, factor_for
from preview.errors import PartValueError, UnknownNameError
from preview.network.stability import check_stable
from preview.values.noise import NoiseSetting
from preview.values.quality import Quality

__all__ = ["GLIDE_S", "Glide", "Snapshot", "StageProcessor", "load_kernels"]

Real = NDArray[np.float64]

GLIDE_S = 0.015
"""Time that a part takes from one value to the next [s]."""

POWER_ON_S = 0.05
"""Time that a supply takes to come up [s]."""

MOST_UNSOLVED = 0.25
"""Share of the steps of ``JUDGED_FRAMES`` or more that may be left without a solution before the circuit is stopped."""

BLOCK_FRAMES = 256
"""Most frames computed at a time, where no other number is asked for."""
JUDGED_FRAMES = 128
"""Fewest frames over which steps left without a solution are counted."""

Snapshot = tuple[NDArray[Any], ...]
"""The state of a stage at one moment."""


@dataclass(frozen=True, slots=True)
class Glide:
    """A prepared move of part values: matrices at way stations along it."""

    netlist: Netlist
    """The circuit at its end."""
    matrices: Matrices
    """Matrices at each way station."""
    steps_per_leg: int
    """Steps from one station to the next."""
    settled: Matrices | None = None
    """Matrices that hold afterwards, where they are not those of the last station."""


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
    noise : NoiseSetting, optional
        The noise of its parts is heard too.
    block_frames : int
        Most frames computed at a time: more are a little faster, and a fault is found that much later. The samples do
        not depend on it.

    Raises
    ------
    CircuitError
        The circuit cannot be run.
    """

    def __init__(
        self,
        netlist: Netlist,
        *,
        sample_rate_hz: float,
        channels: int,
        quality: Quality,
        noise: NoiseSetting | None = None,
        block_frames: int = BLOCK_FRAMES,
    ) -> None:
        self.quality = quality
        self.block_frames = block_frames
        self.fault: FaultReading | None = None
        self._frames = self._judged = 0
        self._unsolved = 0.0
        self.sample_rate_hz = float(sample_rate_hz)
        self.channels = channels
        self.filters = design(factor_for(quality, sample_rate_hz))
        self.step_s = 1.0 / (self.sample_rate_hz * self.filters.factor)
        self._netlist = netlist
        self._glide: Glide | None = None
        self._next: Glide | None = None
        self._at = 0
        check_stable(netlist)
        self._core = core_for(netlist, channels, self.step_s, noise=noise, factor=self.filters.factor)
        self._matrices = self._core.matrices(self._core.values_of(netlist)[None])
        f, c, b = self.filters, channels, block_frames
        steps = b * f.factor
        self._x = np.zeros((c, f.up_1.shape[1] - 1 + b))
        self._a = np.zeros((c, f.up_2.shape[1] - 1 + 2 * b))
        self._u = np.zeros((c, steps + 3))
        self._mean = np.zeros((c, steps))
        self._split = np.zeros((c, f.factor // 2, f.down_2.shape[1] - 1 + 2 * b))
        self._w = np.zeros((c, 2, f.down_1.shape[1] - 1 + b))
        self._room = np.zeros((2, 2 * b))
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
    def core(self) -> Core:
        """The circuit between the oversampling filters."""
        return self._core

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""
        return self._glide is not None

    @property
    def ready(self) -> bool:
        """Whether another glide may be handed over."""
        return self._next is None

    def reset(self) -> None:
        """Back to rest: the operating point without a signal, empty filters; a fault is forgotten."""
        self.fault = None
        self._frames = self._judged = 0
        for a in (self._x, self._a, self._u, self._split, self._w):
            a[...] = 0.0
        self._core.reset(self._matrices)
        self.clear_readings()

    def power_on(self, ramp_s: float = POWER_ON_S) -> None:
        """Begin as if switched on: nothing charged, the supply coming up in a straight line over ``ramp_s``.

        Allocates, so not for the audio thread. Ideal circuits without a supply of their own have nothing to come up.
        """
        self.reset()
        if not isinstance(self._core, MacroCore):
            return
        stations = 200
        steps_per_leg = max(1, round(ramp_s / self.step_s / stations))
        shares = np.linspace(1.0 / stations, 1.0, stations + 1)
        values = self._core.values_of(self._netlist)
        settled = self._core.matrices(values[None])
        coming = self._core.power_on(values, shares, steps_per_leg * stations)
        self._core.switch_off()
        self._begin(Glide(self._netlist, coming, steps_per_leg, settled))

    def snapshot(self) -> Snapshot:
        """Copies of everything that the next sample depends on, while no part glides."""
        return tuple(a.copy() for a in self._moving())

    def restore(self, taken: Snapshot) -> None:
        """Back to where a snapshot was taken."""
        for now, then in zip(self._moving(), taken, strict=True):
            now[...] = then

    def _moving(self) -> tuple[NDArray[Any], ...]:
        return (self._x, self._a, self._u, self._split, self._w, *self._core.moving())

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
            may_be_zero = any(name == c.designator for c in self._netlist.controls)
            if not (math.isfinite(value) and (value > 0.0 or (may_be_zero and value == 0.0))):
                raise PartValueError(f"{name} = {value}: a part value is a positive number")
        target = self._netlist.with_values(values)
        start = np.log(self._core.values_of(self._netlist))
        end = np.log(self._core.values_of(target))
        span = float(np.abs(end - start).max(initial=0.0))
        legs = int(np.clip(np.ceil(16 + 100 * span), 16, 400))
        steps = max(1, round(GLIDE_S / self.step_s / legs))
        along = 0.5 - 0.5 * np.cos(np.pi * np.arange(legs + 1) / legs)
        values_along = np.exp(start + along[:, None] * (end - start))
        for i, part in enumerate(along[1:-1], 1):  # a wiper moves evenly, not by ratio
            turned = {
                c.designator: c.setting + part * (values[c.designator] - c.setting)
                for c in self._netlist.controls
                if isinstance(c, Track) and c.designator in values
            }
            if turned:
                moved = self._core.values_of(self._netlist.with_values(turned))
                track = moved != self._core.values_of(self._netlist)
                values_along[i, track] = moved[track]
        values_along[-1] = self._core.values_of(target)
        return Glide(target, self._core.matrices(values_along), steps)

    def glide(self, plan: Glide) -> None:
        """Take up a prepared glide at the next frame; real-time safe. Call only while ``ready``."""
        self._netlist = plan.netlist
        if self._glide is None:
            self._begin(plan)
        else:
            self._next = plan

    def _begin(self, plan: Glide) -> None:
        self._glide = plan
        self._matrices = plan.matrices
        self._at = 0

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``, both (frames, channels)."""
        frames = volts_in.shape[0]
        f = self.filters
        if self.fault is not None:
            volts_out[...] = 0.0
            return
        done = 0
        while done < frames:
            count = min(self.block_frames, frames - done)
            steps = count * f.factor
            self.raise_rate(volts_in, done, count)
            leg = self._glide.steps_per_leg if self._glide is not None else 0
            self._core.run(self._matrices, self._u, self._mean, steps, self._at, leg)
            self.keep_rate(count)
            rate_kernels.down_block(
                self._mean, done, count, self._split, self._w, volts_out, f.down_1, f.down_2, self._room
            )
            if self._glide is not None:
                self._at += steps
                if self._at >= self._glide.steps_per_leg * (self._glide.matrices[0].shape[0] - 1):
                    self._arrive()
            done += count
            self._frames += count
            node = self._core.trouble()
            if node is not None:
                reason = "its voltage or current grows beyond belief"
                self.fault = FaultReading(node, self._frames / self.sample_rate_hz, reason)
                volts_out[done - count :] = 0.0
                return
            if self._frames < self._judged + JUDGED_FRAMES:  # however the signal is cut
                continue
            judged, self._judged = self._judged, self._frames
            unsolved = self._core.unsolved()
            if unsolved - self._unsolved > MOST_UNSOLVED * (self._frames - judged) * f.factor:
                reason = "its limits and diodes find no common solution"
                self.fault = FaultReading(self._core.first_name(), self._frames / self.sample_rate_hz, reason)
                volts_out[done - count :] = 0.0
                return
            self._unsolved = unsolved

    def raise_rate(self, volts_in: Volts, first: int, count: int) -> None:
        """Bring up to ``block_frames`` frames, from ``first`` on, to the rate of the steps."""
        f = self.filters
        rate_kernels.up_block(
            volts_in, first, count, self._x, self._a, self._u, f.up_1, f.up_2, self._room[0]
        )

    def keep_rate(self, count: int) -> None:
        """Done with the frames last brought to the rate of the steps."""
        rate_kernels.keep_last(self._u, count * self.filters.factor)

    def run_core(self, first: int, count: int) -> None:
        """Run the circuit over some of the frames last brought to the rate of the steps; no part may glide."""
        steps, at = count * self.filters.factor, first * self.filters.factor
        u = np.ascontiguousarray(self._u[:, at : at + steps + 3])
        self._core.run(self._matrices, u, self._mean, steps, 0, 0)

    def _arrive(self) -> None:
        """The glide has ended: stay at its last station, or go on to the next glide."""
        ended, self._glide = self._glide, None
        if self._next is not None:
            following, self._next = self._next, None
            self._begin(following)
        elif ended is not None and ended.settled is not None:
            self._matrices = ended.settled
        elif ended is not None:
            # one station: the last; views, no copies
            self._matrices = tuple(m[-1:] for m in ended.matrices)

    def clear_readings(self) -> None:
        """Start the readings of every op-amp anew."""
        self._core.clear()
        self._unsolved = 0.0

    def readings(self) -> tuple[OpAmpReading, ...]:
        """What each op-amp did since the readings were cleared, worst channel."""
        result = []
        statistics = self._core.statistics()
        for j, opamp in enumerate(self._netlist.opamps):
            s, model = statistics[:, j], opamp.model
            high, low = float(s[:, visit_kernels.HIGH].max()), float(s[:, visit_kernels.LOW].min())
            result.append(
                OpAmpReading(
                    designator=opamp.designator,
                    peak_v=max(abs(high), abs(low)),
                    high_v=high,
                    low_v=low,
                    headroom_db=0.0 if s[:, visit_kernels.CLIPPED].any() else self._core.headroom_db(j),
                    clip_events=int(s[:, visit_kernels.EVENTS].sum()),
                    clipped_s=float(s[:, visit_kernels.CLIPPED].sum()) * self.step_s,
                    slew_peak_v_per_s=float(s[:, visit_kernels.SLEW].max()) / self.step_s,
                    slew_limit_v_per_s=min(model.slew_up_v_per_s, model.slew_down_v_per_s),
                    current_peak_a=float(s[:, visit_kernels.CURRENT].max()),
                    current_limit_a=model.current_limit_a,
                    current_limited_s=float(s[:, visit_kernels.STARVED].sum()) * self.step_s,
                    input_range_events=int(s[:, visit_kernels.OUTSIDE_EVENTS].sum()),
                    input_range_s=float(s[:, visit_kernels.OUTSIDE].sum()) * self.step_s,
                    rest_v=self._core.rest_v(j),
                    unsolved_steps=math.ceil(s[:, visit_kernels.UNSOLVED].sum()),
                )
            )
        return tuple(result)


def load_kernels(*, compile_missing: bool = False) -> bool:
    """Load the kernels of both kinds of circuit, ideal and real op-amps, so that the first block need not.

    What was never compiled on this machine is left alone, unless ``compile_missing``. Returns whether the kernels of
    ideal op-amps, with which a desk begins, are loaded.
    """
    branches = (
        Branch("R1", PartKind.RESISTOR, "in", "s", 1e3),
        Branch("R2", PartKind.RESISTOR, "s", "out", 1e3),
    )
    kinds = {"run_steps": IDEAL, "run_macro": OpAmpModel("any", gain_bandwidth_hz=1e6)}
    there = {name: compile_missing or in_cache(name) for name in kinds}
    for name, model in kinds.items():
        if there[name]:
            site = OpAmpSite("U1", "gnd", "s", "out", model.type, 1.0, -1.0, model)
            circuit = Netlist("in", "out", branches, (site,))
            StageProcessor(circuit, sample_rate_hz=48_000.0, channels=1, quality=Quality.DRAFT)
    return there["run_steps"]
