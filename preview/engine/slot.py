"""A candidate's stage in the rack, and how much of it is heard."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

from preview.circuit.fault import FaultReading
from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.engine.transport import Ramp

__all__ = ["Processor", "Slot"]


class Processor(Protocol):
    """A running stage, as ``preview.dsp.stage.StageProcessor`` is one."""

    fault: FaultReading | None
    """Why it was stopped, None while all is well."""

    @property
    def latency_frames(self) -> int:
        """Delay from input to output [frames]."""

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``."""

    def reset(self) -> None:
        """Back to rest."""

    def readings(self) -> Sequence[OpAmpReading]:
        """One reading an op-amp since they were cleared."""

    def clear_readings(self) -> None:
        """Start the readings anew."""


class Slot:
    """A stage and its share of what leaves and of what is heard.

    Parameters
    ----------
    processor : Processor
        The stage.
    fade_frames : int
        Length of a change of its share.
    weight : float
        Its share at the start; it runs if that is not 0.
    """

    def __init__(self, processor: Processor, fade_frames: int, weight: float = 0.0) -> None:
        self.processor = processor
        self.weight = Ramp(fade_frames, weight)
        self.heard_weight = Ramp(fade_frames, weight)
        self.running = weight != 0.0
        self.behind = 0  # frames of input that it has still to compute before the present
        self.unheard = not self.running  # whether its readings may hold what was not heard

    @property
    def heard(self) -> bool:
        """Whether it has, or is about to lose, a share."""
        return self.weight.moving or self.weight.target != 0.0

    @property
    def apart(self) -> bool:
        """Whether its share of what is heard is, or is to be, another than that of what leaves."""
        here, heard = self.weight, self.heard_weight
        return here.value != heard.value or here.target != heard.target

    def to(self, weight: float, heard_weight: float) -> None:
        """Move to other shares of what leaves and of what is heard."""
        self.weight.to(weight)
        self.heard_weight.to(heard_weight)
