"""What an op-amp's figures mean for its gain."""

from __future__ import annotations

import math

from preview.circuit.opamp import OpAmpModel

__all__ = ["second_pole_hz"]


def second_pole_hz(model: OpAmpModel) -> float:
    """Where the second pole lies that leaves the stated phase margin at unity gain [Hz]; inf for none.

    With ``A = (GBW / jf) / (1 + jf / f2)`` the magnitude is one at ``fc`` where ``fc sqrt(1 + (fc / f2)^2) = GBW``,
    and the phase there is ``-90 - atan(fc / f2)`` degrees, so the margin PM is ``atan(f2 / fc)``. Then
    ``fc = GBW sin PM`` and ``f2 = fc tan PM``.
    """
    if model.phase_margin_deg >= 90.0 or not math.isfinite(model.gain_bandwidth_hz):
        return math.inf
    margin = math.radians(model.phase_margin_deg)
    return model.gain_bandwidth_hz * math.sin(margin) * math.tan(margin)
