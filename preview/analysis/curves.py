"""The curves of a session's circuit for a picture: as driven and loaded, as drawn, and its step."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from preview.analysis.answers import drawn_circuit
from preview.analysis.response import SEARCH_HZ, Response, analyse, find_corners
from preview.analysis.step import step_curve, step_figures
from preview.circuit.cascade import stage_outputs
from preview.errors import CircuitError
from preview.network.linear import linear
from preview.session import Session

__all__ = ["Curves", "curves", "span_hz"]

Real = NDArray[np.float64]

_LEAST_SPAN_HZ = (10.0, 100e3)
_STEP_POINTS = 1201


@dataclass(frozen=True, slots=True)
class Curves:
    """What there is to draw."""

    driven: Response
    """As driven and loaded."""
    drawn: Response | None
    """From an ideal source without a load; None where that is the same."""
    stages: tuple[tuple[str, Response], ...]
    """Up to the output of each stage of a cascade but the last, by node."""
    step: tuple[Real, Real] | None
    """Times [s] and output after a step of 1 V [V]; None where it comes to no rest."""


def span_hz(corners_hz: Sequence[float]) -> tuple[float, float]:
    """A frequency axis of whole decades: 10 Hz to 100 kHz, and a decade beyond every corner."""
    low, high = _LEAST_SPAN_HZ
    if corners_hz:
        low = min(low, 10.0 ** math.floor(math.log10(corners_hz[0]) - 1.0))
        high = max(high, 10.0 ** math.ceil(math.log10(corners_hz[-1]) + 1.0))
    return max(low, SEARCH_HZ[0]), min(high, SEARCH_HZ[1])


def curves(session: Session, most: int) -> Curves:
    """The curves of a session's circuit at so many frequencies at most, each decade alike; raises CircuitError."""
    circuit, drawn = session.netlist(), drawn_circuit(session)
    corners = sorted(f for net in (circuit, drawn) if net is not None for f in find_corners(net)[1])
    low, high = span_hz(corners)
    decades = round(math.log10(high / low))
    f = np.geomspace(low, high, decades * ((most - 1) // decades) + 1)
    between = stage_outputs(session.stage)[:-1]
    step = None
    try:
        system = linear(circuit)
    except CircuitError:
        pass  # a gain that rises without end
    else:
        figures = step_figures(system)
        if figures is not None and figures.settling_0_1_percent_s > 0.0:
            step = step_curve(system, 1.25 * figures.settling_0_1_percent_s, _STEP_POINTS)
    return Curves(
        driven=analyse(circuit, f),
        drawn=None if drawn is None else analyse(drawn, f),
        stages=tuple((node, analyse(replace(circuit, output_node=node), f)) for node in between),
        step=step,
    )
