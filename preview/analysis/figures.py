"""The figures that a stage file can name in ``[[expect]]``, evaluated on the exact circuit."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from preview.analysis.response import SEARCH_HZ, find_corners
from preview.circuit.figures import parse_figure
from preview.circuit.netlist import Netlist, netlist
from preview.circuit.parts import Expect, Stage
from preview.network import transfer
from preview.network.stability import closed_loop_poles

__all__ = ["evaluate", "expected_figure"]


def _db(gain: complex) -> float:
    return 20.0 * math.log10(abs(gain)) if gain else -math.inf


def expected_figure(stage: Stage, expect: Expect) -> float:
    """What a stage comes to for a figure it is held to, with the settings, output and op-amps it holds for."""
    if expect.opamp:
        for opamp in stage.opamps:
            stage = stage.with_part(replace(opamp, type=expect.opamp))
    circuit = netlist(stage, output=expect.output).with_values(dict(expect.parts))
    return evaluate(circuit, expect.what)


def evaluate(netlist: Netlist, what: str) -> float:
    """Value of a figure, in the unit that ends its name.

    Raises
    ------
    ValueError
        No such figure, or the response has no such peak, notch, pair of poles or number of corners.
    """
    figure = parse_figure(what)
    if figure.at_hz is not None:
        return _at(netlist, figure.name, np.array([figure.at_hz]))
    match figure.name:
        case "dc_gain_db":
            return _db(complex(transfer.response(netlist, [0.0])[0]))
        case "passband_gain_db":
            return find_corners(netlist)[0]
        case "peak_hz":
            return _turning_point(netlist, -1)[0]
        case "notch_hz":
            return _turning_point(netlist, +1)[0]
        case "notch_gain_db":
            return _turning_point(netlist, +1)[1]
        case "f0_hz" | "q" | "low_q_f0_hz" | "low_q":
            return _of_poles(netlist, figure.name)
    corners = find_corners(netlist)[1]
    wanted = 1 if figure.name == "corner_hz" else 2
    if len(corners) != wanted:
        raise ValueError(f"{what} wants {wanted} corner(s), the response has {len(corners)}")
    if figure.name == "bandwidth_hz":
        return corners[-1] - corners[0]
    return corners[-1] if figure.name == "high_corner_hz" else corners[0]


def _at(netlist: Netlist, name: str, f: NDArray[np.float64]) -> float:
    """A figure at one frequency [Hz], shape (1,)."""
    match name:
        case "gain_db":
            return _db(complex(transfer.response(netlist, f)[0]))
        case "phase_deg":
            return float(np.angle(transfer.response(netlist, f)[0], deg=True))
        case "group_delay_s":
            return float(transfer.group_delay(netlist, f)[0])
    ohm = transfer.input_impedance if name == "input_impedance_ohm" else transfer.output_impedance
    return float(np.abs(ohm(netlist, f)[0]))


def _turning_point(netlist: Netlist, sign: int) -> tuple[float, float]:
    """Where the gain is least (``sign`` +1) or largest (-1) between the ends of the range searched [Hz, dB]."""

    def turned(f: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(sign * np.abs(transfer.response(netlist, f)), dtype=np.float64)

    f = np.geomspace(*SEARCH_HZ, 1101)
    gain = turned(f)
    at = int(np.argmin(gain))
    if not gain[at] < (1.0 - 1e-6 * sign) * min(gain[0], gain[-1]):
        raise ValueError("the gain has no notch" if sign > 0 else "the gain has no peak")
    lower, upper = f[at - 1], f[at + 1]
    for _ in range(6):
        f = np.geomspace(lower, upper, 33)
        gain = turned(f)
        at = int(np.argmin(gain))
        lower, upper = f[max(at - 1, 0)], f[min(at + 1, 32)]
    return float(f[at]), _db(gain[at])


def _of_poles(netlist: Netlist, name: str) -> float:
    """Natural frequency [Hz] or Q of the pair of complex poles of highest or lowest Q."""
    poles = closed_loop_poles(netlist)
    pairs = poles[poles.imag > 1e-6 * np.abs(poles)]
    if not pairs.size:
        raise ValueError("the circuit has no pair of complex poles")
    q = -np.abs(pairs) / (2.0 * pairs.real)
    at = int(np.argmin(q) if name.startswith("low") else np.argmax(q))
    return float(q[at] if name.endswith("q") else np.abs(pairs[at]) / (2.0 * np.pi))
