"""How one setting differs from another, in lines."""

from __future__ import annotations

from preview.circuit.drive import exact_load, exact_source
from preview.circuit.parts import Diode, FixedVoltage, OpAmp, Part, Potentiometer, SettablePart
from preview.circuit.settings import setting_text
from preview.session import Session
from preview.ui.words import code, rails, type_name, volts
from preview.values.notation import format_value

__all__ = ["differences"]


def differences(old: Session, new: Session) -> list[str]:
    """What was changed from the old to the new setting: stage, parts, op-amps, supply, source, load, limits."""
    lines = []
    if (old.stage.name, old.stage.path) != (new.stage.name, new.stage.path):
        lines.append(f"stage {old.stage.title or old.stage.name} → {new.stage.title or new.stage.name}")
    else:
        was = {part.designator: part for part in old.stage.parts}
        for part in new.stage.parts:
            before, after = _said(was.get(part.designator)), _said(part)
            if before != after:
                lines.append(f"{part.designator} {before} → {after}")
        lines += [f"{name} {_said(part)} → none" for name, part in was.items() if name not in _names(new)]
    pairs = [
        ("supply ", rails(old.supply), rails(new.supply)),
        ("output ", old.output, new.output),
        ("source ", exact_source(old.source), exact_source(new.source)),
        ("load ", exact_load(old.load), exact_load(new.load)),
        ("without ", ", ".join(old.without) or "nothing", ", ".join(new.without) or "nothing"),
    ]
    return [*lines, *(f"{name}{before} → {after}" for name, before, after in pairs if before != after)]


def _names(session: Session) -> set[str]:
    return {part.designator for part in session.stage.parts}


def _said(part: Part | None) -> str:
    """A part in few cells; ``none`` where there is none."""
    if part is None:
        return "none"
    if isinstance(part, OpAmp | Diode):
        return type_name(part.type)
    if isinstance(part, FixedVoltage):
        return volts(part.value)
    if isinstance(part, Potentiometer):
        return f"{code(part)} of {format_value(part.value, 'resistance', digits=4)}"
    text = code(part)
    if isinstance(part, SettablePart) and "." in text:  # a code has no more than the digits that are exact
        return setting_text(part)
    return text
