"""The op-amp library as tables and objects: to compare types, and to see where each figure comes from."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Sequence
from dataclasses import fields

from preview.circuit.opamp import OpAmpModel
from preview.circuit.opamp_library import find_opamp, find_sheet, opamp_names
from preview.circuit.opamp_sheet import OpAmpSheet, SheetFigure, SheetSwing
from preview.circuit.opamp_units import FIGURE_FIELDS, FIGURES, format_figure
from preview.errors import OpAmpFileError
from preview.values.notation import format_value

__all__ = ["comparison_lines", "opamp_lines", "opamp_object", "opamp_report", "side_by_side_lines"]

_WIDTH = 100
_SWINGS = {
    "swing_high_v": "highest output, below the positive rail",
    "swing_low_v": "lowest output, above the negative rail",
}
_REST = ("type", "title", "assumed", "sources")


def opamp_report(chosen: Sequence[str] = ()) -> tuple[dict[str, object], list[str], list[str]]:
    """One type, or some or all side by side, as an object and as lines; then what is wrong with files of one's own.

    Parameters
    ----------
    chosen : Sequence
        Types or files; all types where there are none.

    Raises
    ------
    UnknownNameError, OpAmpFileError
        No such type, or a file that cannot be read as one.
    """
    if len(chosen) == 1:
        return opamp_object(chosen[0], whole=True), opamp_lines(chosen[0]), []
    if chosen:
        return {"opamps": [opamp_object(name) for name in chosen]}, side_by_side_lines(chosen), []
    names, problems = [], []
    for known in opamp_names():
        try:
            find_opamp(known)
        except OpAmpFileError as error:
            problems.append(str(error))
        else:
            names.append(known)
    return {"opamps": [opamp_object(known) for known in names]}, comparison_lines(names), problems


def comparison_lines(names: Iterable[str]) -> list[str]:
    """One line a type: speed, noise, swing, supply, class, vices; an assumed figure is followed by ``~``."""
    heads = (
        "type",
        "gain-bandwidth",
        "slew rate",
        "noise at 1 kHz",
        "swing +/-",
        "supply",
        "class",
        "beware of",
    )
    plain: list[OpAmpModel] = []
    rows: list[tuple[str, ...]] = [heads]
    for name in names:
        model, sheet = find_opamp(name), find_sheet(name)
        if sheet is None:
            plain.append(model)
        else:
            rows.append(_row(model, sheet))
    widths = [max(len(row[n]) for row in rows) for n in range(len(heads))]
    lines = ["  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=True)).rstrip() for row in rows]
    lines[1:1] = [f"{model.type:<{widths[0]}}  {model.title}" for model in plain]
    return [*lines, "~ assumed of its class; `preview opamps NAME` gives every figure with its source"]


def side_by_side_lines(names: Sequence[str]) -> list[str]:
    """Every figure of some types in a line each; an assumed figure is followed by ``~``."""
    models = [find_opamp(name) for name in names]
    rows = [("", *(model.type for model in models))]
    for field in (*FIGURE_FIELDS, *_SWINGS):
        cells = (_value(model, field) + _mark(model, field) if model.real else "no limit" for model in models)
        rows.append((_meaning(field), *cells))
    widths = [max(len(row[n]) for row in rows) for n in range(len(rows[0]))]
    lines = ["  ".join(f"{cell:<{w}}" for cell, w in zip(row, widths, strict=True)).rstrip() for row in rows]
    return [*lines, "~ assumed of its class; `preview opamps NAME` gives every figure with its source"]


def _row(model: OpAmpModel, sheet: OpAmpSheet) -> tuple[str, ...]:
    slews = sorted({model.slew_up_v_per_s, model.slew_down_v_per_s})
    return (
        model.type,
        format_figure(model.gain_bandwidth_hz, "frequency"),
        "/".join(format_figure(slew, "slew") for slew in slews),
        format_figure(_noise_at(model, 1e3), "noise_voltage", digits=2) + _mark(model, "noise_v_rthz"),
        f"{_volts(model.swing_high_v)}/{_volts(model.swing_low_v)}{_mark(model, 'swing_high_v', 'swing_low_v')}",
        f"{model.supply_min_v:g} to {model.supply_max_v:g} V{_mark(model, 'supply_min_v', 'supply_max_v')}",
        sheet.class_name,
        ", ".join(_vices(model)),
    )


def _vices(model: OpAmpModel) -> list[str]:
    """What surprises in a type of this kind."""
    vices = []
    if model.input_overdrive == "reverses":
        vices.append("phase reversal")
    if model.crossover_v > 0.0:
        vices.append("crossover")
    return vices


def _noise_at(model: OpAmpModel, frequency_hz: float) -> float:
    """Voltage noise density at a frequency [V/sqrt(Hz)]."""
    return model.noise_v_rthz * math.sqrt(1.0 + model.noise_corner_hz / frequency_hz)


def _volts(value: float) -> str:
    return format_value(value, "voltage")


def _mark(model: OpAmpModel, *names: str) -> str:
    return "~" if any(name in model.assumed for name in names) else ""


def opamp_lines(name: str) -> list[str]:
    """Everything that is known of one type: figure, value, source; then what is assumed."""
    model, sheet = find_opamp(name), find_sheet(name)
    if sheet is None:
        return [f"{model.type}: {model.title}", "  built in; it has no figures"]
    lines = [f"{model.type}: {model.title} (class {sheet.class_name})"]
    lines += [f"  {line}" for line in textwrap.wrap(sheet.about, _WIDTH)]
    if sheet.data_sheet:
        lines += textwrap.wrap(f"data sheets: {sheet.data_sheet}", _WIDTH, initial_indent="  ")
    given = [(FIGURES[figure.name].meaning, _written(figure), figure.origin) for figure in sheet.figures]
    given += [("output swing, from the rails", _swing(swing), swing.origin) for swing in sheet.swings]
    sources = dict(model.sources)
    assumed = [(_meaning(field), _value(model, field), sources[field]) for field in model.assumed]
    widths = [max(len(row[n]) for row in (*given, *assumed)) for n in (0, 1)]
    lines += ["", *_rows(given, widths)]
    if assumed:
        lines += ["", "assumed, for the file does not give them:", *_rows(assumed, widths)]
    return lines


def _rows(rows: Iterable[tuple[str, str, str]], widths: list[int]) -> list[str]:
    return [f"  {what:<{widths[0]}}  {value:<{widths[1]}}  {source}" for what, value, source in rows]


def _written(figure: SheetFigure) -> str:
    """The figure as the file writes it."""
    if figure.at_hz is None:
        return figure.text
    return f"{figure.text} at {format_value(figure.at_hz, 'frequency')}"


def _swing(swing: SheetSwing) -> str:
    ways = (("+", swing.high_v), ("-", swing.low_v))
    return ", ".join(f"{sign} {_volts(value)}" for sign, value in ways if value is not None)


def _meaning(field: str) -> str:
    return _SWINGS[field] if field in _SWINGS else FIGURES[FIGURE_FIELDS[field][0]].meaning


def _value(model: OpAmpModel, field: str) -> str:
    value: float | str = getattr(model, field)
    if isinstance(value, str):
        return value
    return format_figure(value, "voltage" if field in _SWINGS else FIGURES[FIGURE_FIELDS[field][0]].unit)


def opamp_object(name: str, *, whole: bool = False) -> dict[str, object]:
    """One type for a report, SI units; ``whole`` adds the source of every figure and the swings."""
    model, sheet = find_opamp(name), find_sheet(name)
    body: dict[str, object] = {
        "name": model.type,
        "title": model.title,
        "class": sheet.class_name if sheet else None,
        "real": model.real,
        **{field.name: getattr(model, field.name) for field in fields(model) if field.name not in _REST},
        **{name: _points(getattr(model, name)) for name in ("swing_high_points", "swing_low_points")},
        "current_limit_a": model.current_limit_a,
        "assumed": list(model.assumed),
    }
    if whole:
        body["about"] = sheet.about if sheet else ""
        body["data_sheet"] = sheet.data_sheet if sheet else ""
        body["sources"] = dict(model.sources)
        body["swings"] = [
            {
                "load_ohm": swing.load_ohm,
                "current_a": swing.current_a,
                "supply_positive_v": swing.supply_v[0],
                "supply_negative_v": swing.supply_v[1],
                "swing_high_v": swing.high_v,
                "swing_low_v": swing.low_v,
                "source": swing.origin,
            }
            for swing in (sheet.swings if sheet else ())
        ]
    return body


def _points(points: Iterable[tuple[float, float]]) -> list[dict[str, float]]:
    """Loss of swing by output current."""
    return [{"current_a": current_a, "drop_v": drop_v} for current_a, drop_v in points]
