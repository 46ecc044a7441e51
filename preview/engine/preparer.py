"""Prepares circuits and glides on a thread of its own; the audio thread only takes up what is finished."""

from __future__ import annotations

import threading
from collections.abc import Callable, Mapping
from typing import Protocol

from preview.circuit.netlist import Netlist
from preview.errors import PreviewError
from preview.values.quality import Quality

__all__ = ["Preparer", "Runner"]

POLL_S = 0.002

Start = Callable[[], None]
"""Made on the audio thread, starts what was prepared."""


class Runner(Protocol):
    """Where prepared things are handed to; each method may be called from the preparer's thread."""

    def build(self, letter: str, netlist: Netlist, quality: Quality) -> Start:
        """Compute and warm a candidate's circuit."""

    def plan(self, letter: str, values: Mapping[str, float]) -> Start:
        """Plan a glide of a candidate's running circuit."""

    def drop(self, letter: str) -> Start:
        """Forget a candidate that is not heard."""

    def settled(self, letter: str) -> bool:
        """Whether the circuit can take another glide or give way to another."""

    def hand_over(self, start: Start) -> None:
        """Have a call made on the audio thread."""


class Preparer:
    """Turns wishes (a part's value, a circuit, a quality, a candidate) into work done in the background.

    Wishes that arrive while one is being prepared are put together: of several values the last counts. Parts are those
    of the candidate that was chosen last. Work for that one comes first.

    Parameters
    ----------
    runner : Runner
        Where the work is done and handed to.
    netlists : mapping
        The candidates at the start, by letter.
    letter : str
        The candidate heard at the start.
    quality : Quality
        Quality of all of them.
    complain : callable
        Told in one line what could not be done.
    """

    def __init__(
        self,
        runner: Runner,
        *,
        netlists: Mapping[str, Netlist],
        letter: str,
        quality: Quality,
        complain: Callable[[str], None],
    ) -> None:
        self._runner = runner
        self._complain = complain
        self._netlists = dict(netlists)
        self._letter = letter
        self._quality = quality
        self._parts: dict[str, float] = {}
        self._unbuilt = dict.fromkeys(netlists)
        self._building: str | None = None
        self._orders: list[tuple[frozenset[str], Start]] = []
        self._ended = False
        self._change = threading.Condition()
        self._thread = threading.Thread(target=self._work, name="preparer", daemon=True)

    def start(self) -> None:
        """Begin with the first circuit."""
        self._thread.start()

    def end(self) -> None:
        """Stop after what is being prepared now; does not wait."""
        with self._change:
            self._ended = True
            self._change.notify()

    # -- wishes

    def set_part(self, designator: str, value: float) -> None:
        """Wish for another value of a part."""
        with self._change:
            if designator not in self._netlists[self._letter].values:
                self._complain(f"the running circuit has no part {designator}")
                return
            self._parts[designator] = value
            self._change.notify()

    def set_circuit(self, netlist: Netlist) -> None:
        """Wish for another circuit; part values wished for before are its own now."""
        with self._change:
            self._parts.clear()
        self.keep(self._letter, netlist)

    def set_quality(self, quality: Quality) -> None:
        """Wish for another quality."""
        with self._change:
            if quality is not self._quality:
                self._quality = quality
                self._unbuilt |= dict.fromkeys(self._netlists)
                self._change.notify()

    def keep(self, letter: str, netlist: Netlist) -> None:
        """Wish for a candidate, or for another circuit under its letter."""
        with self._change:
            self._netlists[letter] = netlist
            self._unbuilt[letter] = None
            self._change.notify()

    def drop(self, letter: str) -> None:
        """Forget a candidate; not the one that was chosen last."""
        with self._change:
            if letter == self._letter or self._netlists.pop(letter, None) is None:
                return
            self._unbuilt.pop(letter, None)
            self._runner.hand_over(self._runner.drop(letter))

    def choose(self, letters: tuple[str, ...], start: Start) -> bool:
        """Hear these candidates by ``start``, as soon as they are built; parts are the first's from now on."""
        with self._change:
            missing = [letter for letter in letters if letter not in self._netlists]
            if missing:
                self._complain(f"there is no candidate {missing[0]}")
                return False
            if letters[0] != self._letter and self._parts:  # too late for a glide: nobody would hear it
                self._netlists[self._letter] = self._netlists[self._letter].with_values(self._parts)
                self._unbuilt[self._letter] = None
                self._parts.clear()
            self._letter = letters[0]
            self._orders.append((frozenset(letters), start))
            self._hand_over_orders()
            self._change.notify()
            return True

    # -- what holds when every wish has come true

    @property
    def netlists(self) -> dict[str, Netlist]:
        """The circuits that were last wished for, values included, by letter."""
        with self._change:
            heard = self._netlists[self._letter].with_values(self._parts)
            return self._netlists | {self._letter: heard}

    @property
    def letter(self) -> str:
        """The candidate that was chosen last."""
        return self._letter

    @property
    def quality(self) -> Quality:
        """The quality that was last wished for."""
        return self._quality

    @property
    def unbuilt(self) -> frozenset[str]:
        """Candidates that cannot be heard yet."""
        with self._change:
            return frozenset(self._unbuilt) | ({self._building} if self._building else set())

    # -- the thread

    def _work(self) -> None:
        while self._wait_for_wish():
            try:
                start = self._prepare()
            except PreviewError as error:
                self._complain(str(error))
            except Exception as error:  # the thread must live on; what failed is said, not hidden
                self._complain(f"the change could not be computed ({type(error).__name__}: {error})")
            else:
                self._runner.hand_over(start)
            with self._change:
                self._building = None
                self._hand_over_orders()

    def _wait_for_wish(self) -> bool:
        """Wait until there is a wish and the circuit can take it; False at the end."""
        with self._change:
            while not self._ended:
                if not (self._unbuilt or self._parts):
                    self._change.wait()
                elif self._runner.settled(self._letter):
                    return True
                else:
                    self._change.wait(POLL_S)
            return False

    def _prepare(self) -> Start:
        with self._change:
            letter, parts = self._letter, self._parts.copy()
            self._parts.clear()
            self._netlists[letter] = self._netlists[letter].with_values(parts)
            build = bool(self._unbuilt) and (letter in self._unbuilt or not parts)
            if build:
                letter = letter if letter in self._unbuilt else next(iter(self._unbuilt))
                self._unbuilt.pop(letter)
                self._building = letter
            netlist, quality = self._netlists[letter], self._quality
        if build:
            return self._runner.build(letter, netlist, quality)
        return self._runner.plan(letter, parts)

    def _hand_over_orders(self) -> None:
        """Hand over, in their order, what needs no circuit that is still to be built; the lock is held."""
        waiting = self._unbuilt.keys() | {self._building}
        while self._orders and not self._orders[0][0] & waiting:
            self._runner.hand_over(self._orders.pop(0)[1])
