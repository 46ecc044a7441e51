"""The largest input that stays clean: found by running scaled copies of a recording's loudest passages.

A first run that was clean gives the answer at once where the circuit is linear before its limits: what used most of a
limit says how much more there is, and the loudest passages are run at that level to see it. Otherwise the passages
that limited are run lower and lower until they are clean, and then all of the recording, as often as something else
limits there.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from preview.dsp.events import EventFinder, LimitKind
from preview.dsp.settle import memory_s
from preview.engine.check.results import Limit, Margin, Proof
from preview.engine.check.run import Load, Signal, Stages, WholeRun, loads, piece_frames, pieces, settle_at

__all__ = ["find_margin"]

LIMITS: dict[LimitKind, Limit] = {
    "rail": "rail",
    "slew": "slew rate",
    "current": "output current",
    "range": "input range",
}
"""Kinds of visits in words."""
WITHIN = 10.0 ** (0.01 / 20.0)
"""How near the found level is to the largest clean one: 0.01 dB."""
TRIES = 60
"""Runs of one passage at most."""
ROUNDS = 6
"""Runs of the whole recording at most."""
FAINTEST = 1e-6
"""Gain below which a recording that does not come clean is given up."""
RUN_IN_S, RUN_IN_TIMES = (0.05, 5.0), 12.0
"""Shortest and longest run-in before a passage [s], and how many of the circuit's longest time constants."""
PASSAGE_PIECES = 4
"""Length of a passage."""


@dataclass(frozen=True, slots=True)
class _Outcome:
    """What a run at one level came to."""

    clean: bool
    """Whether nothing came to a limit."""
    worst: Load
    """What used most of a limit."""
    frame: int
    """Where it did not stay clean, or the first frame."""
    used: float = 0.0
    """The most that was used of a limit before that, from rest to it."""


def find_margin(
    signal: Signal, full_scale_v: float, stages: Stages, whole: WholeRun, more: Callable[[int, int], None]
) -> Margin | None:
    """The largest clean level of a recording that has been run as it is; None where no level is clean.

    Parameters
    ----------
    more : callable
        Told the frames done since the last call, and the frames that have come to be done besides.
    """
    return _Search(signal, full_scale_v, stages, whole, more).find()


class _Search:
    def __init__(
        self,
        signal: Signal,
        full_scale_v: float,
        stages: Stages,
        whole: WholeRun,
        more: Callable[[int, int], None],
    ) -> None:
        self._signal, self._full_scale_v, self._stages = signal, full_scale_v, stages
        self._whole, self._more = whole, more
        self._passages = list(whole.worst_frames)
        net = stages.netlist
        self._linear = not net.ports and not any(o.model.crossover_v > 0.0 for o in net.opamps)
        memory = memory_s(net, RUN_IN_TIMES)
        self._goes_on = self._linear and memory <= RUN_IN_S[1]
        run_in_s = float(np.clip(memory, *RUN_IN_S))
        self._piece = piece_frames(signal.sample_rate_hz)
        self._run_in_frames = self._piece * math.ceil(run_in_s * signal.sample_rate_hz / self._piece)

    def find(self) -> Margin | None:
        if not self._whole.loads:
            return None
        worst = max(self._whole.loads, key=lambda load: load.share)
        guess = 1.0
        if self._whole.clean and self._linear:
            if worst.share <= 0.0:
                return None  # nothing in it has a limit
            guess = 1.0 / worst.share
        gain = self._of_passages(guess)
        if gain is None:
            return None
        if self._whole.clean and (self._linear or gain <= 1.0):
            return self._said(max(gain, 1.0), "linear")
        return self._of_whole(gain)

    def _said(self, gain: float, proof: Proof) -> Margin:
        """The margin, with what limits first beyond it."""
        beyond = max(
            (self._passage(frame, gain * WITHIN**2) for frame in self._passages),
            key=lambda outcome: outcome.worst.share + (0.0 if outcome.clean else 1.0),
        )
        return Margin(20.0 * math.log10(gain), beyond.worst.name, beyond.worst.limit, proof)

    def _of_passages(self, guess: float) -> float | None:
        """The largest gain at which every passage is clean."""
        gain = guess
        for frame in self._passages:
            found = self._bracket(frame, gain, first=frame == self._passages[0])
            if found is None:
                return None
            gain = found
        return gain

    def _bracket(self, frame: int, guess: float, *, first: bool) -> float | None:
        """The largest gain at which a passage is clean; not above the guess unless it is the first passage."""
        low, high = 0.0, math.inf
        gain = guess / WITHIN**0.5
        for _ in range(TRIES):
            outcome = self._passage(frame, gain)
            if outcome.clean:
                if not first and low == 0.0 and high == math.inf:
                    return guess
                low = gain
                # while the circuit is linear a clean run says how far the limit is
                step = 1.26
                if self._linear and 0.0 < outcome.worst.share < 1.0:
                    step = 1.0 / outcome.worst.share / WITHIN**0.5
                gain = min(low * max(step, WITHIN), 1e9)
            else:
                high = gain
                gain *= 0.5
            if high / max(low, 1e-300) <= WITHIN or low >= 1e9:
                return low
            if high < FAINTEST:
                return None
            if low > 0.0 and high < math.inf:
                gain = math.sqrt(low * high) if not low < gain < high else gain
        return low or None

    def _of_whole(self, gain: float) -> Margin:
        """Run everything at the gain found on passages; lower it as often as something limits elsewhere.

        What was clean before that stays so with less where the circuit is linear, so the run goes on from there.
        """
        first, used = 0, 0.0
        for _ in range(ROUNDS):
            run_in = min(first, self._run_in_frames)
            self._more(0, self._whole.frames - first + run_in)
            outcome = self._run(first - run_in, run_in, None, gain)
            used = max(used, outcome.used)
            if outcome.clean:
                if self._linear and used > 0.0:
                    gain /= used
                return self._said(gain / WITHIN**0.1, "whole file")
            self._passages.append(outcome.frame)
            lower = self._bracket(outcome.frame, gain, first=False)
            if lower is None:
                break
            lower = min(lower, gain / WITHIN)
            first, used = (outcome.frame, used * lower / gain) if self._goes_on else (0, 0.0)
            gain = lower
        return self._said(gain, "loudest passages")

    def _passage(self, frame: int, gain: float) -> _Outcome:
        """What a passage comes to, the circuit run in by what is before it."""
        first = max(0, frame - self._run_in_frames)
        return self._run(first, frame - first, PASSAGE_PIECES * self._piece, gain)

    def _run(self, first: int, run_in: int, frames: int | None, gain: float) -> _Outcome:
        """Some frames at one level, up to where something limits.

        A run-in that does not begin with the recording fades in, so that no edge is made, and is not judged.
        """
        stage = self._stages.at_rest(self._signal)
        scale_v = self._full_scale_v * gain
        if self._whole.settled:
            settle_at(stage, self._signal, scale_v, first)
        finder = EventFinder(stage)
        hold = math.ceil(stage.filters.circuit_delay_frames)
        count = None if frames is None else run_in + frames + hold
        most = Load(self._stages.netlist.opamps[0].designator, "rail", 0.0)
        for volts, own in pieces(self._signal, scale_v, first, count, hold=hold):
            if first and finder.frames < run_in and not self._whole.settled:
                at = np.arange(finder.frames, finder.frames + len(volts))
                volts *= 0.5 - 0.5 * np.cos(np.pi * np.clip(2.0 * at / run_in, 0.0, 1.0))[:, None]
            frame = first + finder.frames
            now = finder.process(volts, None)
            if frames is None:
                self._more(own, 0)
            if first and frame < first + run_in:
                finder.events.clear()
                continue
            worst = max(loads(self._stages.netlist, now), key=lambda load: load.share)
            if finder.limited:
                name, kind = finder.first()
                return _Outcome(False, Load(name, LIMITS[kind], max(worst.share, 1.0)), frame, most.share)
            if not worst.share < 1.0 or stage.core.trouble() is not None:
                return _Outcome(False, worst, frame, most.share)
            most = max(most, worst, key=lambda load: load.share)
        return _Outcome(True, most, first, most.share)
