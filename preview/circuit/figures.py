"""The vocabulary of ``what`` in an ``[[expect]]``: the figures that a stage can be held to.

A figure without a frequency is written as it is (``corner_hz``); one at a frequency carries it in hertz,
plain digits, between ``at`` and ``hz``: ``gain_db_at_1000_hz``, ``phase_deg_at_31.5_hz``.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from difflib import get_close_matches

__all__ = ["FIGURES", "FIGURES_AT", "Figure", "parse_figure"]

FIGURES: dict[str, str] = {
    "corner_hz": "the one frequency at which the gain is 3.01 dB (a factor of sqrt 2) below passband_gain_db",
    "low_corner_hz": "the lower of two such frequencies",
    "high_corner_hz": "the higher of two such frequencies",
    "passband_gain_db": "the largest gain up to 100 kHz; at any frequency where it still rises steeply there",
    "dc_gain_db": "the gain at 0 Hz",
    "peak_hz": "the frequency of the largest gain",
    "bandwidth_hz": "high_corner_hz less low_corner_hz; the width of a notch too",
    "notch_hz": "the frequency of the least gain between two frequencies at which it is larger",
    "notch_gain_db": "the gain there",
    "f0_hz": "natural frequency of the pair of complex poles of highest Q, op-amps without limits",
    "q": "its Q: the natural frequency over twice the decay rate; no unit",
    "low_q_f0_hz": "natural frequency of the pair of complex poles of lowest Q, op-amps without limits",
    "low_q": "its Q",
}
"""Figures of the whole response, each with its meaning; the unit ends the name."""

FIGURES_AT: dict[str, str] = {
    "gain_db": "magnitude of the voltage gain from in to out",
    "phase_deg": "phase of out against in, above -180 to 180; 180 at an inverting stage's passband",
    "group_delay_s": "minus the slope of the phase over angular frequency",
    "input_impedance_ohm": "magnitude of the impedance that the source sees at in",
    "output_impedance_ohm": "magnitude of the impedance that the load sees at out",
}
"""Figures at one frequency, written ``<figure>_at_<frequency>_hz``, each with its meaning."""

_UNITS = {"hz": "Hz", "db": "dB", "deg": "deg", "s": "s", "ohm": "ohm", "q": ""}
_AT = re.compile(r"(?P<name>[a-z_]+?)_at_(?P<hz>[0-9]{1,10}(?:\.[0-9]{1,6})?)_hz", re.ASCII)


@dataclass(frozen=True, slots=True)
class Figure:
    """A figure's name taken apart."""

    name: str
    """A key of ``FIGURES`` or ``FIGURES_AT``."""
    unit: str
    """Hz, dB, deg, s or ohm; empty for a ratio."""
    at_hz: float | None = None
    """The frequency it is taken at [Hz]; None for a figure of the whole response."""


def parse_figure(what: str) -> Figure:
    """The figure that ``what`` names.

    Raises
    ------
    ValueError
        No such figure; the text says which there are.
    """
    if what in FIGURES:
        return Figure(what, _UNITS[what.rpartition("_")[2]])
    if match := _AT.fullmatch(what):
        name, at_hz = match["name"], float(match["hz"])
        if name in FIGURES_AT and at_hz > 0.0:
            return Figure(name, _UNITS[name.rpartition("_")[2]], at_hz)
    written = [*FIGURES, *(f"{name}_at_1000_hz" for name in FIGURES_AT)]
    nearest = get_close_matches(what, written, n=1)
    start = f"did you mean {nearest[0]}? " if nearest else ""
    raise ValueError(f"{start}figures are {', '.join(written)}")
