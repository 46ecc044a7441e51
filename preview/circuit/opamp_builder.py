"""The model of an op-amp file: its own figures first, its class for the rest."""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from preview.circuit.opamp import OVERDRIVES, OpAmpModel
from preview.circuit.opamp_classes import CLASSES, shot_noise_a_rthz
from preview.circuit.opamp_sheet import SheetFigure, SheetSwing
from preview.circuit.opamp_units import FIGURE_FIELDS

__all__ = ["ModelBuilder", "swing_points"]


def swing_points(stated: Iterable[tuple[float, float]]) -> tuple[tuple[float, float], ...]:
    """Loss of swing by output current, as points of a line that begins at 0 A and never bends down.

    Below the smallest current that is stated the loss stays what it is there, and a loss that falls with more
    current is taken as constant. Where the points bend down (the loss grows slower with more current), the highest
    line that bends up everywhere and lies on or below them is taken, so that a circuit has one answer at every
    current.

    Parameters
    ----------
    stated : iterable of (float, float)
        Output current [A] and distance from the rail [V].

    Returns
    -------
    tuple
        Points by rising current; empty where the loss is one and the same.
    """
    worst: dict[float, float] = {}
    for current_a, drop_v in sorted(stated):
        worst[current_a] = max(drop_v, *worst.values(), 0.0)
    lightest_v = next(iter(worst.values()))
    points = sorted({0.0: lightest_v, **worst}.items())
    line: list[tuple[float, float]] = []
    for point in points:
        while len(line) > 1 and _slope(line[-2], line[-1]) > _slope(line[-1], point):
            line.pop()
        line.append(point)
    return tuple(line) if line[-1][1] > line[0][1] else ()


def _slope(a: tuple[float, float], b: tuple[float, float]) -> float:
    return (b[1] - a[1]) / (b[0] - a[0])


class ModelBuilder:
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

    def _assume(self, field: str, value: float | str, why: str) -> None:
        self._values[field] = value
        self._sources[field] = why
        self._assumed.append(field)

    def _from_file(self, field: str, names: tuple[str, ...]) -> None:
        given = [self._given[name] for name in names if name in self._given]
        if given:
            chosen = min(given, key=lambda figure: figure.value)
            self._values[field] = (
                OVERDRIVES[int(chosen.value)] if field == "input_overdrive" else chosen.value
            )
            self._sources[field] = chosen.origin

    def _from_swings(self, swings: tuple[SheetSwing, ...]) -> None:
        """The swing into the lightest load that is stated, and its loss by the output current, each way for itself."""
        for way in ("high", "low"):
            rows = [
                (swing.source_a if way == "high" else swing.sink_a, drop_v, swing.origin)
                for swing in swings
                if (drop_v := swing.high_v if way == "high" else swing.low_v) is not None
            ]
            if not rows:
                continue
            _, drop_v, origin = min(rows, key=lambda row: (row[0], -row[1]))
            self._values[f"swing_{way}_v"] = drop_v
            self._sources[f"swing_{way}_v"] = origin
            stated = {(current_a, drop_v) for current_a, drop_v, _ in rows}
            points = swing_points(stated)
            if points:
                bent = (
                    ", bent where the stated loss grows slower with more current"
                    if stated - {*points}
                    else ""
                )
                self._values[f"swing_{way}_points"] = points
                self._sources[f"swing_{way}_points"] = f"the stated swings, joined by straight lines{bent}"

    def _take_out_corner(self, name: str, field: str, corner: str) -> None:
        """A density measured at a frequency, less the 1/f part that its corner puts there."""
        figure = self._given.get(name)
        if figure is not None and figure.at_hz is not None:
            self._values[field] = figure.value / math.sqrt(1.0 + self._values[corner] / figure.at_hz)
