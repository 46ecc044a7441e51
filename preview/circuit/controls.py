"""What can be turned or switched on a stage: how a setting becomes the resistances of a part."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal, get_args

__all__ = ["CLOSED_OHM", "LEAST_SHARE", "OPEN_OHM", "TAPERS", "Contact", "Taper", "Track", "track_share"]

Taper = Literal["linear", "log", "reverse-log"]
"""How a track's resistance grows with the turn of the shaft."""
TAPERS: tuple[Taper, ...] = get_args(Taper)

LEAST_SHARE = 1e-4
"""Share of the track that stays between the wiper and an end it is turned to: the contact's resistance."""
CLOSED_OHM = 0.01
"""Resistance of a closed switch [ohm]."""
OPEN_OHM = 1e10
"""Resistance of an open switch [ohm]."""

LOG_BASE = 49.0
"""Makes one eighth of the track at half a turn, between the 10 % and the 15 % of common audio tracks."""


def track_share(position: float, taper: Taper) -> float:
    """Share of the track between the first end and the wiper, without the contact's resistance.

    Parameters
    ----------
    position : float
        Turn of the shaft, 0 at the first end and 1 at the second.
    taper : Taper
        ``log`` is ``(b^x - 1) / (b - 1)`` with b = 49, which is 12.5 % at half a turn; ``reverse-log`` is the
        same seen from the other end.
    """
    if taper == "linear":
        return position
    if taper == "log":
        return float((LOG_BASE**position - 1.0) / (LOG_BASE - 1.0))
    return 1.0 - track_share(1.0 - position, "log")


@dataclass(frozen=True, slots=True)
class Track:
    """A potentiometer in a netlist, which has its two halves as branches ``P1.a`` and ``P1.b``."""

    designator: str
    """P1, P2 ..."""
    ohm: float
    """The whole track [ohm]."""
    taper: Taper
    """How the resistance grows with the turn."""
    position: float
    """Turn of the shaft, 0..1."""

    @property
    def setting(self) -> float:
        """What the netlist gives as its value: the position."""
        return self.position

    def at(self, setting: float) -> Track:
        """The same track turned to another position; beyond the ends it stands at the end."""
        return replace(self, position=min(max(setting, 0.0), 1.0))

    def branch_values(self) -> dict[str, float]:
        """Resistance of each half by its branch [ohm]; together they are the whole track."""
        share = min(max(track_share(self.position, self.taper), LEAST_SHARE), 1.0 - LEAST_SHARE)
        return {
            f"{self.designator}.a": self.ohm * share,
            f"{self.designator}.b": self.ohm * (1.0 - share),
        }


@dataclass(frozen=True, slots=True)
class Contact:
    """A switch in a netlist, which has it as one resistor."""

    designator: str
    """S1, S2 ..."""
    closed: bool
    """Whether its contacts touch."""

    @property
    def setting(self) -> float:
        """What the netlist gives as its value: 1 closed, 0 open."""
        return float(self.closed)

    def at(self, setting: float) -> Contact:
        """The same switch, closed from a setting of one half on."""
        return replace(self, closed=setting >= 0.5)

    def branch_values(self) -> dict[str, float]:
        """Resistance of its branch [ohm]."""
        return {self.designator: CLOSED_OHM if self.closed else OPEN_OHM}
