"""Settings of parts as text: values, positions of potentiometers, open and closed switches."""

from __future__ import annotations

from preview.circuit.limits import QUANTITY, read_value
from preview.circuit.parts import Potentiometer, SettablePart, Switch
from preview.errors import NotationError, PartValueError
from preview.values.notation import format_value, parse_value, quoted, understood

__all__ = ["check_position", "read_position", "read_setting", "setting_note", "setting_text"]

_CONTACTS = {"closed": 1.0, "open": 0.0}
_POSITIONS = "0 to 1, or 0 % to 100 %"


def read_setting(part: SettablePart, text: str, where: str) -> float:
    """What a part is set to by a text, in the unit of ``part.setting``.

    Parameters
    ----------
    part : SettablePart
        The part that is set.
    text : str
        Such as ``4k7``, ``70 %`` or ``open``.
    where : str
        What stands in front of the quoted text in a message.

    Raises
    ------
    NotationError
        The text cannot be read.
    PartValueError
        The text can be read, but the part cannot be set to that.
    """
    if isinstance(part, Potentiometer):
        return read_position(text, where)
    if isinstance(part, Switch):
        found = _CONTACTS.get(text.strip().lower())
        if found is None:
            raise NotationError(f"{where}{quoted(text)}: a switch is open or closed", "write open or closed")
        return found
    return read_value(part.kind, text, where)


def read_position(text: str, where: str) -> float:
    """The position of a potentiometer, 0..1, from ``0.7`` or ``70 %``; raises as ``read_setting`` does."""
    body = text.strip()
    try:
        position = parse_value(body, "percent") / 100.0 if body.endswith("%") else float(body)
    except ValueError as error:  # NotationError is one
        raise NotationError(f"{where}{quoted(text)}: not a position", f"write {_POSITIONS}") from error
    check_position(position, f"{where}{quoted(text)}")
    return position


def check_position(position: float, where: str) -> None:
    """Raise PartValueError, its message starting with ``where``, for a position beyond the ends."""
    if not 0.0 <= position <= 1.0:
        raise PartValueError(f"{where}: beyond the ends of the track", f"allowed are {_POSITIONS}")


def setting_text(part: SettablePart) -> str:
    """The setting as text that ``read_setting`` understands, rounded for the eye."""
    if isinstance(part, Potentiometer):
        return format_value(100.0 * part.position, "percent")
    if isinstance(part, Switch):
        return "closed" if part.closed else "open"
    return format_value(part.value, QUANTITY[part.kind], digits=4)


def setting_note(part: SettablePart, text: str) -> str:
    """How the text was understood, for an echo; ``part`` is set already."""
    if isinstance(part, Potentiometer):
        return f"{part.designator}: {setting_text(part)} of the turn, {part.taper}"
    if isinstance(part, Switch):
        return f"{part.designator}: {setting_text(part)}"
    return f"{part.designator}: {understood(text, QUANTITY[part.kind])}"
