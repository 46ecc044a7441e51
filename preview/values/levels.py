"""Levels: dBu, dBV, peak and rms, the volts of full scale, and the supply.

One rule holds throughout: a level in dBu, dBV or V rms is that of a sine, whose peak is sqrt(2) times its
rms. So a sine at digital full scale peaks at the volts of full scale, as in AES17.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field

from preview.errors import NotationError
from preview.values.notation import clean_text, format_value, parse_value, quoted

__all__ = [
    "DBU_REFERENCE_VRMS",
    "FULL_SCALE_PRESETS",
    "FullScale",
    "dbfs_from_vpk",
    "dbu_from_vpk",
    "dbu_from_vrms",
    "dbv_from_vpk",
    "dbv_from_vrms",
    "format_db",
    "format_volts",
    "full_scale_comment",
    "full_scale_in_comment",
    "parse_full_scale",
    "parse_level",
    "parse_supply",
    "ratio_db",
    "ratio_from_db",
    "vpk_from_dbu",
    "vpk_from_vrms",
    "vrms_from_dbu",
    "vrms_from_dbv",
    "vrms_from_vpk",
]

DBU_REFERENCE_VRMS = math.sqrt(0.6)
"""0 dBu: 1 mW in 600 ohm, 0.7746 V rms."""

_LOWEST_V, _HIGHEST_V = 1e-6, 1e3
_WRITE = 'write "+18 dBu", "-10 dBV", "2 Vrms", "5 V" (peak) or "10 Vpp"'
_WRITE_SUPPLY = 'write "+15 -15", "±15" or "9" for a single supply'
_LEVEL = re.compile(r"([+-]?\s*(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,2})?)\s*(\D.*)?")
_VOLTS = re.compile(r"([pnumkK]?V|volts?)\s*(.*)")
_PEAK = {"", "pk", "p", "peak"}
_PEAK_TO_PEAK = {"pp", "p-p", "pk-pk", "pkpk", "ptp", "peaktopeak", "peak-to-peak"}
_RAIL = r"([+-]?\s*[0-9.]+\s*[A-Za-z]*[0-9]*)"
_TWO_RAILS = re.compile(rf"{_RAIL}(?:\s*[/;,]\s*|\s+|(?=[+-])){_RAIL}")
_IN_COMMENT = re.compile(r"\bfull scale:? +([^;,\n\r\0]+)", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class FullScale:
    """The volts that a sample of 1.0 stands for."""

    volts: float
    """Peak volts of a sample of 1.0."""
    text: str
    """As it is written: ``+18 dBu``; ``parse_full_scale`` reads it back."""
    about: str = field(default="", compare=False)
    """Where the figure is used, in words."""


def ratio_db(ratio: float) -> float:
    """A voltage ratio (0 or more) in dB; -inf for 0."""
    return 20.0 * math.log10(ratio) if ratio != 0.0 else -math.inf


def ratio_from_db(gain_db: float) -> float:
    """The voltage ratio of a gain in dB."""
    return float(10.0 ** (gain_db / 20.0))


def vpk_from_vrms(level_vrms: float) -> float:
    """Peak of a sine of that rms level [V]."""
    return level_vrms * math.sqrt(2.0)


def vrms_from_vpk(level_vpk: float) -> float:
    """RMS level of a sine of that peak [V]."""
    return level_vpk / math.sqrt(2.0)


def dbu_from_vrms(level_vrms: float) -> float:
    """Level in dBu of a voltage in V rms; -inf for 0."""
    return ratio_db(level_vrms / DBU_REFERENCE_VRMS)


def vrms_from_dbu(level_dbu: float) -> float:
    """Voltage in V rms of a level in dBu."""
    return DBU_REFERENCE_VRMS * ratio_from_db(level_dbu)


def dbv_from_vrms(level_vrms: float) -> float:
    """Level in dBV (re 1 V rms) of a voltage in V rms; -inf for 0."""
    return ratio_db(level_vrms)


def vrms_from_dbv(level_dbv: float) -> float:
    """Voltage in V rms of a level in dBV."""
    return ratio_from_db(level_dbv)


def dbu_from_vpk(level_vpk: float) -> float:
    """Level in dBu of the sine with that peak [V]; -inf for 0."""
    return dbu_from_vrms(vrms_from_vpk(level_vpk))


def dbv_from_vpk(level_vpk: float) -> float:
    """Level in dBV of the sine with that peak [V]; -inf for 0."""
    return dbv_from_vrms(vrms_from_vpk(level_vpk))


def vpk_from_dbu(level_dbu: float) -> float:
    """Peak volts of a sine at a level in dBu."""
    return vpk_from_vrms(vrms_from_dbu(level_dbu))


def dbfs_from_vpk(level_vpk: float, full_scale_v: float) -> float:
    """Peak level in dB re full scale [dBFS]; -inf for 0."""
    return ratio_db(level_vpk / full_scale_v)


def format_volts(volts: float, *, digits: int = 3) -> str:
    """Volts with prefix and a steady number of digits: ``8.70 V``, ``12.3 mV``."""
    return format_value(volts, "voltage", digits=digits, fixed=True)


def format_db(level_db: float, unit: str = "dB", *, decimals: int = 1) -> str:
    """A level with its unit: ``-12.3 dB``, ``+4.0 dBu`` (levels carry a plus), ``-inf dB``."""
    if math.isinf(level_db) or math.isnan(level_db):
        return f"{level_db} {unit}"
    rounded = round(level_db, decimals) + 0.0  # + 0.0 turns -0.0 into 0.0
    sign = "+" if unit != "dB" and rounded > 0.0 else ""
    return f"{sign}{rounded:.{decimals}f} {unit}"


def parse_level(text: str) -> float:
    """Peak volts of a sine at the level that the text gives; see ``parse_full_scale``."""
    return _level(text)[0]


def parse_full_scale(text: str) -> FullScale:
    """Full scale from text: ``+18 dBu``, ``-10 dBV``, ``2 Vrms``, ``5 V`` (peak), ``10 Vpp``, ``500 mV``.

    dBu, dBV and V rms are the level of a sine at full scale; its peak, sqrt(2) times the rms, is full scale.

    Raises
    ------
    NotationError
        No unit, a unit that does not lead to volts, or outside 1 uV to 1 kV.
    """
    return FullScale(*_level(text))


def full_scale_comment(full_scale: FullScale) -> str:
    """What is written into a file's comment so that the scale travels with it."""
    return f"full scale {full_scale.text}"


def full_scale_in_comment(comment: str) -> FullScale | None:
    """The full scale that a file's comment states (``full scale +18 dBu``), None where it states none."""
    found = _IN_COMMENT.search(comment)
    if found is None:
        return None
    try:
        return parse_full_scale(found[1].strip().rstrip("."))
    except NotationError:
        return None


def parse_supply(text: str) -> tuple[float, float]:
    """Positive and negative rail [V]: ``+15 -15``, ``±15``, ``15 V -15 V``, ``9`` (single, 9 V and 0 V).

    Raises
    ------
    NotationError
        Not one or two voltages, both rails on one side of 0 V, or a rail beyond 1 kV.
    """
    body = clean_text(text, _WRITE_SUPPLY)
    both = re.fullmatch(r"(?:\N{PLUS-MINUS SIGN}|\+/-|\+-)\s*([0-9.].*)", body)
    two = _TWO_RAILS.fullmatch(body)
    if both is not None:
        rail_v = _rail(text, both[1])
        positive_v, negative_v = rail_v, -rail_v
    elif two is not None:
        first_v, second_v = _rail(text, two[1]), _rail(text, two[2])
        positive_v, negative_v = max(first_v, second_v), min(first_v, second_v)
    else:
        positive_v, negative_v = _rail(text, body), 0.0
        if positive_v < 0.0:
            raise NotationError(f"{quoted(text)}: one negative rail", 'write "0 -9", or "±9" for both rails')
    if positive_v < 0.0 or negative_v > 0.0:
        raise NotationError(f"{quoted(text)}: both rails are on one side of 0 V", _WRITE_SUPPLY)
    if positive_v == negative_v:
        raise NotationError(f"{quoted(text)}: no volts between the rails", _WRITE_SUPPLY)
    return positive_v, negative_v + 0.0


def _rail(text: str, part: str) -> float:
    try:
        rail_v = parse_value(part, "voltage")
    except NotationError as error:
        reason = error.message.partition(": ")[2]
        raise NotationError(f"{quoted(text)}: {reason}", _WRITE_SUPPLY) from error
    if abs(rail_v) > _HIGHEST_V:
        raise NotationError(f"{quoted(text)}: a rail beyond 1 kV", _WRITE_SUPPLY)
    return rail_v


def _level(text: str) -> tuple[float, str]:
    """Peak volts and the level written in the house's way."""
    body = clean_text(text, _WRITE)
    found = _LEVEL.fullmatch(body)
    if found is None:
        raise NotationError(f"{quoted(text)}: not a level", _WRITE)
    number, unit = float(found[1].replace(" ", "")), (found[2] or "").strip()
    if not unit:
        raise NotationError(f"{quoted(text)}: no unit; could be volts, dBu or dBV", _WRITE)
    if unit.lower().startswith("db"):
        peak_v, written = _decibels(text, number, unit)
    else:
        peak_v, written = _volts(text, body, unit)
    if not _LOWEST_V * (1.0 - 1e-12) <= peak_v <= _HIGHEST_V * (1.0 + 1e-12):
        raise NotationError(f"{quoted(text)}: outside 1 uV to 1 kV peak", _WRITE)
    return peak_v, written


def _decibels(text: str, number: float, unit: str) -> tuple[float, str]:
    if not abs(number) < 1000.0:
        raise NotationError(f"{quoted(text)}: outside 1 uV to 1 kV peak", _WRITE)
    if unit.lower() == "dbu":
        return vpk_from_vrms(vrms_from_dbu(number)), f"{number:+.10g} dBu"
    if unit in ("dBV", "dbV"):
        return vpk_from_vrms(vrms_from_dbv(number)), f"{number:+.10g} dBV"
    if unit.lower() == "dbv":
        raise NotationError(
            f"{quoted(text)}: '{unit}' could be dBV (re 1 V) or the older name of dBu (re 0.775 V)",
            "write dBV or dBu",
        )
    if unit.lower() == "dbfs":
        raise NotationError(f"{quoted(text)}: dBFS is counted from full scale and gives no volts", _WRITE)
    if unit.lower() == "dbm":
        raise NotationError(
            f"{quoted(text)}: dBm is a power and needs an impedance",
            "in 600 ohm it is the same number in dBu",
        )
    raise NotationError(f"{quoted(text)}: no such unit '{unit}'", _WRITE)


def _volts(text: str, body: str, unit: str) -> tuple[float, str]:
    found = _VOLTS.fullmatch(unit)
    kind = found[2].lower().replace(" ", "") if found is not None else None
    if found is None or kind not in _PEAK | _PEAK_TO_PEAK | {"rms"}:
        raise NotationError(f"{quoted(text)}: no such unit '{unit}'", _WRITE)
    volts = parse_value(body[: len(body) - len(unit)] + found[1], "voltage")
    if volts <= 0.0:
        raise NotationError(f"{quoted(text)}: full scale is above zero volts", _WRITE)
    shown = format_value(volts, "voltage", digits=10)
    if kind == "rms":
        return vpk_from_vrms(volts), f"{shown}rms"
    if kind in _PEAK_TO_PEAK:
        return volts / 2.0, f"{shown}pp"
    return volts, f"{shown} peak"


FULL_SCALE_PRESETS: tuple[FullScale, ...] = tuple(
    FullScale(*_level(text), about=about)
    for text, about in (
        ("+18 dBu", "European broadcast and studio, EBU R 68"),
        ("+24 dBu", "American studio and film, SMPTE RP 155 alignment"),
        ("+22 dBu", "many studio converters"),
        ("+15 dBu", "German broadcast practice"),
        ("2 Vrms", "disc player and home equipment"),
        ("-10 dBV", "home line level at its reference, no headroom"),
        ("5 V", "measuring amplifier, peak"),
        ("10 V", "instrumentation converter, peak"),
    )
)
"""Full scales in common use; each is a fact of the trade but for those with a standard beside them."""
