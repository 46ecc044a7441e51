"""The kinds of quantity, their units and the spellings that are understood for each."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

__all__ = ["KINDS", "PREFIXES", "TOLERANCE_LETTERS", "Kind", "Quantity"]

Kind = Literal[
    "resistance",
    "capacitance",
    "inductance",
    "voltage",
    "current",
    "frequency",
    "time",
    "percent",
    "gain_db",
    "angle",
    "temperature",
]

PREFIXES = {"p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12}
"""SI prefix to power of ten; ``u`` stands for both micro signs."""

_PREFIX_WORDS = {"pico": -12, "nano": -9, "micro": -6, "milli": -3, "": 0, "kilo": 3, "mega": 6, "giga": 9}

TOLERANCE_LETTERS = {
    "E": "0.005 %", "L": "0.01 %", "P": "0.02 %", "W": "0.05 %", "B": "0.1 %", "C": "0.25 %", "D": "0.5 %",
    "F": "1 %", "G": "2 %", "H": "3 %", "J": "5 %", "K": "10 %", "M": "20 %", "N": "30 %",
}  # fmt: skip
"""IEC 60062 clause 5, symmetrical tolerances: letter to half width of the band."""


@dataclass(frozen=True, slots=True)
class Quantity:
    """How one kind of quantity is written. Suffixes map a spelling to its power of ten."""

    noun: str
    """The quantity with its article: ``a resistance``."""
    symbol: str
    """Unit as printed: ``Ω``."""
    unit_word: str
    """SI base unit in full: ``ohm``."""
    written: str
    """Prefixes used when a value is printed, smallest first; ``_`` is none."""
    example: str
    """How to write one, for hints."""
    bare: dict[str, int]
    """Spellings without a unit, such as ``k``."""
    code: dict[str, int]
    """Letters that may stand in place of the decimal point."""
    units: dict[str, int]
    """Spellings with a unit, such as ``kΩ``."""
    words: dict[str, int]
    """Spellings in full and lower case, such as ``kiloohm``."""
    refused: dict[str, tuple[str, str]] = field(default_factory=dict)
    """Spellings with two readings: what they could mean, and how to write each (``{n}`` is the number)."""
    plain: bool = True
    """Whether a number without prefix, unit or exponent is clear enough."""
    signed: bool = False
    """Whether zero and negative values have a meaning."""


def _table(prefixes: str, *tails: str) -> dict[str, int]:
    """Each prefix letter (``_`` is none) before each tail; ``K`` goes with ``k``."""
    names = [("" if ch == "_" else ch) for ch in prefixes]
    table = {name + tail: PREFIXES[name] for name in names for tail in tails}
    return table | {"K" + key[1:]: power for key, power in table.items() if key.startswith("k")}


def _words(*units: str) -> dict[str, int]:
    return {word + unit: power for word, power in _PREFIX_WORDS.items() for unit in units}


_NO_MEGA_FARAD = (
    "'M' is mega, which no capacitor is; on old parts it meant micro",
    "write {n} uF for microfarad, {n} mF for millifarad",
)
_OLD_MICROFARAD = (
    "on old parts this meant microfarad, by the SI it is millifarad",
    "write {n} uF or {n} mF",
)
_MILLI_OR_MEG = (
    "'m' could be milliohm, or megohm typed in lower case",
    "write {n}M for megohm, {n}L or {n} mΩ for milliohm",
)
_MILLI_OR_MEGAHERTZ = ("could be millihertz or megahertz", "write {n} MHz or {n} mHz")

KINDS: dict[Kind, Quantity] = {
    "resistance": Quantity(
        noun="a resistance",
        symbol="Ω",
        unit_word="ohm",
        written="m_kMGT",
        example="4k7, 4.7k or 4700",
        bare={"R": 0, "r": 0, "L": -3, **_table("kMGT", "")},
        code={"R": 0, "r": 0, "L": -3, "Ω": 0, **_table("kMGT", "")},
        units=_table("um_kMGT", "Ω") | _table("_kMGT", "ohm", "ohms", "Ohm", "Ohms", "OHM"),
        words=_words("ohm", "ohms") | {"kilohm": 3, "kilohms": 3, "megohm": 6, "megohms": 6},
        refused={"m": _MILLI_OR_MEG, "mohm": _MILLI_OR_MEG, "mohms": _MILLI_OR_MEG, "mOhm": _MILLI_OR_MEG},
    ),
    "capacitance": Quantity(
        noun="a capacitance",
        symbol="F",
        unit_word="farad",
        written="pnum_",
        example="100n, 2u2, 47 pF or 1e-9",
        bare=_table("pnum", ""),
        code=_table("pnum", "") | {"F": 0},
        units=_table("pnum_", "F") | _table("pnu", "f"),
        words=_words("farad", "farads"),
        refused={
            "M": _NO_MEGA_FARAD,
            "MF": _NO_MEGA_FARAD,
            "R": ("'R' marks ohms; a capacitance is wanted", "write 100n, 2u2, 47 pF or 1e-9"),
            "mf": _OLD_MICROFARAD,
            "mfd": _OLD_MICROFARAD,
            "MFD": _OLD_MICROFARAD,
            "f": ("'f' could be femto or farad", "write {n} F, or the femtofarads in pF"),
        },
        plain=False,
    ),
    "inductance": Quantity(
        noun="an inductance",
        symbol="H",
        unit_word="henry",
        written="num_",
        example="10m, 4u7, 10 mH or 1e-3",
        bare=_table("num", ""),
        code=_table("num", "") | {"H": 0},
        units=_table("pnum_", "H") | _table("num", "h"),
        words=_words("henry", "henries", "henrys"),
        refused={
            "R": (
                "on a coil 'R' marks the point in microhenry, elsewhere it means ohm",
                "write {n} uH",
            ),
        },
        plain=False,
    ),
    "voltage": Quantity(
        noun="a voltage",
        symbol="V",
        unit_word="volt",
        written="num_k",
        example="15 V, 500 mV or 3V3",
        bare=_table("numk", ""),
        code=_table("mk", "") | {"V": 0},
        units=_table("pnum_k", "V", "v"),
        words=_words("volt", "volts"),
        signed=True,
    ),
    "current": Quantity(
        noun="a current",
        symbol="A",
        unit_word="ampere",
        written="pnum_k",
        example="20 mA or 2m",
        bare=_table("pnumk", ""),
        code=_table("pnum", "") | {"A": 0},
        units=_table("pnum_k", "A") | _table("pnum_", "a"),
        words=_words("ampere", "amperes", "amp", "amps"),
        signed=True,
    ),
    "frequency": Quantity(
        noun="a frequency",
        symbol="Hz",
        unit_word="hertz",
        written="m_kMG",
        example="1k, 1.59 kHz or 20",
        bare=_table("kMG", ""),
        code=_table("kMG", ""),
        units=_table("_kMG", "Hz", "hz", "HZ") | _table("um", "Hz"),
        words=_words("hertz"),
        refused={"m": _MILLI_OR_MEGAHERTZ, "mhz": _MILLI_OR_MEGAHERTZ, "mHZ": _MILLI_OR_MEGAHERTZ},
    ),
    "time": Quantity(
        noun="a time",
        symbol="s",
        unit_word="second",
        written="pnum_",
        example="1.5, 20 ms or 100 us",
        bare={},
        code={},
        units=_table("pnum_", "s", "sec"),
        words=_words("second", "seconds"),
        refused={
            "m": ("'m' could be minutes or milliseconds", "write the minutes in seconds, or {n} ms"),
            "M": ("'M' could be minutes or mega", "write the minutes in seconds"),
        },
        signed=True,
    ),
    "percent": Quantity(
        noun="a percentage",
        symbol="%",
        unit_word="percent",
        written="_",
        example="1 % or 0.1 %",
        bare={},
        code={},
        units={"%": 0},
        words={"percent": 0},
        plain=False,
        signed=True,
    ),
    "gain_db": Quantity(
        noun="a gain in decibels",
        symbol="dB",
        unit_word="decibel",
        written="_",
        example="20 dB or -3 dB",
        bare={},
        code={},
        units={"dB": 0, "db": 0, "DB": 0},
        words={"decibel": 0, "decibels": 0},
        signed=True,
    ),
    "angle": Quantity(
        noun="an angle",
        symbol="°",
        unit_word="degree",
        written="_",
        example="60 deg or 60°",
        bare={},
        code={},
        units={"deg": 0, "°": 0},
        words={"degree": 0, "degrees": 0},
        plain=False,
        signed=True,
    ),
    "temperature": Quantity(
        noun="a temperature",
        symbol="°C",
        unit_word="degree Celsius",
        written="_",
        example="25 degC or 25 °C",
        bare={},
        code={},
        units={"degC": 0, "°C": 0, "degc": 0},
        words={},
        plain=False,
        signed=True,
    ),
}
"""Every kind of quantity that can be read and written."""
