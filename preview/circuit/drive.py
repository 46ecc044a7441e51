"""What drives a stage and what follows it: models of source, cable and load, by figures or by a trade name.

A source is a signal voltage behind a resistance, an inductance and a capacitance in series, each only where it
has one, with its winding's and the cable's capacitance across what comes out. Written ``600``,
``7k5 + 2.5 H, winding 120p, cable 500p``, ``20 nF`` or ``dynamic microphone, cable 1n``; a load ``10k``,
``10k || 220p``, ``headphones 32 ohm``, ``line input, cable 1n``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from difflib import get_close_matches

from preview.circuit.limits import QUANTITY, exact_value
from preview.circuit.parts import PartKind
from preview.errors import NotationError
from preview.values.notation import clean_text, format_value, parse_value, quoted

__all__ = [
    "IDEAL_SOURCE",
    "LOADS",
    "NO_LOAD",
    "SOURCES",
    "Element",
    "LoadModel",
    "SourceModel",
    "exact_load",
    "exact_source",
    "parse_load",
    "parse_source",
    "said",
]

Element = tuple[str, PartKind, float]
"""Designator, kind and value of a part of a source or a load."""

_R, _L, _C = PartKind.RESISTOR, PartKind.INDUCTOR, PartKind.CAPACITOR
_LONGEST = 200
_SOURCE_EXAMPLE = 'write 600, "7k5 + 2.5 H, cable 500p", "20 nF" or a name'
_LOAD_EXAMPLE = 'write none, 10k, "10k || 220p", "10k, cable 1n" or a name'


@dataclass(frozen=True, slots=True)
class SourceModel:
    """The signal's source; a figure of 0 stands for a part that is not there."""

    resistance_ohm: float = 0.0
    """In series [ohm]."""
    inductance_henry: float = 0.0
    """In series [H]."""
    capacitance_farad: float = 0.0
    """In series [F]: what a piezo or a capacitive sensor gives its voltage through."""
    winding_farad: float = 0.0
    """Across its terminals [F]."""
    cable_farad: float = 0.0
    """Of the cable, from ``in`` to ``gnd`` [F]."""
    name: str = ""
    """Its trade name, where its figures are a preset's."""

    @property
    def series(self) -> tuple[Element, ...]:
        """What stands between the signal's voltage and ``in``, in this order."""
        return _there(
            ("Rsource", _R, self.resistance_ohm),
            ("Lsource", _L, self.inductance_henry),
            ("Csource", _C, self.capacitance_farad),
        )

    @property
    def across(self) -> tuple[Element, ...]:
        """What stands from ``in`` to ``gnd``."""
        return _there(("Cwinding", _C, self.winding_farad), ("Ccable", _C, self.cable_farad))


@dataclass(frozen=True, slots=True)
class LoadModel:
    """What follows the stage."""

    resistance_ohm: float | None = None
    """From ``out`` to ``gnd`` [ohm]; None for none."""
    capacitance_farad: float = 0.0
    """Of the load itself, from ``out`` to ``gnd`` [F]; 0 for none."""
    cable_farad: float = 0.0
    """Of the cable to it [F]; 0 for none."""
    name: str = ""
    """Its trade name, where its figures are a preset's."""

    @property
    def across(self) -> tuple[Element, ...]:
        """What stands from ``out`` to ``gnd``."""
        resistor = () if self.resistance_ohm is None else (("Rload", _R, self.resistance_ohm),)
        return (*resistor, *_there(("Cload", _C, self.capacitance_farad + self.cable_farad)))


def _there(*elements: Element) -> tuple[Element, ...]:
    return tuple(element for element in elements if element[2] != 0.0)


IDEAL_SOURCE = SourceModel()
"""A voltage, whatever is drawn from it."""
NO_LOAD = LoadModel()
"""Nothing connected to ``out``."""

_SOURCE_NAMES = (
    SourceModel(100.0, name="line output"),
    SourceModel(1e3, name="consumer line output"),
    SourceModel(50.0, name="signal generator"),
    SourceModel(200.0, name="dynamic microphone"),
    SourceModel(150.0, name="condenser microphone"),
    SourceModel(7.5e3, 3.0, winding_farad=120e-12, name="passive coil pickup"),
    SourceModel(8.5e3, 4.5, winding_farad=100e-12, name="twin coil pickup"),
    SourceModel(700.0, 0.5, name="moving magnet cartridge"),
    SourceModel(10.0, 50e-6, name="moving coil cartridge"),
    SourceModel(capacitance_farad=20e-9, name="piezo disc"),
    SourceModel(capacitance_farad=1e-9, name="piezo accelerometer"),
    SourceModel(capacitance_farad=50e-12, name="capacitive sensor"),
)
_LOAD_NAMES = (
    LoadModel(10e3, name="line input"),
    LoadModel(600.0, name="line of 600 ohm"),
    LoadModel(47e3, 150e-12, name="cartridge input"),
    LoadModel(1e6, 30e-12, name="instrument input"),
    LoadModel(1e6, 15e-12, name="oscilloscope input"),
    LoadModel(32.0, name="headphones 32 ohm"),
    LoadModel(250.0, name="headphones 250 ohm"),
    LoadModel(600.0, name="headphones 600 ohm"),
)
SOURCES: dict[str, SourceModel] = {model.name: model for model in _SOURCE_NAMES}
"""Sources by trade name. Typical figures, common practice, from memory; the device's own go before them."""
LOADS: dict[str, LoadModel] = {model.name: model for model in _LOAD_NAMES}
"""Loads by trade name. Typical figures, common practice, from memory; the device's own go before them."""


def parse_source(text: str) -> SourceModel:
    """The source that the text describes; NotationError, its message beginning with the text, if none."""
    first, *others = _pieces(text, _SOURCE_EXAMPLE)
    named = SOURCES.get(_spelled(first))
    if named is not None:
        model = named
    elif _spelled(first) in ("none", "ideal"):
        model = IDEAL_SOURCE
    elif _capacitance_of(first, "cable") is not None or _capacitance_of(first, "winding") is not None:
        model, others = IDEAL_SOURCE, [first, *others]
    elif first[:2].isalpha():
        raise _no_such_name("source", first, SOURCES)
    else:
        model = _chain(first)
    for piece in others:
        if (farad := _capacitance_of(piece, "cable")) is not None and not model.cable_farad:
            model = replace(model, cable_farad=farad)
        elif (farad := _capacitance_of(piece, "winding")) is not None and not model.winding_farad:
            model = replace(model, winding_farad=farad)
        else:
            raise NotationError(
                f"{quoted(piece)}: after a comma a source has its cable or its winding, each once",
                'write "cable 500p" or "winding 120p"',
            )
    return model


def parse_load(text: str) -> LoadModel:
    """The load that the text describes; NotationError, its message beginning with the text, if none."""
    first, *others = _pieces(text, _LOAD_EXAMPLE)
    if (named := LOADS.get(_spelled(first))) is not None:
        model = named
    elif _spelled(first) in ("none", "open"):
        model = NO_LOAD
    elif _capacitance_of(first, "cable") is not None:
        model, others = NO_LOAD, [first, *others]
    elif first[:2].isalpha():
        raise _no_such_name("load", first, LOADS)
    else:
        resistor, bars, capacitor = (piece.strip() for piece in first.partition("||"))
        farad = parse_value(capacitor, "capacitance") if bars else 0.0
        model = LoadModel(parse_value(resistor, "resistance"), farad)
    for piece in others:
        if (farad_ := _capacitance_of(piece, "cable")) is None or model.cable_farad:
            raise NotationError(
                f"{quoted(piece)}: after a comma a load has its cable, once", 'write "cable 500p"'
            )
        model = replace(model, cable_farad=farad_)
    return model


def _pieces(text: str, example: str) -> list[str]:
    """What the commas of the text part, none of it empty."""
    if len(text) > _LONGEST:
        raise NotationError(f"{quoted(text)}: longer than {_LONGEST} characters", example)
    pieces = [piece.strip() for piece in text.split(",")]
    if not all(pieces):
        raise NotationError(f"{quoted(text)}: empty{' behind a comma' if len(pieces) > 1 else ''}", example)
    return pieces


def _spelled(piece: str) -> str:
    """A trade name in lower case with single blanks."""
    return " ".join(piece.lower().split())


def _no_such_name(
    noun: str, piece: str, names: dict[str, SourceModel] | dict[str, LoadModel]
) -> NotationError:
    nearest = get_close_matches(_spelled(piece), names, n=1)
    start = f"did you mean {nearest[0]}? " if nearest else ""
    example = _SOURCE_EXAMPLE if noun == "source" else _LOAD_EXAMPLE
    return NotationError(
        f"{quoted(piece)}: no such {noun}", f"{start}{example}; names are {', '.join(names)}"
    )


def _capacitance_of(piece: str, word: str) -> float | None:
    """The capacitance behind the word [F]; None where the piece does not begin with the word."""
    head, _, tail = piece.partition(" ")
    return parse_value(tail, "capacitance") if head.lower() == word else None


def _chain(text: str) -> SourceModel:
    """Resistance, inductance and capacitance in series, in any order, each at most once."""
    found: dict[PartKind, float] = {}
    for piece in text.split("+"):
        kind, value = _series_element(clean_text(piece, _SOURCE_EXAMPLE))
        if kind in found:
            raise NotationError(
                f"{quoted(text)}: two values are {QUANTITY[kind]}s in series", "give one that stands for both"
            )
        found[kind] = value
    return SourceModel(found.get(_R, 0.0), found.get(_L, 0.0), found.get(_C, 0.0))


def _series_element(piece: str) -> tuple[PartKind, float]:
    """A value whose unit tells what it is; a number or a code of ohms is a resistance."""
    understood = {}
    refused: NotationError | None = None
    for kind in (_R, _L, _C):
        try:
            understood[kind] = parse_value(piece, QUANTITY[kind], allow_zero=kind is _R)
        except NotationError as error:
            refused = refused or error
    if _R in understood or len(understood) == 1:
        return next(iter(understood.items()))
    if understood:
        raise NotationError(
            f"{quoted(piece)}: could be a capacitance or an inductance", f"write {piece}F or {piece}H"
        )
    assert refused is not None
    raise NotationError(refused.message, _SOURCE_EXAMPLE) from refused


def said(model: SourceModel | LoadModel) -> str:
    """The model's figures in words: ``7.5 kΩ + 3 H, winding 120 pF, cable 500 pF (typical)``."""
    if isinstance(model, SourceModel):
        chain = " + ".join(format_value(value, QUANTITY[kind], digits=6) for _, kind, value in model.series)
        figures = [chain or "ideal"]
        figures += [f"winding {_farads(model.winding_farad)}"] if model.winding_farad else []
    else:
        ohm = model.resistance_ohm
        figures = ["none" if ohm is None else format_value(ohm, "resistance", digits=6)]
        figures[0] += f" || {_farads(model.capacitance_farad)}" if model.capacitance_farad else ""
    figures += [f"cable {_farads(model.cable_farad)}"] if model.cable_farad else []
    return f"{', '.join(figures)}{' (typical)' if model.name else ''}"


def _farads(value: float) -> str:
    return format_value(value, "capacitance", digits=6)


def exact_source(model: SourceModel) -> str:
    """The text that ``parse_source`` makes this very model of, to the last digit."""
    chain = [exact_value(kind, value) for _, kind, value in model.series]
    pieces = [model.name or " + ".join(chain) or "none"]
    if model.winding_farad and not model.name:
        pieces.append(f"winding {exact_value(_C, model.winding_farad)}")
    return _with_cable(pieces, model.cable_farad)


def exact_load(model: LoadModel) -> str:
    """The text that ``parse_load`` makes this very model of, to the last digit."""
    ohm = model.resistance_ohm
    pieces = [model.name or ("none" if ohm is None else exact_value(_R, ohm))]
    if model.capacitance_farad and not model.name:
        pieces[0] += f" || {exact_value(_C, model.capacitance_farad)}"
    return _with_cable(pieces, model.cable_farad)


def _with_cable(pieces: list[str], cable_farad: float) -> str:
    return ", ".join([*pieces, f"cable {exact_value(_C, cable_farad)}"] if cable_farad else pieces)
