"""At which gain each candidate is heard, so that all are as loud as the quietest one."""

from __future__ import annotations

import math
import time
from collections.abc import Mapping
from dataclasses import dataclass

from preview.circuit.netlist import Netlist
from preview.values.levels import ratio_from_db

__all__ = ["Matcher"]

SETTLE_S = 0.4
"""A circuit that was changed is measured when it has been left alone for so long [s]."""


@dataclass(slots=True)
class _Known:
    netlist: Netlist
    lufs: float


class Matcher:
    """Keeps the loudness of each candidate, and knows which are to be measured.

    A candidate that is silent, or not measured yet, is heard as it is and counts for no other.
    """

    def __init__(self) -> None:
        self.on = False
        """Whether candidates are heard at matched loudness."""
        self._known: dict[str, _Known] = {}
        self._asked: dict[str, Netlist] = {}
        self._seen: dict[str, tuple[Netlist, float]] = {}

    def forget(self) -> None:
        """What was measured holds no more: another recording, region or full scale."""
        self._known.clear()
        self._asked.clear()

    def due(self, netlists: Mapping[str, Netlist], *, now_s: float | None = None) -> list[str]:
        """Letters that are to be measured now; each is given once."""
        now_s = time.monotonic() if now_s is None else now_s
        for letter in self._known.keys() - netlists.keys():
            del self._known[letter]
        if not self.on or len(netlists) < 2:
            return []
        letters = []
        for letter, netlist in netlists.items():
            if self._seen.get(letter, (None, 0.0))[0] != netlist:
                self._seen[letter] = netlist, now_s
            known = self._known.get(letter)
            fresh = known is not None and known.netlist == netlist
            settled = known is None or now_s - self._seen[letter][1] >= SETTLE_S
            if not fresh and settled and self._asked.get(letter) != netlist:
                self._asked[letter] = netlist
                letters.append(letter)
        return letters

    def note(self, letter: str, netlist: Netlist, lufs: float) -> None:
        """A loudness was found; one of a circuit that has changed meanwhile is no use."""
        if self._asked.get(letter) == netlist:
            del self._asked[letter]
            self._known[letter] = _Known(netlist, lufs)

    def loudness(self, letter: str) -> float | None:
        """Loudness of a candidate [LUFS], None where it is not known."""
        known = self._known.get(letter)
        return known.lufs if known is not None else None

    def gains_db(self) -> dict[str, float]:
        """Gain of each candidate that is known [dB], 0 for the quietest one; whether or not it is on."""
        heard = {letter: known.lufs for letter, known in self._known.items() if math.isfinite(known.lufs)}
        quietest = min(heard.values(), default=0.0)
        return {letter: quietest - lufs for letter, lufs in heard.items()}

    def gains(self) -> dict[str, float]:
        """The same as ratios; empty while it is off."""
        return {letter: ratio_from_db(db) for letter, db in self.gains_db().items()} if self.on else {}
