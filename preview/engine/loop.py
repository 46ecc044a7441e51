"""The one way from samples to samples, live and off-line: samples, volts, circuit, volts, samples."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.engine.readings import FaultReading
from preview.meters.reading import LevelReading

__all__ = ["Circuit", "LiveCircuit", "Meter", "Samples", "SignalPath", "joined_readings", "peak"]

Samples = NDArray[np.float64]
"""Signal as a share of full scale, shape (frames, channels), float64."""


class Circuit(Protocol):
    """A running circuit."""

    @property
    def fault(self) -> FaultReading | None:
        """Why it has given up, None while all is well."""

    @property
    def latency_frames(self) -> int:
        """Delay from input to output [frames]."""

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``."""


class LiveCircuit(Circuit, Protocol):
    """A running circuit that can be changed while it is heard, as ``preview.engine.rack.Rack`` can."""

    letter: str
    """The candidate that is heard."""
    null: tuple[str, str] | None
    """The first minus the second is heard."""
    hurry: int
    """How many times faster than the signal a stage may be brought to the present."""

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""

    @property
    def swapping(self) -> bool:
        """Whether what is heard is on its way to something else."""

    @property
    def match_gain(self) -> float:
        """Gain at which it is heard."""

    @property
    def heard(self) -> Volts | None:
        """What is to be heard of the last block, where it is not what was processed."""

    def reset(self) -> None:
        """Back to the state before the first frame."""

    def set_bypass(self, on: bool) -> None:
        """Pass the input on, at the same delay."""

    def readings(self) -> Sequence[OpAmpReading]:
        """One reading an op-amp since they were cleared."""

    def clear_readings(self) -> None:
        """Start the readings anew."""


class Meter(Protocol):
    """A level meter."""

    def feed(self, volts: Volts) -> None:
        """Take the next frames into account."""

    def read(self) -> LevelReading:
        """The levels; the peak is the one since the last reading."""

    def clear_hold(self) -> None:
        """Forget the peak hold."""


class SignalPath:
    """Carries samples through the circuit; both the renderer and the player run this.

    Parameters
    ----------
    circuit : Circuit
        The running circuit.
    channels : int
        Channels of the recording.
    full_scale_v : float
        Peak volts of an input sample of 1.0.
    out_full_scale_v : float, optional
        Peak volts of an output sample of 1.0; that of the input where not given.
    max_frames : int
        Longest block that ``run`` is given.
    """

    def __init__(
        self,
        circuit: Circuit,
        *,
        channels: int,
        full_scale_v: float,
        out_full_scale_v: float | None = None,
        max_frames: int,
    ) -> None:
        self.circuit = circuit
        self.full_scale_v = full_scale_v
        self.out_full_scale_v = out_full_scale_v
        self.max_frames = max_frames
        self._volts_in = np.zeros((max_frames, channels))
        self._volts_out = np.zeros((max_frames, channels))

    def run(self, samples_in: Samples, samples_out: Samples) -> tuple[Volts, Volts]:
        """Fill ``samples_out`` from the next ``samples_in``; the volts at both ends, valid until the next."""
        frames = len(samples_in)
        volts_in = self._volts_in[:frames]
        volts_out = self._volts_out[:frames]
        np.multiply(samples_in, self.full_scale_v, out=volts_in)
        self.circuit.process(volts_in, volts_out)
        np.divide(volts_out, self.out_full_scale_v or self.full_scale_v, out=samples_out)
        return volts_in, volts_out


def peak(volts: Volts) -> float:
    """Largest magnitude [in the unit given]; nan if any value is not a number, 0 for none."""
    if volts.size == 0:
        return 0.0
    high, low = float(volts.max()), float(volts.min())
    return math.nan if math.isnan(high) else max(high, -low)


def joined_readings(
    earlier: Sequence[OpAmpReading], later: Sequence[OpAmpReading]
) -> tuple[OpAmpReading, ...]:
    """Readings of the same op-amps over two spans as one; other op-amps than before count from new."""
    if [one.designator for one in earlier] != [one.designator for one in later]:
        return tuple(later)
    return tuple(
        replace(
            new,
            peak_v=max(old.peak_v, new.peak_v),
            high_v=max(old.high_v, new.high_v),
            low_v=min(old.low_v, new.low_v),
            headroom_db=min(old.headroom_db, new.headroom_db),
            clip_events=old.clip_events + new.clip_events,
            clipped_s=old.clipped_s + new.clipped_s,
            slew_peak_v_per_s=max(old.slew_peak_v_per_s, new.slew_peak_v_per_s),
            current_peak_a=max(old.current_peak_a, new.current_peak_a),
            current_limited_s=old.current_limited_s + new.current_limited_s,
            input_range_events=old.input_range_events + new.input_range_events,
            input_range_s=old.input_range_s + new.input_range_s,
            unsolved_steps=old.unsolved_steps + new.unsolved_steps,
        )
        for old, new in zip(earlier, later, strict=True)
    )
