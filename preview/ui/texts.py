"""Figures, nodes and parts in words, for the panels and for the line mode."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from preview.circuit.nodes import GND, IN
from preview.circuit.parts import OpAmp, Part, Potentiometer
from preview.errors import printable
from preview.ui.figures import Figures, heard_band_hz
from preview.ui.words import db, hertz, kilohertz, percent, value, volts

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["corner_text", "gain_text", "heard_text", "node_lines", "part_line"]


def corner_text(figures: Figures) -> str:
    """The corners of one circuit: ``1.59 kHz``, or ``none``."""
    return " and ".join(hertz(corner_hz) for corner_hz in figures.corners_hz) or "none"


def gain_text(figures: Figures) -> str:
    return f"{db(figures.passband_gain_db)} dB" if math.isfinite(figures.passband_gain_db) else "none"


def heard_text(figures: Figures) -> str:
    """How near the running computation comes to the circuit."""
    if figures.error_db is None:
        return "heard response: known once the recording runs"
    bound_db = max(1e-4, math.ceil(figures.error_db * 1e4 - 1e-9) / 1e4)  # "within" is rounded up
    digits = f"{bound_db:.4f}" if bound_db < 0.01 else f"{math.ceil(bound_db * 1e3 - 1e-9) / 1e3:.3f}"
    band = kilohertz(heard_band_hz(figures.sample_rate_hz))
    return f"heard response within {digits} dB of the circuit to {band} ({figures.quality})"


def node_lines(desk: Desk) -> list[str]:
    """Direct voltage of each node without a signal, and its highest peak: as heard, or over the whole passage."""
    now, snapshot, circuit = desk.figures.now, desk.snapshot, desk.circuit()
    peaks: dict[str, float] = {}
    if snapshot is not None:
        readings = {reading.designator: reading.peak_v for reading in snapshot.opamps}
        peaks = {site.out: readings[site.designator] for site in desk.sites() if site.designator in readings}
        driven = circuit.input_node if circuit is not None else IN  # the meter is at the ideal source
        peaks[driven] = max(snapshot.input.hold_v, default=0.0)
        if not snapshot.bypass:
            peaks[desk.session.output] = max(snapshot.output.hold_v, default=0.0)
    found = desk.node_peaks
    if found is not None and found.letter != desk.candidates.letter:
        found = None
    probed: dict[str, float] = {}
    if found is not None:
        extremes = zip(found.nodes, found.high_v, found.low_v, strict=True)
        probed = {name: max(abs(high_v), abs(low_v)) for name, high_v, low_v in extremes if name not in peaks}
    rest_v = now.rest_v if now is not None else {}
    names = [name for name in rest_v if name != GND] or sorted(peaks)
    cells = max([4, *(len(name) for name in names)])
    lines = [f"{'node':<{cells}}{'direct':>10}{'peak':>10}"]
    for name in names:
        rest = volts(rest_v[name]) if name in rest_v else "-"
        peak = volts(peaks[name]) if name in peaks else f"{volts(probed[name])}*" if name in probed else "-"
        lines.append(f"{printable(name):<{cells}}{rest:>10}{peak:>{11 if peak.endswith('*') else 10}}")
    if found is not None and probed:
        done = "" if found.done_ratio == 1.0 else f", {percent(found.done_ratio)} so far"
        lines.append(f"* {_passage(desk)}{done}")
    return lines


def _passage(desk: Desk) -> str:
    """What the peaks at inner nodes are looked for in."""
    session = desk.session
    if session.live:
        return "last 10 s"
    if session.stimulus is not None:
        return "test signal"
    return "loop region" if desk.listening.region else "whole recording"


def part_line(part: Part, name_cells: int = 0, value_cells: int = 0) -> str:
    """A part in words, in columns of these widths: what it is, and where it is connected."""
    return f"{part.designator:<{name_cells}}  {value(part):<{value_cells}}  {_connections(part)}"


def _connections(part: Part) -> str:
    """Where it is connected, in words."""
    if isinstance(part, OpAmp):
        return f"+ {part.plus}, - {part.minus}, out {part.out}"
    wiper = f", wiper {part.wiper}" if isinstance(part, Potentiometer) else ""
    return f"from {part.nodes[0]} to {part.nodes[1]}{wiper}"
