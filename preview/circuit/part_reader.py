"""Reading one part of a stage file: ``R1 = { kind = "resistor", ... }``."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from difflib import get_close_matches
from typing import Any, Literal

from preview.circuit.controls import TAPERS, Taper
from preview.circuit.diodes import DIODE_TYPES, DiodeModel
from preview.circuit.limits import check_value, read_value
from preview.circuit.nodes import GND, IN, NEGATIVE_RAIL, OUT, POSITIVE_RAIL, SOURCE_NODE
from preview.circuit.opamp_library import is_path, known_type
from preview.circuit.parts import (
    Diode,
    FixedVoltage,
    OpAmp,
    Part,
    PartKind,
    Potentiometer,
    SettablePart,
    Switch,
    TwoTerminal,
)
from preview.circuit.settings import check_position, read_setting
from preview.circuit.tables import Table
from preview.errors import NotationError, StageFileError, UnknownNameError
from preview.values.eseries import series_name
from preview.values.notation import Kind, format_value, parse_value, quoted

__all__ = ["PART_EXAMPLE", "opamp_type", "read_part", "setting", "temperature_degc"]

_NODE = re.compile(r"[A-Za-z0-9_]{1,24}", re.ASCII)
_RAILS = (POSITIVE_RAIL, NEGATIVE_RAIL)
_RESERVED_NODES = (IN, OUT, GND, SOURCE_NODE, *_RAILS)

PART_EXAMPLE = 'write R1 = { kind = "resistor", nodes = ["in", "out"], value = "10k" }'
_OPAMP_EXAMPLE = 'write U1 = { kind = "opamp", plus = "gnd", minus = "sum", out = "out", type = "ideal" }'
_POT_EXAMPLE = 'write P1 = { kind = "potentiometer", ends = ["gnd", "in"], wiper = "out", value = "10k" }'
_SWITCH_EXAMPLE = 'write S1 = { kind = "switch", nodes = ["a", "b"], closed = true }'
_DIODE_EXAMPLE = 'write D1 = { kind = "diode", anode = "sum", cathode = "out", type = "signal" }'
_VOLTAGE_EXAMPLE = 'write V1 = { kind = "voltage", nodes = ["bias", "gnd"], value = "4.5 V" }'

_DIODE_FIGURES: dict[str, tuple[str, Kind, float, float]] = {
    "saturation": ("saturation_a", "current", 1e-35, 1e-2),
    "series": ("series_ohm", "resistance", 0.0, 1e4),
    "capacitance": ("capacitance_farad", "capacitance", 0.0, 1e-6),
    "breakdown": ("breakdown_v", "voltage", 0.5, 1e4),
    "breakdown_current": ("breakdown_a", "current", 1e-7, 10.0),
    "breakdown_slope": ("breakdown_slope_v", "voltage", 1e-3, 10.0),
}
"""Key of a diode: field of DiodeModel, what it is, smallest and largest value that is not taken for a slip."""
_EMISSION = (0.5, 20.0)
_TEMPERATURE_DEGC = (-55.0, 150.0)
_HALF_V = (0.1, 1e5)


def read_part(table: Table, designator: str) -> Part:
    """The part in that table.

    Raises
    ------
    StageFileError, PartValueError, UnknownNameError
        As ``preview.circuit.reader.read_stage`` does.
    """
    if "kind" not in table.data:
        raise table.missing(["kind"], PART_EXAMPLE)
    name = table.text("kind")
    if name not in _READERS:
        nearest = get_close_matches(name[:40], list(PartKind), n=1)
        start = f"did you mean {nearest[0]}? " if nearest else ""
        raise table.error("kind", "no such kind of part", f"{start}kinds are {', '.join(PartKind)}")
    return _READERS[PartKind(name)](table, designator)


def setting(table: Table, key: str, part: SettablePart) -> float:
    """The setting under that key, in the unit of ``part.setting``: text, or what TOML has for it."""
    found = table.data[key]
    place = f"{table.place} {key} = "
    if isinstance(part, Switch) and isinstance(found, bool):
        return float(found)
    if isinstance(found, str):
        try:
            return read_setting(part, found, place)
        except NotationError as error:
            raise StageFileError(error.message, error.hint) from error
    if isinstance(part, Switch):
        raise table.error(key, "a switch is open or closed", "true for closed, false for open")
    value = table.number(key)
    if isinstance(part, Potentiometer):
        check_position(value, f"{place}{value:g}")
    else:
        check_value(part.kind, value, f"{place}{value:g}")
    return value


def temperature_degc(table: Table) -> float | None:
    """The temperature under the key ``temperature`` [degrees Celsius]; None where it is not there."""
    if "temperature" not in table.data:
        return None
    return _quantity(table, "temperature", "temperature", *_TEMPERATURE_DEGC)


def opamp_type(name: str, where: str) -> str:
    """The op-amp type as the library spells it; UnknownNameError, beginning with ``where``, for none."""
    try:
        return known_type(name)
    except UnknownNameError as error:
        place = f"{where}{quoted(name)}: " if where else ""
        raise UnknownNameError(f"{place}{error.message}", error.hint) from error


def _two_terminal(table: Table, designator: str, kind: PartKind) -> TwoTerminal:
    capacitor = kind is PartKind.CAPACITOR
    extra = ("dielectric", "half_voltage") if capacitor else ()
    optional = ("tolerance", "series", "role", "adjust", *extra)
    table.expect_keys(("kind", "nodes", "value"), optional, PART_EXAMPLE)
    return TwoTerminal(
        designator=designator,
        kind=kind,
        nodes=_pair(table, "nodes"),
        value=_value(table, "value", kind),
        tolerance_ratio=_tolerance(table),
        series=_series(table) if "series" in table.data else None,
        role=table.line("role"),
        dielectric=table.line("dielectric"),
        half_v=_quantity(table, "half_voltage", "voltage", *_HALF_V)
        if "half_voltage" in table.data
        else None,
        adjust=table.flag("adjust", default=False),
    )


def _potentiometer(table: Table, designator: str) -> Potentiometer:
    optional = ("taper", "position", "tolerance", "role", "adjust")
    table.expect_keys(("kind", "ends", "wiper", "value"), optional, _POT_EXAMPLE)
    part = Potentiometer(
        designator=designator,
        ends=_pair(table, "ends"),
        wiper=_node(table, "wiper", table.text("wiper")),
        value=_value(table, "value", PartKind.POTENTIOMETER),
        taper=_taper(table),
        tolerance_ratio=_tolerance(table),
        role=table.line("role"),
        adjust=table.flag("adjust", default=True),
    )
    return part.with_setting(setting(table, "position", part)) if "position" in table.data else part


def _taper(table: Table) -> Taper:
    text = table.text("taper", "linear")
    for taper in TAPERS:
        if text == taper:
            return taper
    raise table.error("taper", "no such taper", f"tapers are {', '.join(TAPERS)}")


def _switch(table: Table, designator: str) -> Switch:
    table.expect_keys(("kind", "nodes", "closed"), ("role", "adjust"), _SWITCH_EXAMPLE)
    return Switch(
        designator=designator,
        nodes=_pair(table, "nodes"),
        closed=table.flag("closed"),
        role=table.line("role"),
        adjust=table.flag("adjust", default=True),
    )


def _diode(table: Table, designator: str) -> Diode:
    if "nodes" in table.data:
        raise table.error("nodes", "a diode has a direction", 'write anode = "sum", cathode = "out"')
    optional = ("emission", *_DIODE_FIGURES, "temperature", "role")
    table.expect_keys(("kind", "anode", "cathode", "type"), optional, _DIODE_EXAMPLE)
    anode, cathode = (_node(table, key, table.text(key)) for key in ("anode", "cathode"))
    if anode == cathode:
        raise table.error("cathode", "both ends are on the same node", "give it two different nodes")
    name = table.text("type").strip().lower()
    return Diode(
        designator=designator,
        anode=anode,
        cathode=cathode,
        type=name,
        model=_diode_model(table, name),
        temperature_degc=temperature_degc(table),
        role=table.line("role"),
    )


def _diode_model(table: Table, name: str) -> DiodeModel:
    """The figures of that type with those of the file in their place."""
    if name not in DIODE_TYPES:
        nearest = get_close_matches(name[:40], DIODE_TYPES, n=1)
        start = f"did you mean {nearest[0]}? " if nearest else ""
        raise table.error("type", "no such type of diode", f"{start}types are {', '.join(DIODE_TYPES)}")
    if "breakdown" not in table.data:
        if name == "zener":
            raise table.missing(["breakdown"], 'write the zener voltage: breakdown = "5.1 V"')
        for key in ("breakdown_current", "breakdown_slope"):
            if key in table.data:
                raise table.error(key, "without breakdown", 'write the breakdown voltage: breakdown = "60 V"')
    given: dict[str, Any] = {}
    if "emission" in table.data:
        low, high = _EMISSION
        given["emission"] = emission = table.number("emission")
        if not low <= emission <= high:
            raise table.error("emission", "out of range", f"allowed are {low:g} to {high:g}; 1 to 2 is usual")
    for key, (field, kind, low, high) in _DIODE_FIGURES.items():
        if key in table.data:
            given[field] = _quantity(table, key, kind, low, high)
    return replace(DIODE_TYPES[name], **given)


def _voltage(table: Table, designator: str) -> FixedVoltage:
    table.expect_keys(("kind", "nodes", "value"), ("role",), _VOLTAGE_EXAMPLE)
    nodes = _pair(table, "nodes")
    if GND not in nodes:
        raise table.error("nodes", "neither end is gnd", f"a fixed voltage stands on gnd: {_VOLTAGE_EXAMPLE}")
    return FixedVoltage(designator, nodes, _value(table, "value", PartKind.VOLTAGE), role=table.line("role"))


def _opamp(table: Table, designator: str) -> OpAmp:
    table.expect_keys(("kind", "plus", "minus", "out", "type"), ("role",), _OPAMP_EXAMPLE)
    plus, minus, out = (_node(table, key, table.text(key)) for key in ("plus", "minus", "out"))
    if plus == minus:
        raise table.error("minus", "plus and minus are the same node", "give them two different nodes")
    type_name = table.text("type")
    if is_path(type_name):
        raise table.error(
            "type",
            "a file, where a type's name is wanted",
            f"give the file when the stage is used: --opamp {designator}=FILE",
        )
    return OpAmp(
        designator=designator,
        plus=plus,
        minus=minus,
        out=out,
        type=opamp_type(type_name, f"{table.place} type = "),
        role=table.line("role"),
    )


_READERS: dict[PartKind, Callable[[Table, str], Part]] = {
    PartKind.RESISTOR: lambda table, name: _two_terminal(table, name, PartKind.RESISTOR),
    PartKind.CAPACITOR: lambda table, name: _two_terminal(table, name, PartKind.CAPACITOR),
    PartKind.INDUCTOR: lambda table, name: _two_terminal(table, name, PartKind.INDUCTOR),
    PartKind.POTENTIOMETER: _potentiometer,
    PartKind.SWITCH: _switch,
    PartKind.DIODE: _diode,
    PartKind.VOLTAGE: _voltage,
    PartKind.OPAMP: _opamp,
}


def _pair(table: Table, key: Literal["nodes", "ends"]) -> tuple[str, str]:
    names = table.data[key]
    if not isinstance(names, list) or len(names) != 2 or not all(isinstance(n, str) for n in names):
        raise table.error(key, "two node names are wanted", f'write {key} = ["in", "sum"]')
    a, b = (_node(table, key, name) for name in names)
    if a == b:
        raise table.error(key, "both ends are on the same node", "give it two different nodes")
    return a, b


def _node(table: Table, key: str, name: str) -> str:
    plain = name.lower().replace("\N{MINUS SIGN}", "-")
    if plain in _RESERVED_NODES and name != plain:
        raise table.error(key, f"{name} could be mistaken for {plain}", f"write {plain}")
    if name not in _RAILS and not _NODE.fullmatch(name):
        raise table.error(
            key,
            f"{quoted(name)} is not a node name",
            f"use letters, digits and _, at most 24; the rails are {' and '.join(_RAILS)}",
        )
    if name == SOURCE_NODE:
        raise table.error(
            key, f"the node name {SOURCE_NODE} is kept for the source behind its resistance", "choose another"
        )
    return name


def _value(table: Table, key: str, kind: PartKind) -> float:
    """A part's value from text (``"4k7"``) or from a plain number in ohm, farad, henry or volt."""
    if not isinstance(table.data[key], str):
        value = table.number(key)
        check_value(kind, value, f"{table.place} {key} = {value:g}")
        return value
    try:
        return read_value(kind, table.text(key), f"{table.place} {key} = ")
    except NotationError as error:
        raise StageFileError(error.message, error.hint) from error


def _quantity(table: Table, key: str, kind: Kind, low: float, high: float) -> float:
    """A figure within what is not taken for a slip, from text or from a plain number in its base unit."""
    if isinstance(table.data[key], str):
        value = table.read(key, lambda text: parse_value(text, kind, allow_zero=True))
    else:
        value = table.number(key)
    if not low <= value <= high:
        raise table.error(
            key, "out of range", f"allowed are {format_value(low, kind)} to {format_value(high, kind)}"
        )
    return value


def _tolerance(table: Table) -> float | None:
    if "tolerance" not in table.data:
        return None
    percent = table.read("tolerance", lambda text: parse_value(text, "percent"))
    if not 0.0 < percent < 100.0:
        raise table.error("tolerance", "out of range", "above 0 % and below 100 %")
    return percent / 100.0


def _series(table: Table) -> str:
    try:
        return series_name(table.text("series"))
    except NotationError as error:
        raise StageFileError(f"{table.place} series = {error.message}", error.hint) from error
