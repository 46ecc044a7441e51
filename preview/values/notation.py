"""Values as text, both ways: IEC 60062 codes and engineering notation. What is ambiguous is refused."""

from __future__ import annotations

import math
import re
import unicodedata
from decimal import ROUND_HALF_UP, Context, Decimal

from preview.errors import NotationError, printable
from preview.values.units import KINDS, PREFIXES, TOLERANCE_LETTERS, Kind, Quantity

__all__ = ["Kind", "clean_text", "format_code", "format_value", "parse_value", "quoted", "understood"]

_LONGEST = 40
_SPELLINGS = str.maketrans(
    {
        "\N{MICRO SIGN}": "u",
        "\N{GREEK SMALL LETTER MU}": "u",
        "\N{OHM SIGN}": "\N{GREEK CAPITAL LETTER OMEGA}",
        "\N{MINUS SIGN}": "-",
        "\N{NO-BREAK SPACE}": " ",
        "\N{NARROW NO-BREAK SPACE}": " ",
        "\N{THIN SPACE}": " ",
    }
)
_NUMBER = re.compile(r"([0-9]+\.?[0-9]*|\.[0-9]+)(?:([eE])([+-]?[0-9]+))?(\s*)(.*)")
_CODE = re.compile(r"([0-9]*)([^\W\d_])([0-9]+)\s*(.*)")
_NOT_FINITE = re.compile(r"[+-]?(nan|inf|infinity|\N{INFINITY}).*", re.IGNORECASE)


def parse_value(text: str, kind: Kind, *, allow_zero: bool = False) -> float:
    """The value that the text stands for, in the SI base unit (``percent`` in percent, ``gain_db`` in dB).

    Parameters
    ----------
    text : str
        An IEC 60062 code (``4k7``, ``R47``, ``100n``) or a number with or without prefix and unit.
    kind : Kind
        What the value is of; it settles what a letter means.
    allow_zero : bool
        Whether 0 is taken where the kind must otherwise be above zero (a source resistance of 0).

    Raises
    ------
    NotationError
        The text cannot be read, or can be read in more than one way. The message begins with the quoted
        text, so that ``file [table] key = `` can stand before it.

    Notes
    -----
    The result is the float nearest to the decimal value: 4k7 is 4700.0, n33 is 3.3e-10.
    Refused as ambiguous: a comma; ``m`` for a resistor; ``M`` for a capacitor; a number alone for a
    capacitor, a coil or a percentage; a tolerance letter (``4K7J``), which belongs in its own field.

    References
    ----------
    [IEC 60062] Marking codes for resistors and capacitors.
    """
    quantity = KINDS[kind]
    body = clean_text(text, f"write {quantity.example}")
    if _NOT_FINITE.fullmatch(body):
        raise NotationError(f"{quoted(text)}: not a finite number", f"write {quantity.example}")
    if "," in body:
        raise _comma(text, body, quantity)
    if kind == "percent":
        body = body.removeprefix("\N{PLUS-MINUS SIGN}").lstrip()
    negative = body.startswith("-")
    unsigned = body[1:].lstrip() if body[:1] in ("+", "-") else body
    value = _magnitude(text, unsigned, kind)
    if negative and not quantity.signed:
        raise NotationError(
            f"{quoted(text)}: negative; {quantity.noun} is above zero", f"write {quantity.example}"
        )
    if value == 0.0 and not (quantity.signed or allow_zero):
        raise NotationError(
            f"{quoted(text)}: zero; {quantity.noun} is above zero", f"write {quantity.example}"
        )
    return -value if negative else value


def format_value(value: float, kind: Kind, *, digits: int = 3, fixed: bool = False) -> str:
    """Engineering notation with unit: ``4.7 kΩ``, ``1.59 kHz``, ``100 nF``.

    Parameters
    ----------
    value : float
        In the SI base unit (``percent`` in percent, ``gain_db`` in dB).
    kind : Kind
        What the value is of.
    digits : int
        Significant digits.
    fixed : bool
        Keep zeros at the end (``8.70 V``), for fields whose width should not jump.
    """
    quantity = KINDS[kind]
    if not math.isfinite(value):
        return f"{value} {quantity.symbol}"
    rounded = _rounded(value, digits)
    if not rounded:
        return f"0 {quantity.symbol}"
    letter = _prefix_for(rounded, ["" if ch == "_" else ch for ch in quantity.written])
    number = _plain(rounded.scaleb(-PREFIXES[letter]), digits if fixed else None)
    shown = "\N{MICRO SIGN}" if letter == "u" else letter
    return f"{number} {shown}{quantity.symbol}"


def format_code(value: float, kind: Kind) -> str:
    """IEC 60062 code, rounded to four significant digits: ``4k7``, ``100n``, ``R47``.

    Lower-case k and Latin u, as they are typed. Without a code of its own (far outside the range of parts)
    the value is written as a plain number with exponent.

    Raises
    ------
    ValueError
        Not a positive, finite resistance, capacitance or inductance.
    """
    if kind not in ("resistance", "capacitance", "inductance"):
        raise ValueError(f"there is no IEC 60062 code for {KINDS[kind].noun}")
    if not (math.isfinite(value) and value > 0.0):
        raise ValueError(f"no code for {value!r}: {KINDS[kind].noun} is above zero and finite")
    rounded = _rounded(value, 4)
    if kind == "resistance":
        letters = {-3: "L", 0: "R", 3: "k", 6: "M", 9: "G", 12: "T"}
    elif kind == "capacitance":
        letters = {-12: "p", -9: "n", -6: "u", -3: "m", 0: "F"}
    else:
        letters = {-9: "n", -6: "u", -3: "m", 0: "H"}
    power = max((p for p in letters if rounded >= Decimal(1).scaleb(p)), default=min(letters))
    if kind == "resistance" and power == -3 and rounded >= Decimal("0.001"):
        power = 0  # R047 is read more widely than 47L
    scaled = rounded.scaleb(-power)
    if not Decimal("0.001") <= scaled < 10000:
        return _exponent(rounded)
    whole, _, part = _plain(scaled, None).partition(".")
    return f"{'' if whole == '0' else whole}{letters[power]}{part}"


def understood(text: str, kind: Kind, *, allow_zero: bool = False) -> str:
    """What the text was understood as, for an echo: ``4k7 = 4.7 kΩ (4700 ohm)``. Raises NotationError."""
    value = parse_value(text, kind, allow_zero=allow_zero)
    shown = format_value(value, kind, digits=6)
    said = f"{printable(text.strip())} = {shown}"
    if kind == "percent":
        return f"{said} ({_short(value / 100.0)} of the value)"
    if kind == "gain_db":
        return f"{said} ({_short(float(f'{10.0 ** (value / 20.0):.4g}'))} times)"
    return f"{said} ({_short(value)} {KINDS[kind].unit_word})"


def clean_text(text: str, hint: str) -> str:
    """The text stripped, with one spelling of micro, ohm, minus and space; refuses what cannot be a value."""
    body = text.strip()
    if not body:
        raise NotationError(f"{quoted(text.strip())}: empty", hint)
    if len(body) > _LONGEST:
        raise NotationError(f"{quoted(text)}: longer than {_LONGEST} characters", hint)
    if any(unicodedata.category(ch)[0] == "C" for ch in body):
        raise NotationError(f"{quoted(text)}: holds a control character", hint)
    return body.translate(_SPELLINGS)


def quoted(text: str) -> str:
    """The text in quotation marks for a message, cleaned, shortened where it is long."""
    body = printable(text)
    return f'"{body[:_LONGEST]}..."' if len(body) > _LONGEST else f'"{body}"'


def _magnitude(text: str, body: str, kind: Kind) -> float:
    """The value without its sign."""
    quantity = KINDS[kind]
    number = _NUMBER.fullmatch(body)
    code = _CODE.fullmatch(body)
    if number is None and code is None:
        raise NotationError(f"{quoted(text)}: not a number", f"write {quantity.example}")
    if number is not None and (number[2] or code is None):
        digits, mark, exponent, _, suffix = number.groups()
        if mark == "E" and kind == "resistance" and exponent.isdigit() and "." not in digits:
            raise NotationError(
                f"{quoted(text)}: 'E' could mark the point in ohms or a power of ten",
                f"write {digits}R{exponent} or {digits}e{exponent}",
            )
        if re.search(r"[0-9]", suffix):
            raise _odd_suffix(text, suffix, kind, digits)
        power = _power(text, suffix, kind, bare_number=not mark, number=digits)
        return _float(text, digits, int((exponent or "0")[:6]) + power, quantity)
    assert code is not None
    before, letter, after, unit = code.groups()
    if letter in quantity.refused:
        reason, cure = quantity.refused[letter]
        raise _refused(text, reason, cure.format(n=f"{before or '0'}.{after}"))
    if letter not in quantity.code:
        raise _odd_suffix(text, letter, kind, before)
    if unit:
        plain_unit = unit in quantity.units and quantity.units[unit] == 0
        if not plain_unit and unit.lower() not in (quantity.unit_word, f"{quantity.unit_word}s"):
            raise _odd_suffix(text, unit, kind, before)
    return _float(text, f"{before or '0'}.{after}", quantity.code[letter], quantity)


def _power(text: str, suffix: str, kind: Kind, *, bare_number: bool, number: str) -> int:
    """Power of ten of what stands behind a number."""
    quantity = KINDS[kind]
    spelled = suffix.replace(" ", "")
    if not spelled:
        if bare_number and not quantity.plain:
            raise _bare_number(text, kind)
        return 0
    if spelled in quantity.refused:
        reason, cure = quantity.refused[spelled]
        raise _refused(text, reason, cure.format(n=number))
    for table, key in (
        (quantity.bare, spelled),
        (quantity.units, spelled),
        (quantity.words, spelled.lower()),
    ):
        if key in table:
            return table[key]
    raise _odd_suffix(text, suffix, kind, number)


def _float(text: str, digits: str, power: int, quantity: Quantity) -> float:
    """The float nearest to ``digits`` times ten to ``power``."""
    value = float(f"{digits}e{power}")
    is_zero = not digits.strip("0.")
    if math.isinf(value) or (abs(value) < 1e-290 and not is_zero):
        raise NotationError(f"{quoted(text)}: out of range", f"write {quantity.example}")
    return value


def _refused(text: str, reason: str, hint: str) -> NotationError:
    return NotationError(f"{quoted(text)}: {reason}", hint)


def _bare_number(text: str, kind: Kind) -> NotationError:
    if kind == "percent":
        return _refused(text, "no unit; could be a ratio or a percentage", f"write {KINDS[kind].example}")
    if kind == "capacitance" and re.fullmatch(r"[0-9]{3}", text.strip()):
        reason = "no unit; three digits could be a marking in pF or a number of farads"
    else:
        reason = "no prefix or unit"
    return _refused(text, reason, f"write {KINDS[kind].example}")


def _comma(text: str, body: str, quantity: Quantity) -> NotationError:
    point = body.replace(",", ".")
    groups = re.search(r",[0-9]{3}(?![0-9])", body) is not None
    if groups or body.count(",") > 1 or "." in body:
        return _refused(
            text,
            "a comma could part thousands or mark the decimal",
            f"write {quantity.example}, without a comma",
        )
    return _refused(text, "a comma is not taken", f"write {point.strip()} with a point")


def _odd_suffix(text: str, suffix: str, kind: Kind, number: str) -> NotationError:
    """Why what stands behind the number is not understood."""
    quantity = KINDS[kind]
    hint = f"write {quantity.example}"
    spelled = suffix.replace(" ", "")
    stem = text.strip()[:-1]
    letter = text.strip()[-1]
    for other, entry in KINDS.items():
        if other != kind and (spelled in entry.units or spelled.lower() in entry.words):
            return _refused(text, f"this is {entry.noun}; {quantity.noun} is wanted", hint)
    if kind in ("resistance", "capacitance") and letter in TOLERANCE_LETTERS and not stem[-1:].isspace():
        try:
            parse_value(stem, kind)
        except NotationError:
            pass
        else:
            return _refused(
                text,
                f"the letter {letter} at the end is a tolerance ({TOLERANCE_LETTERS[letter]})",
                f"write {stem} and state the tolerance in its own field",
            )
    if re.search(r"[0-9]", spelled):
        if "." in number and re.fullmatch(r"[^\W\d_][0-9]+", spelled):
            return _refused(text, "both a point and a letter mark the decimal place", hint)
        return _refused(text, "more than one number", hint)
    for tail in sorted(("ohm", "ohms", quantity.symbol), key=len, reverse=True):
        if spelled.endswith(tail) and spelled != tail:
            return _refused(text, f"no such prefix '{printable(spelled.removesuffix(tail))}'", hint)
    what = "prefix" if len(spelled) == 1 else "unit"
    return _refused(text, f"no such {what} '{printable(spelled)}'", hint)


def _rounded(value: float, digits: int) -> Decimal:
    """The shortest decimal of the float, rounded to significant digits; halves away from zero."""
    return Context(prec=digits, rounding=ROUND_HALF_UP).create_decimal(repr(float(value)))


def _prefix_for(rounded: Decimal, written: list[str]) -> str:
    """The largest prefix that leaves at least 1, or the smallest there is."""
    fitting = [ch for ch in written if abs(rounded) >= Decimal(1).scaleb(PREFIXES[ch])]
    return fitting[-1] if fitting else written[0]


def _plain(number: Decimal, digits: int | None) -> str:
    """Without exponent where that is readable; zeros at the end only up to ``digits``."""
    if not Decimal("1e-6") <= abs(number) < Decimal("1e9"):
        return _exponent(number)
    if digits is None:
        text = f"{number:f}"
        return text.rstrip("0").rstrip(".") if "." in text else text
    return f"{number:.{max(0, digits - 1 - number.adjusted())}f}"


def _exponent(number: Decimal) -> str:
    mantissa, _, power = f"{number.normalize():e}".partition("e")
    return f"{mantissa}e{int(power)}"


def _short(value: float) -> str:
    """A float as people write it: 4700, 0.01, 1e-7."""
    number = Decimal(repr(value))
    return (
        _exponent(number)
        if value and not 1e-3 <= abs(value) < 1e7
        else _plain(number, None)
        if value
        else "0"
    )
