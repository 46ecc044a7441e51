"""Reading an op-amp file. The file is data: nothing in it is executed.

::

    title = "JFET dual, low noise"
    class = "jfet"
    about = "..."
    data_sheet = "Motorola TL072C"

    [figures]
    slew = { value = "13 V/us", cond = "RL 2 kohm", source = "... p. 3", found = "read" }

    [[swing]]
    load = "10 kohm"
    supply = "+15 -15"
    high = "1 V"
    low = "1 V"
    source = "..."
    found = "read"

``high`` is the distance from the positive rail, ``low`` that from the negative one, with the load from the output
to gnd on that supply; without one it is the usual supply of the class. ``current = "1 mA"`` in place of ``load``
states the output current itself. From the rows follows how the swing shrinks with the output current.
``overdrive`` is ``clips`` or ``reverses``. A noise figure may say ``at = "1 kHz"``; its white part then follows
from its corner. ``found`` is ``read`` where the figure was seen in the source and ``memory`` where it was recalled
from it.
"""

from __future__ import annotations

from pathlib import Path

from preview.circuit.opamp import OpAmpModel
from preview.circuit.opamp_builder import ModelBuilder
from preview.circuit.opamp_classes import CLASSES
from preview.circuit.opamp_sheet import Found, OpAmpSheet, SheetFigure, SheetSwing
from preview.circuit.opamp_units import (
    FIGURES,
    Unit,
    format_figure,
    parse_figure_value,
)
from preview.circuit.tables import Table, decode, parse_toml, read_bytes
from preview.errors import NotationError, OpAmpFileError, StageFileError, printable
from preview.values.levels import parse_supply

__all__ = ["parse_opamp", "read_opamp", "read_sheet"]

MOST_SWINGS = 20
"""More rows of output swing than this are refused."""
_EXAMPLE = 'begin with title = "...", class = "jfet" and a table [figures]'
_FIGURE_EXAMPLE = 'write slew = { value = "13 V/us", source = "data sheet, page", found = "read" }'
_SWING_EXAMPLE = 'write load = "10 kohm", high = "1 V", low = "1 V", source = "...", found = "read"'
_NEEDED = ("gain_bandwidth",)
_AT = ("noise_voltage", "noise_current")
_SWING_LOADS = (1.0, 1e9)
_SWING_CURRENTS = (0.0, 100.0)


def read_opamp(path: Path) -> OpAmpModel:
    """The op-amp in a file; OpAmpFileError for one that cannot be read as such."""
    return read_sheet(path).model


def read_sheet(path: Path) -> OpAmpSheet:
    """The op-amp file at that path; OpAmpFileError for one that cannot be read as such."""
    file = str(path)
    try:
        text = decode(read_bytes(path), file)
    except StageFileError as error:
        raise OpAmpFileError(error.message, "`preview opamps` lists the types there are") from error
    return parse_opamp(text, name=path.stem, file=file)


def parse_opamp(text: str, *, name: str, file: str) -> OpAmpSheet:
    """The op-amp in the text of a file.

    Parameters
    ----------
    text : str
        The TOML text.
    name : str
        Name of the type.
    file : str
        The file's name for messages.

    Raises
    ------
    OpAmpFileError
        Not TOML, or not an op-amp.
    """
    try:
        top = parse_toml(text, file)
        return _sheet(top, printable(name))
    except StageFileError as error:
        raise OpAmpFileError(error.message, error.hint) from error


def _sheet(top: Table, name: str) -> OpAmpSheet:
    top.expect_keys(("title", "class", "figures"), ("about", "data_sheet", "swing"), _EXAMPLE)
    class_name = top.text("class")
    if class_name not in CLASSES:
        raise top.error("class", "no such class of op-amp", f"classes are {', '.join(CLASSES)}")
    title = top.line("title", required=True)
    figures = _figures(top)
    swings = _swings(top, CLASSES[class_name].test_supply_v)
    model = ModelBuilder(class_name, figures, swings).model(name, title)
    if model.supply_min_v >= model.supply_max_v:
        raise StageFileError(
            f"{top.file}: smallest supply {model.supply_min_v:g} V, largest {model.supply_max_v:g} V",
            "supply_min is below supply_max",
        )
    return OpAmpSheet(
        class_name=class_name,
        about=top.line("about"),
        data_sheet=top.line("data_sheet"),
        figures=figures,
        swings=swings,
        model=model,
    )


def _found(table: Table) -> Found:
    match table.text("found"):
        case "read":
            return "read"
        case "memory":
            return "memory"
    raise table.error(
        "found", "neither read nor memory", "read: seen in the source; memory: recalled from it"
    )


def _value(table: Table, key: str, unit: Unit, low: float, high: float) -> float:
    """A figure within what is not taken for a slip [SI units]."""
    value = table.read(key, lambda text: parse_figure_value(text, unit))
    if not low <= value <= high:
        allowed = f"{format_figure(low, unit)} to {format_figure(high, unit)}"
        raise table.error(key, "out of range", f"allowed are {allowed}")
    return value


def _figures(top: Table) -> tuple[SheetFigure, ...]:
    group = top.table("figures", "[figures]")
    group.expect_keys(_NEEDED, tuple(name for name in FIGURES if name not in _NEEDED), _FIGURE_EXAMPLE)
    for pair in (("slew_up", "slew_down"), ("current_source", "current_sink")):
        both = "slew" if pair[0].startswith("slew") else "current_limit"
        given = [name for name in pair if name in group.data]
        if both in group.data and given:
            raise StageFileError(
                f"{group.place}: {both} and {given[0]} both given", f"write {both}, or {' and '.join(pair)}"
            )
        if len(given) == 1:
            other = pair[0] if given[0] == pair[1] else pair[1]
            raise StageFileError(f"{group.place}: {given[0]} without {other}", f"write {both}, or both")
    if "slew" not in group.data and "slew_up" not in group.data:
        raise group.missing(["slew"], _FIGURE_EXAMPLE)
    return tuple(_figure(group.table(name, f"[figures.{name}]"), name) for name in group.data)


def _figure(table: Table, name: str) -> SheetFigure:
    extra = ("at",) if name in _AT else ()
    table.expect_keys(("value", "source", "found"), ("cond", *extra), _FIGURE_EXAMPLE)
    known = FIGURES[name]
    return SheetFigure(
        name=name,
        text=table.line("value", required=True),
        value=_value(table, "value", known.unit, known.low, known.high),
        source=table.line("source", required=True),
        found=_found(table),
        condition=table.line("cond"),
        at_hz=_value(table, "at", "frequency", 0.1, 1e7) if "at" in table.data else None,
    )


def _swings(top: Table, usual_v: tuple[float, float]) -> tuple[SheetSwing, ...]:
    rows = top.data.get("swing", [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise top.error("swing", "not an array of tables", "head each load with [[swing]]")
    if len(rows) > MOST_SWINGS:
        raise StageFileError(f"{top.file} [[swing]]: {len(rows)} rows", f"{MOST_SWINGS} at most")
    swings = [_swing(Table(top.file, f"[[swing]] {n}", row), usual_v) for n, row in enumerate(rows, 1)]
    return tuple(sorted(swings, key=lambda swing: -(swing.load_ohm or 0.0)))


def _swing(table: Table, usual_v: tuple[float, float]) -> SheetSwing:
    optional = ("load", "current", "supply", "high", "low", "cond")
    table.expect_keys(("source", "found"), optional, _SWING_EXAMPLE)
    if "high" not in table.data and "low" not in table.data:
        raise table.missing(["high", "low"], _SWING_EXAMPLE)
    if ("load" in table.data) == ("current" in table.data):
        raise StageFileError(f"{table.place}: either load or current is wanted", _SWING_EXAMPLE)
    high, low = (
        _value(table, key, "voltage", 0.0, 50.0) if key in table.data else None for key in ("high", "low")
    )
    supply_v = _test_supply(table, usual_v)
    if (high or 0.0) + (low or 0.0) >= supply_v[0] - supply_v[1]:
        raise StageFileError(
            f"{table.place}: nothing is left of {supply_v[0]:g} V and {supply_v[1]:g} V",
            'state the supply of the test: supply = "+15 -15"',
        )
    return SheetSwing(
        load_ohm=_value(table, "load", "resistance", *_SWING_LOADS) if "load" in table.data else None,
        current_a=_value(table, "current", "current", *_SWING_CURRENTS) if "current" in table.data else None,
        supply_v=supply_v,
        supply_assumed="supply" not in table.data,
        high_v=high,
        low_v=low,
        source=table.line("source", required=True),
        found=_found(table),
        condition=table.line("cond"),
    )


def _test_supply(table: Table, usual_v: tuple[float, float]) -> tuple[float, float]:
    """Rails of the test [V]; the usual ones of the class where the file states none."""
    if "supply" not in table.data:
        return usual_v
    try:
        return parse_supply(table.text("supply"))
    except NotationError as error:
        raise StageFileError(f"{table.place} supply = {error.message}", error.hint) from error
