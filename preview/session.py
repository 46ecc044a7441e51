"""A session: what is heard, through what, at which levels. Everything needed to repeat a render."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from enum import StrEnum
from pathlib import Path

from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD, LoadModel, SourceModel
from preview.circuit.netlist import Netlist, netlist
from preview.circuit.nodes import OUT
from preview.circuit.opamp import Limit
from preview.circuit.parts import Stage, Supply
from preview.values.levels import FullScale
from preview.values.noise import NoiseSetting
from preview.values.quality import Quality
from preview.values.stimulus import Stimulus

__all__ = ["AtEnd", "Session"]


class AtEnd(StrEnum):
    """What happens when the file, or the region, ends."""

    LOOP = "loop"
    """Start again without a gap."""
    STOP = "stop"
    """Fade out and wait at the start."""


@dataclass(frozen=True, slots=True)
class Session:
    """Everything needed to hear or repeat a render."""

    audio: Path | None
    """The recording; None for none yet, a test signal or live input."""
    stage: Stage
    """The stage with the part values and op-amp types as set."""
    supply: Supply
    """The rails in force."""
    full_scale: FullScale
    """The volts that a sample of 1.0 stands for."""
    source: SourceModel = IDEAL_SOURCE
    """What drives the stage, its cable included."""
    load: LoadModel = NO_LOAD
    """What follows the stage."""
    quality: Quality = Quality.STANDARD
    """Quality of computation."""
    at_end: AtEnd = AtEnd.LOOP
    """What happens at the end of the file or region."""
    output: str = OUT
    """The node that is listened to and loaded: ``out``, or another of the stage's outputs."""
    notes: tuple[str, ...] = field(default=())
    """How each option was understood, one line each, for the screen."""
    warnings: tuple[str, ...] = field(default=())
    """What of the options may not be as it was meant, one line each."""
    without: tuple[Limit, ...] = ()
    """Limits taken away from every op-amp, to hear what they do."""
    noise: NoiseSetting | None = None
    """Whether the noise of the parts is heard."""
    power_on: bool = False
    """Whether it begins by being switched on, and not at rest."""
    stimulus: Stimulus | None = None
    """The test signal in place of a recording."""
    live: bool = False
    """Whether the sound device's input is heard in place of a recording."""
    live_device: str | None = None
    """Input device by name; None for the default."""

    def netlist(self) -> Netlist:
        """The checked netlist; raises CircuitError."""
        return netlist(
            self.stage,
            supply=self.supply,
            source=self.source,
            load=self.load,
            output=self.output,
            without=self.without,
        )

    def with_stage(self, stage: Stage) -> Session:
        """The same session with another stage on its own rails; its output is kept where the stage has it."""
        output = self.output if self.output in stage.outputs else OUT
        return replace(self, stage=stage, supply=stage.supply, output=output)
