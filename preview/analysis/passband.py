"""The passband as a person would say it: gain in dB and as a factor, and whether the stage inverts."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np

from preview.analysis.response import PASSBAND_HZ, SEARCH_HZ, find_corners
from preview.circuit.netlist import Netlist
from preview.network import transfer
from preview.values.notation import format_value

__all__ = ["Passband", "passband"]

Polarity = Literal["non-inverting", "inverting", "turning"]

_FAR = 1e3
"""How far beyond a corner a passband that reaches to 0 Hz or to infinity is looked at [ratio]."""
_ANYWHERE_HZ = 1e3
"""Where a gain without a corner is looked at [Hz]."""
_NEAR_DEG = 60.0


@dataclass(frozen=True, slots=True)
class Passband:
    """Passband gain, polarity and corners of a circuit."""

    gain_db: float
    """The passband's gain [dB]."""
    polarity: Polarity
    """What the stage does to the signal's sign in the passband; turning where it is neither, or not the same."""
    phase_deg: float
    """Phase in the middle of the passband [degrees]."""
    phase_hz: float
    """Where that is [Hz]."""
    corners_hz: tuple[float, ...]
    """Frequencies 3.01 dB below the passband gain, rising [Hz]."""

    @property
    def gain(self) -> float:
        """The gain as a factor, negative where the stage inverts [V/V]."""
        size = math.pow(10.0, self.gain_db / 20.0)
        return -size if self.polarity == "inverting" else size

    def said(self) -> str:
        """Gain in words: ``20.00 dB, x 10, inverting``."""
        turn: str = self.polarity
        if turn == "turning":
            turn = f"phase {self.phase_deg:.0f} deg at {format_value(self.phase_hz, 'frequency')}"
        return f"{round(self.gain_db, 2) + 0.0:.2f} dB, x {abs(self.gain):.4g}, {turn}"

    def corners_said(self) -> str:
        """Corners in words."""
        return ", ".join(format_value(f, "frequency") for f in self.corners_hz) or "none"


def passband(netlist: Netlist) -> Passband:
    """Passband of a circuit.

    Its phase is taken between two corners, or far below or above a single one, where the gain is within 3 dB of the
    passband's; at 1 kHz where there is no corner. Where the passband has no end, the sign must be the same there.
    """
    gain_db, corners = find_corners(netlist)
    ends = (SEARCH_HZ[0], PASSBAND_HZ)
    spots = [_ANYWHERE_HZ, *ends]
    if corners:
        between = [math.sqrt(a * b) for a, b in pairwise(corners)]
        spots = [*between, corners[0] / _FAR, corners[-1] * _FAR, *ends]
    gain = transfer.response(netlist, spots)
    inside = [i for i in range(len(spots)) if abs(gain[i]) >= math.pow(10.0, (gain_db - 3.02) / 20.0)] or [0]
    phases = [float(np.angle(gain[i], deg=True)) for i in inside]
    signs = {_polarity(phase) for phase in phases}
    polarity: Polarity = signs.pop() if len(signs) == 1 else "turning"
    return Passband(gain_db, polarity, phases[0], spots[inside[0]], corners)


def _polarity(phase_deg: float) -> Polarity:
    if abs(phase_deg) < _NEAR_DEG:
        return "non-inverting"
    return "inverting" if abs(phase_deg) > 180.0 - _NEAR_DEG else "turning"
