"""Numbers and short phrases as the desk writes them."""

from __future__ import annotations

import math
from pathlib import Path

from preview.circuit.limits import QUANTITY
from preview.circuit.opamp_library import is_path
from preview.circuit.opamp_units import format_figure
from preview.circuit.parts import Diode, FixedVoltage, OpAmp, Part, Potentiometer, Supply, TwoTerminal
from preview.circuit.settings import setting_text
from preview.errors import printable
from preview.values.levels import FullScale, dbu_from_vrms, format_volts
from preview.values.notation import format_code, format_value

__all__ = [
    "clock",
    "code",
    "db",
    "dbu",
    "duration",
    "full_scale",
    "hertz",
    "kilohertz",
    "limits",
    "milliamperes",
    "percent",
    "rails",
    "scale_volts",
    "slew_of",
    "type_name",
    "value",
    "volts",
]

_SMALLEST_V = 1e-6
"""Below this a level is written as none [V]."""


def volts(level_v: float) -> str:
    """A voltage with three digits: ``8.70 V``, ``512 mV``."""
    if math.isinf(level_v):
        return "no limit"
    return format_volts(level_v) if abs(level_v) >= _SMALLEST_V else "0 V"


def scale_volts(level_v: float) -> str:
    """A round voltage for a scale: ``10m``, ``1``, ``30``."""
    return f"{level_v * 1e3:.0f}m" if level_v < 0.0995 else f"{level_v:.3g}"


def value(part: Part) -> str:
    """What a part is: ``4.7 kΩ``, ``10 kΩ at 50 %``, ``open``, ``signal`` or ``TL072``."""
    match part:
        case OpAmp():
            return type_name(part.type)
        case Diode():
            return part.type
        case FixedVoltage():
            return volts(part.value)
        case Potentiometer():
            return f"{format_value(part.value, 'resistance', digits=4)} at {setting_text(part)}"
    return setting_text(part)


def code(part: Part) -> str:
    """A part's value as a code, ``4k7``; what has none as briefly as can be."""
    if isinstance(part, TwoTerminal):
        return format_code(part.value, QUANTITY[part.kind])
    return setting_text(part) if isinstance(part, Potentiometer) else value(part)


def db(level_db: float) -> str:
    """A level difference with one decimal; ``-`` where there is none."""
    return f"{round(level_db, 1) + 0.0:.1f}" if math.isfinite(level_db) else "-"


def dbu(level_vrms: float) -> str:
    """A level in dBu with sign and one decimal; ``-`` for silence."""
    return f"{dbu_from_vrms(level_vrms):+.1f}" if level_vrms >= _SMALLEST_V else "-"


def percent(ratio: float) -> str:
    """A share of a limit: ``15 %``, ``<1 %``."""
    return "<1 %" if 0.0 < ratio < 0.005 else f"{100.0 * ratio:.0f} %"


def clock(seconds: float) -> str:
    """A time on the recording: ``0:03.2``, ``1:02:03``."""
    tenths = max(0, int(seconds * 10.0 + 1e-6))
    if tenths >= 36000:
        return f"{tenths // 36000}:{tenths // 600 % 60:02d}:{tenths // 10 % 60:02d}"
    return f"{tenths // 600}:{tenths // 10 % 60:02d}.{tenths % 10}"


def duration(seconds: float) -> str:
    """A length of time with its unit: ``0 ms``, ``<0.1 ms``, ``3.4 ms``, ``1.20 s``."""
    if 0.0 < seconds < 0.00005:
        return "<0.1 ms"
    if seconds < 0.9995:
        return f"{seconds * 1e3:.{1 if 0.0 < seconds < 0.00995 else 0}f} ms"
    return f"{seconds:.{2 if seconds < 99.5 else 0}f} s"


def hertz(frequency_hz: float) -> str:
    """A frequency with three digits: ``159 Hz``, ``1.59 kHz``."""
    return format_value(frequency_hz, "frequency", fixed=True)


def kilohertz(frequency_hz: float) -> str:
    """A sample rate or band edge, short: ``44.1 kHz``, ``20 kHz``."""
    return f"{frequency_hz / 1e3:.4g} kHz"


def rails(supply: Supply) -> str:
    """A supply: ``±15 V``, ``+9 V / 0 V``."""
    if supply.positive_v == -supply.negative_v:
        return f"±{supply.positive_v:g} V"
    signed = [f"{rail_v:+g} V" if rail_v else "0 V" for rail_v in (supply.positive_v, supply.negative_v)]
    return " / ".join(signed)


def limits(low_v: float, high_v: float) -> str:
    """The lowest and highest voltage of an output: ``±14 V``, ``+7.5 V / +5 mV``."""
    if high_v == -low_v:
        return f"±{high_v:.3g} V"
    return " / ".join(
        ("+" if v > 0.0 else "") + format_value(v, "voltage") if v else "0 V" for v in (high_v, low_v)
    )


def slew_of(rate_v_per_s: float, limit_v_per_s: float) -> str:
    """A slew rate against its limit, to a hundredth of it or so: ``1.9 of 13 V/µs``."""
    decimals = max(0, 2 - math.floor(math.log10(limit_v_per_s / 1e6)))
    return f"{rate_v_per_s / 1e6:.{decimals}f} of {format_figure(limit_v_per_s, 'slew', digits=4)}"


def milliamperes(current_a: float) -> str:
    """An output current: ``1.24 mA``."""
    return f"{current_a * 1e3:.{2 if current_a < 9.995e-3 else 1}f} mA"


def type_name(kind: str) -> str:
    """The name of an op-amp type, short where it is a file's path, cleaned for the screen."""
    return printable(Path(kind).stem if is_path(kind) else kind)


def full_scale(scale: FullScale) -> str:
    """What full scale stands for: ``full scale +18 dBu = 8.70 V peak``."""
    if scale.text.endswith(" peak"):
        return f"full scale {scale.text}"
    return f"full scale {scale.text} = {volts(scale.volts)} peak"
