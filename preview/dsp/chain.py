"""The stage in its place: bypass at the same delay, and change to another circuit without a gap."""

from __future__ import annotations

import numpy as np

from preview.circuit.fault import FaultReading
from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.dsp.stage import BLOCK_FRAMES, StageProcessor

__all__ = ["FADE_S", "SETTLE_S", "Chain"]

FADE_S = 0.02
"""Time of a crossfade [s]."""
SETTLE_S = 0.05
"""Time that a new circuit runs unheard before it is faded in [s]."""


class Chain:
    """One running stage with a bypass; a new stage is run beside the old one and faded in.

    Parameters
    ----------
    processor : StageProcessor
        The stage to start with.
    """

    def __init__(self, processor: StageProcessor) -> None:
        self._current = processor
        self._coming: StageProcessor | None = None
        self._waiting: StageProcessor | None = None
        rate = processor.sample_rate_hz
        self._fade_frames = max(1, round(FADE_S * rate))
        self._settle_frames = max(processor.latency_frames, round(SETTLE_S * rate))
        self._since = 0
        self._bypass = False
        self._dry_share = 0.0
        shape = (BLOCK_FRAMES, processor.channels)
        self._dry = np.zeros((processor.latency_frames + BLOCK_FRAMES, processor.channels))
        self._wet, self._other = np.zeros(shape), np.zeros(shape)
        self._count = np.arange(1.0, BLOCK_FRAMES + 1.0)[:, None]

    @property
    def processor(self) -> StageProcessor:
        """The newest stage handed over: the one that is, or will be, heard."""
        return self._waiting or self._coming or self._current

    @property
    def latency_frames(self) -> int:
        """Delay from input to output [frames]."""
        return self._current.latency_frames

    @property
    def swapping(self) -> bool:
        """Whether another stage is on its way in."""
        return self._coming is not None

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""
        return self.processor.gliding

    @property
    def fault(self) -> FaultReading | None:
        """Why the stage that is heard was stopped; None while all is well."""
        return self._current.fault

    @property
    def bypassed(self) -> bool:
        """Whether the input is heard, or about to be."""
        return self._bypass

    def set_bypass(self, on: bool) -> None:
        """Fade to the input (True) or to the stage (False)."""
        self._bypass = on

    def swap(self, processor: StageProcessor) -> None:
        """Run another stage beside the present one, then fade to it; real-time safe. The newest waits its turn."""
        if self._coming is None:
            self._coming, self._since = processor, 0
        else:
            self._waiting = processor

    def reset(self) -> None:
        """Back to rest; a stage on its way in takes over at once."""
        self._current = self.processor
        self._coming = self._waiting = None
        self._current.reset()
        self._dry[...] = 0.0
        self._dry_share = 1.0 if self._bypass else 0.0

    def readings(self) -> tuple[OpAmpReading, ...]:
        """What the op-amps of the stage now heard did."""
        return self._current.readings()

    def clear_readings(self) -> None:
        """Start the readings anew."""
        for stage in (self._current, self._coming, self._waiting):
            if stage is not None:
                stage.clear_readings()

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``, both (frames, channels)."""
        done = 0
        while done < volts_in.shape[0]:
            count = min(BLOCK_FRAMES, volts_in.shape[0] - done)
            self._block(volts_in[done : done + count], volts_out[done : done + count], count)
            done += count

    def _block(self, volts_in: Volts, volts_out: Volts, count: int) -> None:
        latency = self._current.latency_frames
        self._dry[latency : latency + count] = volts_in
        self._current.process(volts_in, volts_out)
        if self._coming is not None:
            other = self._other[:count]
            self._coming.process(volts_in, other)
            part = (self._since - self._settle_frames + self._count[:count]) / self._fade_frames
            self._since += count
            if part[-1] > 0.0:
                volts_out += _raised(part) * (other - volts_out)
            if part[-1] >= 1.0:
                volts_out[part[:, 0] >= 1.0] = other[part[:, 0] >= 1.0]
                self._coming.clear_readings()
                self._current, self._coming, self._waiting = self._coming, self._waiting, None
                self._since = 0
        target = 1.0 if self._bypass else 0.0
        if self._dry_share != target or target:
            move = self._count[:count] / self._fade_frames
            share = self._dry_share + move if target else self._dry_share - move
            np.clip(share, 0.0, 1.0, out=share)
            self._dry_share = float(share[-1, 0])
            if share[0, 0] == 1.0:
                volts_out[...] = self._dry[:count]
            else:
                volts_out += _raised(share) * (self._dry[:count] - volts_out)
        self._dry[:latency] = self._dry[count : latency + count]


def _raised(part: Volts) -> Volts:
    """Raised-cosine rise over 0..1."""
    return np.asarray(0.5 - 0.5 * np.cos(np.pi * np.clip(part, 0.0, 1.0)), dtype=np.float64)
