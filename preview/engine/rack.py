"""Candidates side by side: one is heard, or one minus another, and which one changes without a gap.

Every candidate is a stage with a weight in the sum that leaves, in volts, and one in the sum that is heard, which
differs where loudness is matched. A change moves the weights along raised cosines, so what is heard is always a
crossfade of running stages. A stage that has not been running is first brought to the present: it computes the last
moments of the input anew, faster than they came, unheard.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from preview.circuit.opamp import OpAmpReading
from preview.dsp.block import Volts
from preview.engine.readings import FaultReading
from preview.engine.slot import Processor, Slot
from preview.engine.transport import Ramp

__all__ = ["FADE_S", "HISTORY_S", "Rack"]

FADE_S = 0.02
"""Time of a crossfade [s]."""
HISTORY_S = 0.05
"""Input that a stage computes unheard before it is faded in [s]."""
BLOCK_FRAMES = 256
"""Frames computed at a time."""
_HURRY = 4


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
    max_frames : int
        Longest block.
    """

    def __init__(
        self,
        letter: str,
        processor: Processor,
        *,
        sample_rate_hz: float,
        channels: int,
        max_frames: int = 2048,
    ) -> None:
        self._fade_frames = max(1, round(FADE_S * sample_rate_hz))
        self._slots = {letter: Slot(processor, self._fade_frames, 1.0)}
        self._shown = self._slots[letter]
        self._leaving: list[Slot] = []
        self.letter = letter
        """The candidate that is heard; the first of the pair while null listening."""
        self.null: tuple[str, str] | None = None
        """The first minus the second is heard."""
        self._partner: str | None = None
        self._due = False  # weights are to move as soon as every stage they need is at the present
        self._gains: Mapping[str, float] = {}
        self._apart = False  # whether what is heard differs from what leaves
        self._heard = np.zeros((max_frames, channels))
        self._heard_frames = 0
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
        return self._due or bool(self._leaving) or self._moving

    @property
    def match_gain(self) -> float:
        """Gain at which it is heard; the volts do not depend on it, and the input itself is heard as it is."""
        return 1.0 if self._bypass.target else self._gain_of(self.letter)

    @property
    def heard(self) -> Volts | None:
        """What is to be heard of the last block; None where it is what left. Owned by the rack."""
        return self._heard[: self._heard_frames] if self._apart else None

    @property
    def fault(self) -> FaultReading | None:
        """Why a stage that is heard has given up, None while all is well."""
        for slot in self._slots.values():
            if not slot.heard:
                continue
            if slot.processor.fault is not None:
                return slot.processor.fault
        return None

    def put(self, letter: str, processor: Processor) -> None:
        """Add a candidate or replace its stage; where it is heard, the new stage is faded to."""
        old = self._slots.get(letter)
        self._slots[letter] = slot = Slot(processor, self._fade_frames)
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
                slot.to(0.0, 0.0)
        if self._partner == letter:
            self._partner = None

    def set_gains(self, gains: Mapping[str, float]) -> None:
        """The gain at which each candidate is heard, at most 1; 1 for one that is not named."""
        self._gains = gains
        self._move()

    def set_bypass(self, on: bool) -> None:
        """Fade to the input (True) or back, at the same delay."""
        self._bypass.to(1.0 if on else 0.0)

    def reset(self) -> None:
        """Back to rest; what was on its way is heard at once."""
        self._leaving.clear()
        self._past[...] = 0.0
        self._past_frames = 0
        self._due = False
        wanted = self._wanted()
        for letter, slot in self._slots.items():
            weight, heard_weight = wanted.get(letter, (0.0, 0.0))
            slot.weight.jump(weight)
            slot.heard_weight.jump(heard_weight)
            slot.running = slot.heard
            slot.behind = 0
            if slot.running:
                slot.processor.reset()
                slot.unheard = False
        self._shown = self._slots[self.letter]
        self._bypass.jump(self._bypass.target)
        self._apart = bool(self._gains)

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
        self._apart = bool(self._gains) or any(slot.apart for slot in self._every)
        self._heard_frames = len(volts_in)
        for first in range(0, len(volts_in), BLOCK_FRAMES):
            piece = slice(first, first + BLOCK_FRAMES)
            self._block(volts_in[piece], volts_out[piece], self._heard[piece])

    def _block(self, volts_in: Volts, volts_out: Volts, heard_out: Volts) -> None:
        frames = len(volts_in)
        self._remember(volts_in)
        running = [slot for slot in self._every if slot.running]
        heard = [slot for slot in running if slot.heard]
        if (
            len(heard) == 1
            and heard[0].weight.target == 1.0
            and not heard[0].weight.moving
            and not self._apart
        ):
            heard[0].processor.process(volts_in, volts_out)
        else:
            volts_out[...] = 0.0
            heard_out[:frames] = 0.0
            for slot in heard:
                self._add(slot, volts_in, volts_out, heard_out[:frames])
        for slot in running:
            if slot not in heard:
                self._catch_up(slot, frames)
        self._rest()
        if self._bypass.moving or self._bypass.target:
            self._pass_by(volts_out, heard_out[:frames])

    def _add(self, slot: Slot, volts_in: Volts, volts_out: Volts, heard_out: Volts) -> None:
        """Add a stage's share to what leaves, and to what is heard."""
        made, share = self._scratch[: len(volts_in)], self._spare[: len(volts_in)]
        slot.processor.process(volts_in, made)
        if self._apart:
            share[...] = made
            slot.heard_weight.apply(share)
            heard_out += share
        else:
            slot.heard_weight.pass_over(len(volts_in))
        slot.weight.apply(made)
        volts_out += made

    def _pass_by(self, volts_out: Volts, heard_out: Volts) -> None:
        """Fade what leaves and what is heard to the input, or back."""
        frames = len(volts_out)
        start = len(self._past) - frames - self.latency_frames
        dry = self._past[start : start + frames]
        if not self._bypass.moving:
            volts_out[...] = dry
            heard_out[...] = dry
            return
        share = self._scratch[:frames]
        share[...] = 1.0
        self._bypass.apply(share)
        volts_out += share * (dry - volts_out)
        heard_out += share * (dry - heard_out)

    def _remember(self, volts_in: Volts) -> None:
        frames = len(volts_in)
        self._past[:-frames] = self._past[frames:]
        self._past[-frames:] = volts_in
        self._past_frames = min(self._past_frames + frames, len(self._past))

    def _catch_up(self, slot: Slot, frames: int) -> None:
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

    @property
    def _every(self) -> tuple[Slot, ...]:
        return (*self._slots.values(), *self._leaving)

    @property
    def _moving(self) -> bool:
        return any(slot.weight.moving or slot.heard_weight.moving for slot in self._every)

    def _wanted(self) -> dict[str, tuple[float, float]]:
        """The weights of every candidate that is to be heard: in what leaves, and in what is heard."""
        gain = self._gain_of(self.letter)
        if self.null is None:
            return {self.letter: (1.0, gain)}
        first, second = self.null
        if first == second:
            return {first: (0.0, 0.0)}
        other = self._gain_of(second)
        return {first: (1.0, gain), second: (-other / gain, -other)}

    def _move(self) -> None:
        for letter in self._wanted():
            slot = self._slots[letter]
            if not slot.running:
                self._begin(slot)
        self._due = True

    def _begin(self, slot: Slot) -> None:
        """Start a stage from rest at the beginning of what is remembered."""
        slot.processor.reset()
        slot.running = slot.unheard = True
        slot.behind = min(self._past_frames, len(self._past) - BLOCK_FRAMES)

    def _begin_to_move(self) -> None:
        self._due = False
        wanted = self._wanted()
        for letter, slot in self._slots.items():
            slot.to(*wanted.get(letter, (0.0, 0.0)))
            if letter in wanted and slot.unheard:
                slot.processor.clear_readings()
                slot.unheard = False
        self._shown = self._slots[self.letter]
        for slot in self._leaving:
            slot.to(0.0, 0.0)

    def _rest(self) -> None:
        """Let stages stop that are heard no more, but for the one that was heard before this one."""
        self._leaving = [slot for slot in self._leaving if slot.heard]
        wanted = self._wanted()
        for letter, slot in self._slots.items():
            if slot.running and not slot.heard and letter not in wanted:
                slot.unheard = True
                slot.running = letter == self._partner and self.hurry > 1
