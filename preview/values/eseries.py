"""The preferred number series E3 to E192 of IEC 60063, over every decade."""

from __future__ import annotations

import math
from fractions import Fraction

from preview.errors import NotationError
from preview.values.notation import quoted

__all__ = ["SERIES", "contains", "nearest", "series_name", "step"]

_E24 = (100, 110, 120, 130, 150, 160, 180, 200, 220, 240, 270, 300,
        330, 360, 390, 430, 470, 510, 560, 620, 680, 750, 820, 910)  # fmt: skip
"""In hundredths. Older than the rule: 2.7 to 4.7 and 8.2 are not the rounded geometric values."""

_E192 = tuple(920 if i == 185 else round(100.0 * 10.0 ** (i / 192.0)) for i in range(192))
"""In hundredths: the rounded geometric series, but for 9.20 (9.19 by the rule)."""

_HUNDREDTHS: dict[str, tuple[int, ...]] = {
    "E3": _E24[::8],
    "E6": _E24[::4],
    "E12": _E24[::2],
    "E24": _E24,
    "E48": _E192[::4],
    "E96": _E192[::2],
    "E192": _E192,
}

SERIES: dict[str, tuple[float, ...]] = {
    name: tuple(float(f"{h}e-2") for h in hundredths) for name, hundredths in _HUNDREDTHS.items()
}
"""Values of one decade, 1.0 up to below 10, by the name of the series.

References
----------
[IEC 60063] Preferred number series for resistors and capacitors.
"""

_SAME_RATIO = 1e-9


def series_name(text: str) -> str:
    """The series' name as it is written here (``e24`` is ``E24``); NotationError names those there are."""
    name = text.strip().upper()
    if name not in SERIES:
        raise NotationError(f"{quoted(text.strip())}: no such E series", f"there are {', '.join(SERIES)}")
    return name


def step(value: float, series: str, count: int) -> float:
    """The standard value ``count`` places up (or down, if negative), in the unit of ``value``.

    From a value that is not in the series, the first place up is the next standard value above and the first
    place down the next below. A count of 0 returns the value itself.

    Raises
    ------
    NotationError
        No such series, or a value that is not positive and finite.
    """
    name = series_name(series)
    below = _place_at_or_below(value, name)
    if count == 0:
        return value
    if count < 0 and not _same(_standard(below, name), value):
        below += 1
    return _standard(below + count, name)


def nearest(value: float, series: str) -> float:
    """The standard value with the smallest error, in the unit of ``value``; the lower one of two as near."""
    name = series_name(series)
    place = _place_at_or_below(value, name)
    low, high = _standard(place, name), _standard(place + 1, name)
    exact = Fraction(value)
    return low if abs(exact - Fraction(low)) <= abs(Fraction(high) - exact) else high


def contains(value: float, series: str) -> bool:
    """Whether the value is a standard value of the series, to 1 part in 10^9."""
    name = series_name(series)
    return _same(_standard(_place_at_or_below(value, name), name), value)


def _same(standard: float, value: float) -> bool:
    return abs(standard - value) <= _SAME_RATIO * value


def _standard(place: int, name: str) -> float:
    """Standard value by its place, counted over the decades from 1.0: the float nearest to the decimal."""
    hundredths = _HUNDREDTHS[name]
    decade, index = divmod(place, len(hundredths))
    value = float(f"{hundredths[index]}e{decade - 2}")
    if not 1e-290 < value < math.inf:
        raise NotationError(f"a step in {name} leads out of range", "values lie between 1e-290 and 1e308")
    return value


def _place_at_or_below(value: float, name: str) -> int:
    """Place of the largest standard value that is not above the value."""
    if not (math.isfinite(value) and value > 0.0):
        raise NotationError(f"{value!r}: not above zero and finite, so it has no place in {name}")
    hundredths = _HUNDREDTHS[name]
    place = math.floor(math.log10(value)) * len(hundredths)
    limit = value * (1.0 + _SAME_RATIO)
    while _standard(place, name) > limit:  # log10 may be one decade high just below a power of ten
        place -= 1
    while _standard(place + 1, name) <= limit:
        place += 1
    return place
