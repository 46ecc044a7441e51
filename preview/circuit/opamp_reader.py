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
    high = "1 V"
    low = "1 V"
    source = "..."
    found = "read"

``high`` is the distance from the positive rail, ``low`` that from the negative one. A noise figure may say
``at = "1 kHz"``; its white part then follows from its corner. ``found`` is ``read`` where the figure was seen
in the source and ``memory`` where it was recalled from it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from preview.circuit.opamp import OpAmpModel
from preview.circuit.opamp_classes import CLASSES, shot_noise_a_rthz
from preview.circuit.opamp_units import (
    FIGURE_FIELDS,
    FIGURES,
    Unit,
    format_figure,
    parse_figure_value,
)
from preview.circuit.tables import Table, decode, parse_toml, read_bytes
from preview.errors import OpAmpFileError, StageFileError, printable

__all__ = ["Found", "OpAmpSheet", "SheetFigure", "SheetSwing", "parse_opamp", "read_opamp", "read_sheet"]

Found = Literal["read", "memory"]

MOST_SWINGS = 20
"""More rows of output swing than this are refused."""
_EXAMPLE = 'begin with title = "...", class = "jfet" and a table [figures]'
_FIGURE_EXAMPLE = 'write slew = { value = "13 V/us", source = "data sheet, page", found = "read" }'
_SWING_EXAMPLE = 'write load = "10 kohm", high = "1 V", low = "1 V", source = "...", found = "read"'
_NEEDED = ("gain_bandwidth",)
_AT = ("noise_voltage", "noise_current")
_SWING_LOADS = (1.0, 1e9)


@dataclass(frozen=True, slots=True)
class SheetFigure:
    """One figure of an op-amp file."""

    name: str
    """Its key, such as ``slew``."""
    text: str
    """Value and unit as the file writes them."""
    value: float
    """The value in SI units."""
    source: str
    """Where it comes from."""
    found: Found
    """Whether it was read there or recalled from memory."""
    condition: str = ""
    """The condition it holds under."""
    at_hz: float | None = None
    """Noise: the frequency at which the density was measured [Hz]; None for the white part itself."""

    @property
    def origin(self) -> str:
        """Source, condition and how it was found, in one line."""
        said = f"{self.source}; {self.condition}" if self.condition else self.source
        return f"{said} ({_FOUND[self.found]})"


@dataclass(frozen=True, slots=True)
class SheetSwing:
    """Output swing into one load."""

    load_ohm: float
    """The load [ohm]."""
    high_v: float | None
    """From the highest output up to the positive rail [V]; None where it is not stated."""
    low_v: float | None
    """From the negative rail up to the lowest output [V]; None where it is not stated."""
    source: str
    """Where it comes from."""
    found: Found
    """Whether it was read there or recalled from memory."""
    condition: str = ""
    """The condition it holds under."""

    @property
    def origin(self) -> str:
        """Load, source, condition and how it was found, in one line."""
        load = format_figure(self.load_ohm, "resistance")
        said = f"{self.source}; {self.condition}" if self.condition else self.source
        return f"into {load}: {said} ({_FOUND[self.found]})"


@dataclass(frozen=True, slots=True)
class OpAmpSheet:
    """An op-amp file as it was written, and the model made of it."""

    class_name: str
    """A key of ``preview.circuit.opamp_classes.CLASSES``."""
    about: str
    """What it is for, a sentence or two."""
    data_sheet: str
    """The data sheets and their revisions."""
    figures: tuple[SheetFigure, ...]
    """The figures in the file's order."""
    swings: tuple[SheetSwing, ...]
    """The swings, lightest load first."""
    model: OpAmpModel
    """The figures as the computation takes them."""


_FOUND: dict[Found, str] = {"read": "read", "memory": "from memory"}


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
    swings = _swings(top)
    model = _Builder(class_name, figures, swings).model(name, title)
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


def _swings(top: Table) -> tuple[SheetSwing, ...]:
    rows = top.data.get("swing", [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise top.error("swing", "not an array of tables", "head each load with [[swing]]")
    if len(rows) > MOST_SWINGS:
        raise StageFileError(f"{top.file} [[swing]]: {len(rows)} rows", f"{MOST_SWINGS} at most")
    swings = [_swing(Table(top.file, f"[[swing]] {n}", row)) for n, row in enumerate(rows, 1)]
    return tuple(sorted(swings, key=lambda swing: -swing.load_ohm))


def _swing(table: Table) -> SheetSwing:
    table.expect_keys(("load", "source", "found"), ("high", "low", "cond"), _SWING_EXAMPLE)
    if "high" not in table.data and "low" not in table.data:
        raise table.missing(["high", "low"], _SWING_EXAMPLE)
    high, low = (
        _value(table, key, "voltage", 0.0, 50.0) if key in table.data else None for key in ("high", "low")
    )
    return SheetSwing(
        load_ohm=_value(table, "load", "resistance", *_SWING_LOADS),
        high_v=high,
        low_v=low,
        source=table.line("source", required=True),
        found=_found(table),
        condition=table.line("cond"),
    )


class _Builder:
    """The model of a file: its own figures first, its class for the rest."""

    def __init__(
        self, class_name: str, figures: tuple[SheetFigure, ...], swings: tuple[SheetSwing, ...]
    ) -> None:
        self._class = CLASSES[class_name]
        self._why = f"class {class_name}, from memory: {self._class.reason}"
        self._given = {figure.name: figure for figure in figures}
        self._values: dict[str, Any] = {}
        self._sources: dict[str, str] = {}
        self._assumed: list[str] = []
        for field, names in FIGURE_FIELDS.items():
            self._from_file(field, names)
        self._from_swings(swings)
        for field, value in self._class.figures.items():
            if field not in self._values:
                self._assume(field, value, self._why)
        bias_a = self._values["bias_a"]
        if "offset_current_a" not in self._values:
            ratio = self._class.offset_current_ratio
            self._assume(
                "offset_current_a", ratio * abs(bias_a), f"{self._why}: {ratio:g} of the bias current"
            )
        if "noise_a_rthz" not in self._values:
            why = "shot noise of the bias current, sqrt(2 q I), which is white"
            self._assume("noise_a_rthz", shot_noise_a_rthz(bias_a), why)
            if "noise_current_corner_hz" in self._assumed:
                self._values["noise_current_corner_hz"] = 0.0
                self._sources["noise_current_corner_hz"] = why
        self._take_out_corner("noise_voltage", "noise_v_rthz", "noise_corner_hz")
        self._take_out_corner("noise_current", "noise_a_rthz", "noise_current_corner_hz")

    def model(self, name: str, title: str) -> OpAmpModel:
        """The model with its assumptions and sources in the order of its fields."""
        order = [field for field in OpAmpModel.__dataclass_fields__ if field in self._values]
        return OpAmpModel(
            type=name,
            title=title,
            assumed=tuple(field for field in order if field in self._assumed),
            sources=tuple((field, self._sources[field]) for field in order),
            **self._values,
        )

    def _assume(self, field: str, value: float, why: str) -> None:
        self._values[field] = value
        self._sources[field] = why
        self._assumed.append(field)

    def _from_file(self, field: str, names: tuple[str, ...]) -> None:
        given = [self._given[name] for name in names if name in self._given]
        if given:
            chosen = min(given, key=lambda figure: figure.value)
            self._values[field] = chosen.value
            self._sources[field] = chosen.origin

    def _from_swings(self, swings: tuple[SheetSwing, ...]) -> None:
        """The swing into the lightest load that is stated, each way for itself."""
        for swing in reversed(swings):
            for field, value in (("swing_high_v", swing.high_v), ("swing_low_v", swing.low_v)):
                if value is not None:
                    self._values[field] = value
                    self._sources[field] = swing.origin

    def _take_out_corner(self, name: str, field: str, corner: str) -> None:
        """A density measured at a frequency, less the 1/f part that its corner puts there."""
        figure = self._given.get(name)
        if figure is not None and figure.at_hz is not None:
            self._values[field] = figure.value / math.sqrt(1.0 + self._values[corner] / figure.at_hz)
