"""The figures that a stage file can name in ``[[expect]]``, evaluated on the exact circuit."""

from __future__ import annotations

import math

import numpy as np

from preview.analysis.response import find_corners
from preview.circuit.figures import parse_figure
from preview.circuit.netlist import Netlist
from preview.network import transfer

__all__ = ["evaluate"]


def _db(gain: complex) -> float:
    return 20.0 * math.log10(abs(gain)) if gain else -math.inf


def evaluate(netlist: Netlist, what: str) -> float:
    """Value of a figure, in the unit that ends its name.

    Raises
    ------
    ValueError
        No such figure, or the response has more or fewer corners than the figure's name says.
    """
    figure = parse_figure(what)
    if figure.at_hz is not None:
        f = np.array([figure.at_hz])
        if figure.name == "gain_db":
            return _db(complex(transfer.response(netlist, f)[0]))
        if figure.name == "phase_deg":
            return float(np.angle(transfer.response(netlist, f)[0], deg=True))
        if figure.name == "group_delay_s":
            return float(transfer.group_delay(netlist, f)[0])
        ohm = transfer.input_impedance if figure.name == "input_impedance_ohm" else transfer.output_impedance
        return float(np.abs(ohm(netlist, f)[0]))
    if figure.name == "dc_gain_db":
        return _db(complex(transfer.response(netlist, [0.0])[0]))
    passband_db, corners = find_corners(netlist)
    if figure.name == "passband_gain_db":
        return passband_db
    wanted = 1 if figure.name == "corner_hz" else 2
    if len(corners) != wanted:
        raise ValueError(f"{what} wants {wanted} corner(s), the response has {len(corners)}")
    return corners[-1] if figure.name == "high_corner_hz" else corners[0]
