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


class Runner(Protocol):
    """Where prepared things are handed to; each method may be called from the preparer's thread."""

    def build(self, netlist: Netlist, quality: Quality) -> Callable[[], None]:
        """Compute and warm a circuit; the returned call, made on the audio thread, starts it."""

    def plan(self, values: Mapping[str, float]) -> Callable[[], None]:
        """Plan a glide of the running circuit; the returned call, made on the audio thread, starts it."""

    def settled(self) -> bool:
        """Whether the running circuit can take another glide or circuit."""

    def hand_over(self, start: Callable[[], None]) -> None:
        """Have a call made on the audio thread."""


class Preparer:
    """Turns wishes (a part's value, another circuit, another quality) into work done in the background.

    Wishes that arrive while one is being prepared are put together: of several values the last counts.

    Parameters
    ----------
    runner : Runner
        Where the work is done and handed to.
    netlist : Netlist
        The circuit at the start.
    quality : Quality
        Its quality.
    complain : callable
        Told in one line what could not be done.
    """

    def __init__(
        self, runner: Runner, *, netlist: Netlist, quality: Quality, complain: Callable[[str], None]
    ) -> None:
        self._runner = runner
        self._complain = complain
        self._netlist = netlist
        self._quality = quality
        self._parts: dict[str, float] = {}
        self._rebuild = True
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

    def set_part(self, designator: str, value: float) -> None:
        """Wish for another value of a part."""
        with self._change:
            if designator not in self._netlist.values:
                self._complain(f"the running circuit has no part {designator}")
                return
            self._parts[designator] = value
            self._change.notify()

    def set_circuit(self, netlist: Netlist) -> None:
        """Wish for another circuit; part values wished for before are its own now."""
        with self._change:
            self._netlist = netlist
            self._parts.clear()
            self._rebuild = True
            self._change.notify()

    def set_quality(self, quality: Quality) -> None:
        """Wish for another quality."""
        with self._change:
            if quality is not self._quality:
                self._quality = quality
                self._rebuild = True
                self._change.notify()

    @property
    def netlist(self) -> Netlist:
        """The circuit that was last wished for, values included."""
        with self._change:
            return self._netlist.with_values(self._parts)

    @property
    def quality(self) -> Quality:
        """The quality that was last wished for."""
        return self._quality

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

    def _wait_for_wish(self) -> bool:
        """Wait until there is a wish and the circuit can take it; False at the end."""
        with self._change:
            while not self._ended:
                if not (self._rebuild or self._parts):
                    self._change.wait()
                elif self._runner.settled():
                    return True
                else:
                    self._change.wait(POLL_S)
            return False

    def _prepare(self) -> Callable[[], None]:
        with self._change:
            rebuild, parts = self._rebuild, dict(self._parts)
            quality = self._quality
            self._rebuild = False
            self._parts.clear()
            self._netlist = self._netlist.with_values(parts)
            netlist = self._netlist
        return self._runner.build(netlist, quality) if rebuild else self._runner.plan(parts)
