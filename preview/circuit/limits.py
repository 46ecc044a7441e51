"""What value a part can have, and reading it from text."""

from __future__ import annotations

import math
from typing import Literal

from preview.circuit.parts import PartKind
from preview.errors import NotationError, PartValueError
from preview.values.notation import format_code, format_value, parse_value, quoted

__all__ = ["QUANTITY", "VALUE_RANGE", "check_value", "exact_value", "read_value"]

QUANTITY: dict[PartKind, Literal["resistance", "capacitance", "inductance", "voltage"]] = {
    PartKind.RESISTOR: "resistance",
    PartKind.CAPACITOR: "capacitance",
    PartKind.INDUCTOR: "inductance",
    PartKind.POTENTIOMETER: "resistance",
    PartKind.VOLTAGE: "voltage",
}
"""The quantity that the value of each kind of part is, for ``preview.values.notation``."""

VALUE_RANGE: dict[PartKind, tuple[float, float]] = {
    PartKind.RESISTOR: (1e-3, 1e12),
    PartKind.CAPACITOR: (1e-15, 10.0),
    PartKind.INDUCTOR: (1e-12, 1e3),
    PartKind.POTENTIOMETER: (10.0, 1e8),
    PartKind.VOLTAGE: (-1e3, 1e3),
}
"""Smallest and largest value [ohm, farad, henry, volt] that is taken for a part and not for a slip."""


_RANGE_TEXT: dict[PartKind, str] = {
    PartKind.RESISTOR: "1 mΩ to 1 TΩ",
    PartKind.CAPACITOR: "1 fF to 10 F",
    PartKind.INDUCTOR: "1 pH to 1 kH",
    PartKind.POTENTIOMETER: "10 Ω to 100 MΩ",
    PartKind.VOLTAGE: "-1 kV to 1 kV",
}


def check_value(kind: PartKind, value: float, where: str) -> None:
    """Raise PartValueError, its message starting with ``where``, unless a part can have that value.

    Parameters
    ----------
    kind : PartKind
        Resistor, capacitor, inductor, potentiometer or voltage.
    value : float
        The value [ohm, farad, henry, volt].
    where : str
        Where the value was found, such as ``stages/x.toml [parts.R1] value = "0"``.
    """
    low, high = VALUE_RANGE[kind]
    noun = "an inductor" if kind is PartKind.INDUCTOR else f"a {kind}"
    if math.isfinite(value) and low <= value <= high:
        return
    if not math.isfinite(value):
        found = "not a finite number"
    elif low > 0.0 >= value:
        found = f"{noun} must be above zero"
    else:
        found = f"{format_value(value, QUANTITY[kind])} is out of range for {noun}"
    raise PartValueError(f"{where}: {found}", f"allowed are {_RANGE_TEXT[kind]}")


def exact_value(kind: PartKind, value: float) -> str:
    """The value as text that is read back to the last digit and as no other kind of part: ``4k7``, ``2n2F``."""
    quantity = QUANTITY[kind]
    unit = {"resistance": "ohm", "capacitance": "F", "inductance": "H"}[quantity]
    code = format_code(value, quantity)
    if parse_value(code, quantity) != value:
        return f"{value!r} {unit}"
    return code if quantity == "resistance" or unit in code else code + unit


def read_value(kind: PartKind, text: str, where: str) -> float:
    """The value of a part from its text [ohm, farad, henry, volt], in range.

    Parameters
    ----------
    kind : PartKind
        Resistor, capacitor, inductor, potentiometer or voltage.
    text : str
        Such as ``4k7``.
    where : str
        What stands in front of the quoted text in a message, such as ``stages/x.toml [parts.R1] value = ``.

    Raises
    ------
    NotationError
        The text cannot be read.
    PartValueError
        The text can be read, but no such part has that value.
    """
    body = text.strip()
    negative = body[:1] in ("-", "\N{MINUS SIGN}")
    try:
        value = parse_value(body[1:] if negative else text, QUANTITY[kind], allow_zero=True)
    except NotationError as error:
        raise NotationError(f"{where}{error.message}", error.hint) from error
    value = -value if negative else value
    check_value(kind, value, f"{where}{quoted(text)}")
    return value
