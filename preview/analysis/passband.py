"""The passband as a person would say it: gain in dB and as a factor, and whether the stage inverts."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np

from preview.analysis.response import find_corners
from preview.circuit.netlist import Netlist
from preview.network import transfer
from preview.values.notation import format_value

__all__ = ["Passband", "passband"]

Polarity = Literal["non-inverting", "inverting", "turning"]

_FAR = 1e3
"""How far beyond a corner the phase of a passband that reaches to 0 Hz or to infinity is taken [ratio]."""
_ANYWHERE_HZ = 1e3
"""Where it is taken without a corner [Hz]."""
_NEAR_DEG = 60.0


@dataclass(frozen=True, slots=True)
class Passband:
    """Passband gain, polarity and corners of a circuit."""

    gain_db: float
    """The largest gain [dB]."""
    polarity: Polarity
    """What the stage does to the signal's sign in the middle of the passband; turning where it is neither."""
    phase_deg: float
    """Phase there [degrees]."""
    corners_hz: tuple[float, ...]
    """Frequencies 3.01 dB below the passband gain, rising [Hz]."""

    @property
    def gain(self) -> float:
        """The largest gain as a factor, negative where the stage inverts [V/V]."""
        size = math.pow(10.0, self.gain_db / 20.0)
        return -size if self.polarity == "inverting" else size

    def said(self) -> str:
        """Gain in words: ``20.00 dB, x 10, inverting``."""
        turn = f"phase {self.phase_deg:.0f} deg" if self.polarity == "turning" else self.polarity
        return f"{self.gain_db:.2f} dB, x {abs(self.gain):.4g}, {turn}"

    def corners_said(self) -> str:
        """Corners in words."""
        return ", ".join(format_value(f, "frequency") for f in self.corners_hz) or "none"


def passband(netlist: Netlist) -> Passband:
    """Passband of a circuit.

    Its polarity is taken between two corners, or far below or above a single one, where the gain is within 3 dB of
    the passband's; at 1 kHz where there is no corner.
    """
    gain_db, corners = find_corners(netlist)
    spots = [_ANYWHERE_HZ]
    if corners:
        between = [math.sqrt(a * b) for a, b in pairwise(corners)]
        spots = [*between, corners[0] / _FAR, corners[-1] * _FAR]
    gain = transfer.response(netlist, spots)
    at = int(np.argmax(np.abs(gain) >= 10.0 ** ((gain_db - 3.02) / 20.0)))
    phase_deg = float(np.angle(gain[at], deg=True))
    polarity: Polarity = "turning"
    if abs(phase_deg) < _NEAR_DEG:
        polarity = "non-inverting"
    elif abs(phase_deg) > 180.0 - _NEAR_DEG:
        polarity = "inverting"
    return Passband(gain_db, polarity, phase_deg, corners)
