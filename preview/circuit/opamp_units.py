"""The figures that an op-amp file can give: their names, their units, and what is taken for a slip."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

from preview.circuit.opamp import OVERDRIVES
from preview.errors import NotationError
from preview.values.notation import Kind, format_value, parse_value, quoted

__all__ = ["FIGURES", "FIGURE_FIELDS", "OpAmpFigure", "Unit", "format_figure", "parse_figure_value"]

Unit = Literal[
    "frequency",
    "gain",
    "slew",
    "resistance",
    "voltage",
    "current",
    "noise_voltage",
    "noise_current",
    "angle",
    "capacitance",
    "overdrive",
]

_TIMES = {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "μs": 1e-6, "ns": 1e-9}
_VOLTS = {"V": 1.0, "mV": 1e-3, "uV": 1e-6, "µV": 1e-6, "μV": 1e-6}
_ROOTS = ("rtHz", "√Hz")
_EXAMPLES: dict[Unit, str] = {
    "frequency": "4 MHz",
    "gain": "200 V/mV or 106 dB",
    "slew": "13 V/us",
    "resistance": "75 ohm",
    "voltage": "3 mV",
    "current": "30 pA",
    "noise_voltage": "18 nV/rtHz",
    "noise_current": "0.01 pA/rtHz",
    "angle": "60 deg",
    "capacitance": "5 pF",
    "overdrive": " or ".join(OVERDRIVES),
}


@dataclass(frozen=True, slots=True)
class OpAmpFigure:
    """One figure that an op-amp file can give."""

    unit: Unit
    """What it is written in."""
    low: float
    """Smallest value that is not taken for a slip, in SI units."""
    high: float
    """Largest such value."""
    meaning: str
    """What it is, in a few words."""


FIGURES: dict[str, OpAmpFigure] = {
    "gain_bandwidth": OpAmpFigure("frequency", 1e3, 1e10, "gain-bandwidth product"),
    "open_loop_gain": OpAmpFigure("gain", 10.0, 1e10, "open-loop voltage gain at 0 Hz"),
    "slew": OpAmpFigure("slew", 1e3, 1e11, "slew rate, both ways"),
    "slew_up": OpAmpFigure("slew", 1e3, 1e11, "slew rate of a rising output"),
    "slew_down": OpAmpFigure("slew", 1e3, 1e11, "slew rate of a falling output"),
    "output_resistance": OpAmpFigure("resistance", 0.0, 1e5, "open-loop output resistance"),
    "current_limit": OpAmpFigure("current", 1e-5, 100.0, "output current limit, both ways"),
    "current_source": OpAmpFigure("current", 1e-5, 100.0, "largest current out of the output"),
    "current_sink": OpAmpFigure("current", 1e-5, 100.0, "largest current into the output"),
    "phase_margin": OpAmpFigure("angle", 1.0, 90.0, "phase margin at unity gain"),
    "input_capacitance": OpAmpFigure("capacitance", 0.0, 1e-9, "capacitance of each input to gnd"),
    "input_differential_capacitance": OpAmpFigure("capacitance", 0.0, 1e-9, "capacitance between the inputs"),
    "overdrive": OpAmpFigure("overdrive", 0.0, 1.0, "beyond the common-mode range the output"),
    "crossover": OpAmpFigure("voltage", 0.0, 5.0, "dead zone between sourcing and sinking"),
    "crossover_current": OpAmpFigure("current", 0.0, 0.1, "current sunk before the dead zone"),
    "offset": OpAmpFigure("voltage", -0.1, 0.1, "input offset voltage"),
    "bias": OpAmpFigure("current", -1e-3, 1e-3, "input bias current, positive into the input"),
    "offset_current": OpAmpFigure("current", -1e-3, 1e-3, "input offset current"),
    "noise_voltage": OpAmpFigure("noise_voltage", 0.0, 1e-5, "input voltage noise density"),
    "noise_voltage_corner": OpAmpFigure("frequency", 0.0, 1e6, "1/f corner of the voltage noise"),
    "noise_current": OpAmpFigure("noise_current", 0.0, 1e-8, "input current noise density"),
    "noise_current_corner": OpAmpFigure("frequency", 0.0, 1e6, "1/f corner of the current noise"),
    "input_low": OpAmpFigure("voltage", -50.0, 50.0, "common-mode range: above the negative rail"),
    "input_high": OpAmpFigure("voltage", -50.0, 50.0, "common-mode range: below the positive rail"),
    "supply_min": OpAmpFigure("voltage", 0.1, 2000.0, "smallest supply, rail to rail"),
    "supply_max": OpAmpFigure("voltage", 0.1, 2000.0, "largest supply, rail to rail"),
    "supply_current": OpAmpFigure("current", 1e-9, 10.0, "supply current of one amplifier"),
}
"""Every key of ``[figures]``."""

FIGURE_FIELDS: dict[str, tuple[str, ...]] = {
    "gain_bandwidth_hz": ("gain_bandwidth",),
    "open_loop_gain": ("open_loop_gain",),
    "slew_up_v_per_s": ("slew_up", "slew"),
    "slew_down_v_per_s": ("slew_down", "slew"),
    "output_resistance_ohm": ("output_resistance",),
    "current_source_a": ("current_source", "current_limit"),
    "current_sink_a": ("current_sink", "current_limit"),
    "phase_margin_deg": ("phase_margin",),
    "input_farad": ("input_capacitance",),
    "input_differential_farad": ("input_differential_capacitance",),
    "input_overdrive": ("overdrive",),
    "crossover_v": ("crossover",),
    "crossover_a": ("crossover_current",),
    "offset_v": ("offset",),
    "bias_a": ("bias",),
    "offset_current_a": ("offset_current",),
    "noise_v_rthz": ("noise_voltage",),
    "noise_corner_hz": ("noise_voltage_corner",),
    "noise_a_rthz": ("noise_current",),
    "noise_current_corner_hz": ("noise_current_corner",),
    "input_low_v": ("input_low",),
    "input_high_v": ("input_high",),
    "supply_min_v": ("supply_min",),
    "supply_max_v": ("supply_max",),
    "supply_current_a": ("supply_current",),
}
"""Field of ``OpAmpModel`` and the keys it can come from; the swings come from the ``[[swing]]`` rows."""


def parse_figure_value(text: str, unit: Unit) -> float:
    """The value in SI units; NotationError, beginning with the quoted text, for one that cannot be read.

    An ``overdrive`` is the place of its word in ``OVERDRIVES``.
    """
    hint = f"write {_EXAMPLES[unit]}"
    if unit == "overdrive":
        word = text.strip().lower()
        if word not in OVERDRIVES:
            raise NotationError(f"{quoted(text)}: no such behaviour", hint)
        return float(OVERDRIVES.index(word))
    if unit == "slew":
        return _ratio(text, _TIMES, hint)
    if unit == "gain":
        if "/" in text:
            return _ratio(text, _VOLTS, hint)
        if text.strip().endswith("dB"):
            return float(10.0 ** (parse_value(text, "gain_db") / 20.0))
        raise NotationError(f"{quoted(text)}: no unit of a voltage gain", hint)
    if unit in ("noise_voltage", "noise_current"):
        head, _, tail = text.strip().partition("/")
        if tail.strip() not in _ROOTS:
            raise NotationError(f"{quoted(text)}: no density in it", hint)
        kind: Kind = "voltage" if unit == "noise_voltage" else "current"
        return _for_all(text, lambda: _with_unit(head, kind, hint))
    return _for_all(text, lambda: _with_unit(text, _KINDS[unit], hint))


_KINDS: dict[Unit, Kind] = {
    "frequency": "frequency",
    "resistance": "resistance",
    "voltage": "voltage",
    "current": "current",
    "angle": "angle",
    "capacitance": "capacitance",
}
_UNIT_ENDINGS: dict[Kind, tuple[str, ...]] = {
    "frequency": ("Hz",),
    "resistance": ("ohm", "Ω"),
    "voltage": ("V",),
    "current": ("A",),
    "angle": ("deg", "°"),
    "capacitance": ("F",),
}


def format_figure(value: float, unit: Unit, *, digits: int = 3) -> str:
    """The value with its unit, as a data sheet writes it: ``13 V/µs``, ``18 nV/√Hz``, ``106 dB``."""
    if unit == "overdrive":
        return OVERDRIVES[int(value)]
    if unit == "angle":
        return f"{value:.{digits}g}°"
    if unit == "slew":
        return f"{value / 1e6:.{digits}g} V/µs"
    if unit == "gain":
        return f"{20.0 * math.log10(value):.{digits}g} dB"
    if unit in ("noise_voltage", "noise_current"):
        prefix, scale = next(
            ((p, s) for p, s in (("n", 1e-9), ("p", 1e-12)) if abs(value) >= s), ("f", 1e-15)
        )
        letter = "V" if unit == "noise_voltage" else "A"
        return f"{value / scale:.{digits}g} {prefix}{letter}/√Hz"
    return format_value(value, _KINDS[unit], digits=digits)


def _with_unit(text: str, kind: Kind, hint: str) -> float:
    """A value whose unit is written out."""
    if not text.strip().endswith(_UNIT_ENDINGS[kind]):
        raise NotationError(f"{quoted(text)}: no unit", hint)
    return parse_value(text, kind, allow_zero=True)


def _ratio(text: str, per: dict[str, float], hint: str) -> float:
    """Volts over time or over volts."""
    head, _, tail = text.strip().partition("/")
    if tail.strip() not in per:
        raise NotationError(f"{quoted(text)}: no such unit", hint)
    return _for_all(text, lambda: _with_unit(head, "voltage", hint)) / per[tail.strip()]


def _for_all(text: str, read: Callable[[], float]) -> float:
    """What ``read`` makes of a piece of the text; its complaint quotes the whole."""
    try:
        return read()
    except NotationError as error:
        reason = error.message.rpartition('": ')[2]
        raise NotationError(f"{quoted(text)}: {reason}", error.hint) from error
