"""Candidates side by side: one is heard, or one minus another, and which one changes without a gap.

Every candidate is a stage with a weight in the sum that leaves. A change moves the weights along raised cosines, so
what is heard is always a crossfade of running stages. A stage that has not been running is first brought to the
present: it computes the last moments of the input anew, faster than they came, unheard.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Protocol

import numpy as np

from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.engine.readings import FaultReading
from preview.engine.transport import Ramp

__all__ = ["FADE_S", "HISTORY_S", "Processor", "Rack"]

FADE_S = 0.02
"""Time of a crossfade [s]."""
HISTORY_S = 0.05
"""Input that a stage computes unheard before it is faded in [s]."""
BLOCK_FRAMES = 256
"""Frames computed at a time."""
_HURRY = 4


class Processor(Protocol):
    """A running stage, as ``preview.dsp.stage.StageProcessor`` is one."""

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


class _Slot:
    """A stage and its share of what is heard."""

    def __init__(self, processor: Processor, fade_frames: int, weight: float = 0.0) -> None:
        self.processor = processor
        self.weight = Ramp(fade_frames, weight)
        self.running = weight != 0.0
        self.behind = 0  # frames of input that it has still to compute before the present
        self.unheard = not self.running  # whether its readings may hold what was not heard

    @property
    def heard(self) -> bool:
        return self.weight.moving or self.weight.target != 0.0


class Rack:
    """The candidates of one recording; a ``Circuit`` for the player.

    Everything but the constructor is for the audio thread.

    Parameters
    ----------
    letter : str
        The candidate to begin with.
    processor : Processor
        Its stage.
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels of the signal.
    """

    def __init__(self, letter: str, processor: Processor, *, sample_rate_hz: float, channels: int) -> None:
        self._fade_frames = max(1, round(FADE_S * sample_rate_hz))
        self._slots = {letter: _Slot(processor, self._fade_frames, 1.0)}
        self._shown = self._slots[letter]
        self._leaving: list[_Slot] = []
        self.letter = letter
        """The candidate that is heard; the first of the pair while null listening."""
        self.null: tuple[str, str] | None = None
        """The first minus the second is heard."""
        self._partner: str | None = None
        self._due = False  # weights are to move as soon as every stage they need is at the present
        self._gains: Mapping[str, float] = {}
        self._listen = Ramp(self._fade_frames, 1.0)
        self._listened = 1.0
        self._bypass = Ramp(self._fade_frames, 0.0)
        self.hurry = _HURRY
        """How many times faster than the signal a stage may be brought to the present; 1 where there is hardly time
        for one stage, and then the one heard before does not run on either."""
        past = max(processor.latency_frames, round(HISTORY_S * sample_rate_hz))
        self._past = np.zeros((past + BLOCK_FRAMES, channels))
        self._past_frames = 0
        self._scratch = np.zeros((BLOCK_FRAMES, channels))
        self._spare = np.zeros((BLOCK_FRAMES, channels))

    # -- what is heard

    @property
    def processor(self) -> Processor:
        """The stage that is heard, or will be; the newest of its letter."""
        return self._slots[self.letter].processor

    @property
    def latency_frames(self) -> int:
        """Delay from input to output, the same for every stage [frames]."""
        return self.processor.latency_frames

    @property
    def gliding(self) -> bool:
        """Whether a part is on its way to a new value."""
        return self.processor.gliding

    @property
    def swapping(self) -> bool:
        """Whether what is heard is about to be another, or fading to it."""
        return self._due or bool(self._leaving) or any(slot.weight.moving for slot in self._slots.values())

    @property
    def match_gain(self) -> float:
        """Gain at which it is heard; the volts do not depend on it."""
        return self._listened

    @property
    def fault(self) -> FaultReading | None:
        """Why a stage that is heard has given up, None while all is well."""
        for slot in self._slots.values():
            if not slot.heard:
                continue
            fault = getattr(slot.processor, "fault", None)
            if fault is not None:
                return FaultReading(fault.node, fault.time_s, fault.reason)
        return None

    def put(self, letter: str, processor: Processor) -> None:
        """Add a candidate or replace its stage; where it is heard, the new stage is faded to."""
        old = self._slots.get(letter)
        self._slots[letter] = slot = _Slot(processor, self._fade_frames)
        if old is not None and old.heard:
            self._leaving.append(old)
        if letter in self._wanted():
            self._begin(slot)
            self._due = True

    def select(self, letter: str) -> None:
        """Hear this candidate, alone; nothing happens where there is none of that letter."""
        if letter not in self._slots:
            return
        if letter != self.letter:
            self._partner = self.letter
        self.letter, self.null = letter, None
        self._move()

    def listen_null(self, first: str, second: str) -> None:
        """Hear the first minus the second; nothing happens where one of them is not there."""
        if not {first, second} <= self._slots.keys():
            return
        self.letter, self.null, self._partner = first, (first, second), None
        self._move()

    def drop(self, letter: str) -> None:
        """Forget a candidate that is not heard."""
        if letter not in self._wanted() and letter in self._slots:
            slot = self._slots.pop(letter)
            if slot.heard:
                self._leaving.append(slot)
                slot.weight.to(0.0)
        if self._partner == letter:
            self._partner = None

    def set_gains(self, gains: Mapping[str, float]) -> None:
        """The gain at which each candidate is heard, at most 1; 1 for one that is not named."""
        self._gains = gains
        self._move()

    def set_bypass(self, on: bool) -> None:
        """Fade to the input (True) or back, at the same delay."""
        self._bypass.to(1.0 if on else 0.0)
        self._aim()

    def reset(self) -> None:
        """Back to rest; what was on its way is heard at once."""
        self._leaving.clear()
        self._past[...] = 0.0
        self._past_frames = 0
        self._due = False
        for letter, slot in self._slots.items():
            slot.weight.jump(self._wanted().get(letter, 0.0))
            slot.running = slot.heard
            slot.behind = 0
            if slot.running:
                slot.processor.reset()
                slot.unheard = False
        self._shown = self._slots[self.letter]
        self._bypass.jump(self._bypass.target)
        self._aim()
        self._listen.jump(self._listened)

    def readings(self) -> tuple[OpAmpReading, ...]:
        """What the op-amps of the stage that is heard did; while null listening, of the first."""
        return tuple(self._shown.processor.readings())

    def clear_readings(self) -> None:
        """Start the readings anew."""
        for slot in self._slots.values():
            slot.processor.clear_readings()

    # -- the signal

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``, both (frames, channels)."""
        if self._due and all(self._slots[letter].behind == 0 for letter in self._wanted()):
            self._begin_to_move()
        for first in range(0, len(volts_in), BLOCK_FRAMES):
            self._block(volts_in[first : first + BLOCK_FRAMES], volts_out[first : first + BLOCK_FRAMES])

    def match(self, samples: Volts) -> None:
        """Multiply what was just processed, in place, by the gain at which it is heard."""
        self._listen.apply(samples)

    def _block(self, volts_in: Volts, volts_out: Volts) -> None:
        frames = len(volts_in)
        self._remember(volts_in)
        running = [slot for slot in (*self._slots.values(), *self._leaving) if slot.running]
        heard = [slot for slot in running if slot.heard]
        if len(heard) == 1 and heard[0].weight.target == 1.0 and not heard[0].weight.moving:
            heard[0].processor.process(volts_in, volts_out)
        else:
            volts_out[...] = 0.0
            for slot in heard:
                scratch = self._scratch[:frames]
                slot.processor.process(volts_in, scratch)
                slot.weight.apply(scratch)
                volts_out += scratch
        for slot in running:
            if slot not in heard:
                self._catch_up(slot, frames)
        self._rest()
        if self._bypass.moving or self._bypass.target:
            dry = self._scratch[:frames]
            start = len(self._past) - frames - self.latency_frames
            np.subtract(self._past[start : start + frames], volts_out, out=dry)
            if self._bypass.moving:
                self._bypass.apply(dry)
                volts_out += dry
            else:
                volts_out[...] = self._past[start : start + frames]

    def _remember(self, volts_in: Volts) -> None:
        frames = len(volts_in)
        self._past[:-frames] = self._past[frames:]
        self._past[-frames:] = volts_in
        self._past_frames = min(self._past_frames + frames, len(self._past))

    def _catch_up(self, slot: _Slot, frames: int) -> None:
        """Run a stage that is not heard over its backlog and this block, or as much of them as there is time for."""
        backlog = slot.behind + frames
        do = min(backlog, max(self.hurry, 2) * frames) if slot.behind else frames
        while do > 0:
            count = min(do, BLOCK_FRAMES)
            start = len(self._past) - backlog
            slot.processor.process(self._past[start : start + count], self._spare[:count])
            backlog -= count
            do -= count
        slot.behind = backlog

    def _gain_of(self, letter: str) -> float:
        return self._gains.get(letter, 1.0)

    def _wanted(self) -> dict[str, float]:
        """The weight of every candidate that is to be heard."""
        if self.null is None:
            return {self.letter: 1.0}
        first, second = self.null
        if first == second:
            return {first: 0.0}
        return {first: 1.0, second: -self._gain_of(second) / self._gain_of(first)}

    def _move(self) -> None:
        for letter in self._wanted():
            slot = self._slots[letter]
            if not slot.running:
                self._begin(slot)
        self._due = True

    def _begin(self, slot: _Slot) -> None:
        """Start a stage from rest at the beginning of what is remembered."""
        slot.processor.reset()
        slot.running = slot.unheard = True
        slot.behind = min(self._past_frames, len(self._past) - BLOCK_FRAMES)

    def _begin_to_move(self) -> None:
        self._due = False
        wanted = self._wanted()
        for letter, slot in self._slots.items():
            slot.weight.to(wanted.get(letter, 0.0))
            if letter in wanted and slot.unheard:
                slot.processor.clear_readings()
                slot.unheard = False
        self._shown = self._slots[self.letter]
        for slot in self._leaving:
            slot.weight.to(0.0)
        self._aim()

    def _aim(self) -> None:
        """Move to the gain at which what is heard is listened to; the input itself is heard as it is."""
        self._listened = 1.0 if self._bypass.target else self._gain_of(self.letter)
        self._listen.to(self._listened)

    def _rest(self) -> None:
        """Let stages stop that are heard no more, but for the one that was heard before this one."""
        self._leaving = [slot for slot in self._leaving if slot.heard]
        wanted = self._wanted()
        for letter, slot in self._slots.items():
            if slot.running and not slot.heard and letter not in wanted:
                slot.unheard = True
                slot.running = letter == self._partner and self.hurry > 1
