"""Figures for what an op-amp file does not give, one set a class of op-amp. All are from memory.

They are what a part of the class usually shows, so that a missing line in a file does not make the part
perfect; wherever one is used, its field is named in ``OpAmpModel.assumed``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

__all__ = ["CLASSES", "ELEMENTARY_CHARGE_C", "OpAmpClass", "shot_noise_a_rthz"]

ELEMENTARY_CHARGE_C = 1.602176634e-19
"""Charge of an electron, exact in the SI of 2019 [C]."""


@dataclass(frozen=True, slots=True)
class OpAmpClass:
    """What is assumed of a type of the class where its file gives nothing."""

    about: str
    """What parts are of this class."""
    reason: str
    """Why these figures."""
    figures: dict[str, float | str]
    """Field of ``OpAmpModel`` and its value, SI units."""
    offset_current_ratio: float
    """Offset current as a share of the bias current."""
    test_supply_v: tuple[float, float] = (15.0, -15.0)
    """Rails that data sheets of the class usually state the output swing on, its load going to gnd [V]."""


def shot_noise_a_rthz(current_a: float) -> float:
    """Noise density of the shot noise of a current, ``sqrt(2 q I)`` [A/sqrt(Hz)].

    References
    ----------
    [Schottky1918]
    """
    return math.sqrt(2.0 * ELEMENTARY_CHARGE_C * abs(current_a))


CLASSES: dict[str, OpAmpClass] = {
    "bipolar": OpAmpClass(
        about="bipolar input, general or audio, on supplies of about ±15 V",
        reason="what general and audio bipolar types commonly show",
        figures={
            "open_loop_gain": 1e5,
            "output_resistance_ohm": 50.0,
            "swing_high_v": 1.5,
            "swing_low_v": 1.5,
            "current_source_a": 0.025,
            "current_sink_a": 0.025,
            "phase_margin_deg": 60.0,
            "input_farad": 2e-12,
            "input_differential_farad": 2e-12,
            "input_overdrive": "clips",
            "crossover_v": 0.0,
            "crossover_a": 0.0,
            "offset_v": 1e-3,
            "bias_a": 200e-9,
            "noise_v_rthz": 8e-9,
            "noise_corner_hz": 50.0,
            "noise_current_corner_hz": 500.0,
            "input_low_v": 1.5,
            "input_high_v": 1.5,
            "supply_min_v": 6.0,
            "supply_max_v": 36.0,
            "supply_current_a": 2.5e-3,
        },
        offset_current_ratio=0.1,
    ),
    "precision": OpAmpClass(
        about="bipolar input with trimmed offset and cancelled bias current",
        reason="what precision bipolar types commonly show",
        figures={
            "open_loop_gain": 1e6,
            "output_resistance_ohm": 60.0,
            "swing_high_v": 2.0,
            "swing_low_v": 2.0,
            "current_source_a": 0.025,
            "current_sink_a": 0.025,
            "phase_margin_deg": 60.0,
            "input_farad": 2e-12,
            "input_differential_farad": 2e-12,
            "input_overdrive": "clips",
            "crossover_v": 0.0,
            "crossover_a": 0.0,
            "offset_v": 30e-6,
            "bias_a": 5e-9,
            "noise_v_rthz": 8e-9,
            "noise_corner_hz": 10.0,
            "noise_current_corner_hz": 100.0,
            "input_low_v": 1.5,
            "input_high_v": 1.5,
            "supply_min_v": 6.0,
            "supply_max_v": 36.0,
            "supply_current_a": 2.5e-3,
        },
        offset_current_ratio=0.5,
    ),
    "single-supply": OpAmpClass(
        about="bipolar with a PNP input that works down to the negative rail",
        reason="what single-supply bipolar types commonly show",
        figures={
            "open_loop_gain": 1e5,
            "output_resistance_ohm": 300.0,
            "swing_high_v": 1.5,
            "swing_low_v": 0.02,
            "current_source_a": 0.02,
            "current_sink_a": 0.02,
            "phase_margin_deg": 60.0,
            "input_farad": 2e-12,
            "input_differential_farad": 1e-12,
            "input_overdrive": "clips",
            "crossover_v": 0.0,
            "crossover_a": 0.0,
            "offset_v": 2e-3,
            "bias_a": -45e-9,
            "noise_v_rthz": 40e-9,
            "noise_corner_hz": 100.0,
            "noise_current_corner_hz": 500.0,
            "input_low_v": 0.0,
            "input_high_v": 1.5,
            "supply_min_v": 3.0,
            "supply_max_v": 32.0,
            "supply_current_a": 0.5e-3,
        },
        offset_current_ratio=0.1,
        test_supply_v=(5.0, 0.0),
    ),
    "jfet": OpAmpClass(
        about="P-channel JFET input, on supplies of about ±15 V",
        reason="what JFET-input types commonly show",
        figures={
            "open_loop_gain": 1.5e5,
            "output_resistance_ohm": 100.0,
            "swing_high_v": 1.5,
            "swing_low_v": 1.5,
            "current_source_a": 0.025,
            "current_sink_a": 0.025,
            "phase_margin_deg": 60.0,
            "input_farad": 5e-12,
            "input_differential_farad": 3e-12,
            "input_overdrive": "clips",
            "crossover_v": 0.0,
            "crossover_a": 0.0,
            "offset_v": 3e-3,
            "bias_a": 30e-12,
            "noise_v_rthz": 18e-9,
            "noise_corner_hz": 100.0,
            "noise_current_corner_hz": 0.0,
            "input_low_v": 3.0,
            "input_high_v": 0.0,
            "supply_min_v": 7.0,
            "supply_max_v": 36.0,
            "supply_current_a": 1.8e-3,
        },
        offset_current_ratio=0.2,
    ),
    "cmos": OpAmpClass(
        about="CMOS input, output that comes near both rails",
        reason="what CMOS types commonly show",
        figures={
            "open_loop_gain": 3e5,
            "output_resistance_ohm": 200.0,
            "swing_high_v": 0.03,
            "swing_low_v": 0.03,
            "current_source_a": 0.02,
            "current_sink_a": 0.02,
            "phase_margin_deg": 60.0,
            "input_farad": 6e-12,
            "input_differential_farad": 3e-12,
            "input_overdrive": "clips",
            "crossover_v": 0.0,
            "crossover_a": 0.0,
            "offset_v": 1e-3,
            "bias_a": 1e-12,
            "noise_v_rthz": 28e-9,
            "noise_corner_hz": 1e3,
            "noise_current_corner_hz": 0.0,
            "input_low_v": 0.0,
            "input_high_v": 0.0,
            "supply_min_v": 1.8,
            "supply_max_v": 5.5,
            "supply_current_a": 0.5e-3,
        },
        offset_current_ratio=1.0,
        test_supply_v=(2.5, -2.5),
    ),
}
"""Every class that ``class`` can name. Current noise is assumed to be the shot noise of the bias current."""
