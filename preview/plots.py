"""Pictures of the response as PNG or SVG files. The only place that knows matplotlib."""

from __future__ import annotations

import io
import math
import re
import textwrap
import warnings
from typing import TYPE_CHECKING, Any, Literal

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter

from preview import __version__
from preview.analysis.curves import Curves, curves
from preview.circuit.drive import IDEAL_SOURCE, NO_LOAD, said
from preview.circuit.settings import setting_text
from preview.values.levels import format_volts
from preview.values.notation import format_value

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from preview.analysis.answers import Answers
    from preview.session import Session

__all__ = ["INKS", "STYLE", "picture_bytes", "response_picture"]

_PAPER, _INK, _FAINT, _RULE = "#fcfcf9", "#1c2b33", "#66757d", "#dcdfd8"
_DRIVEN, _DRAWN, _BETWEEN, _CORNER = "#0a5a63", "#b8651b", "#94a5a1", "#8c2f39"
INKS = (_DRIVEN, _DRAWN, _CORNER, "#5b4b8a", "#3d7a3d", "#94772a", "#4a6fa5", "#7a4a6b")
"""Colours of curves side by side."""
STYLE: Any = {
    "figure.facecolor": _PAPER,
    "axes.facecolor": _PAPER,
    "axes.edgecolor": _FAINT,
    "axes.labelcolor": _INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "axes.axisbelow": True,
    "axes.titlelocation": "left",
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlecolor": _INK,
    "font.size": 9.0,
    "grid.color": _RULE,
    "grid.linewidth": 0.7,
    "lines.linewidth": 1.8,
    "lines.solid_capstyle": "round",
    "text.color": _INK,
    "xtick.color": _FAINT,
    "ytick.color": _FAINT,
    "xtick.labelcolor": _INK,
    "ytick.labelcolor": _INK,
    "text.parse_math": False,
    "svg.hashsalt": "preview",
    "svg.fonttype": "none",
}
_POINTS, _WIDE = 601, 112
"""Frequencies of a curve, and characters of a line below the title."""
_LOWEST_DB = 90.0
"""What is farther than this below the top of the gain is cut off [dB]."""


def response_picture(session: Session, found: Answers, kind: Literal["png", "svg"]) -> bytes:
    """Gain, phase, group delay and step response of a session's circuit on one page, as the bytes of a file.

    Raises
    ------
    CircuitError
        The circuit cannot be computed.
    """
    drawn = curves(session, _POINTS)
    with mpl.rc_context(STYLE):
        page = Figure(figsize=(8.0, 9.2), dpi=150)
        FigureCanvasAgg(page)
        grid = page.add_gridspec(
            3,
            2,
            height_ratios=(1.5, 1.0, 1.0),
            left=0.09,
            right=0.965,
            top=0.866,
            bottom=0.075,
            hspace=0.42,
            wspace=0.24,
        )
        title = textwrap.shorten(session.stage.title, 64, placeholder=" ...")
        page.text(0.045, 0.968, title, size=15, weight="bold", va="center")
        page.text(0.045, 0.95, _conditions(session), size=8.5, color=_FAINT, va="top", linespacing=1.4)
        _gain(page.add_subplot(grid[0, :]), drawn)
        _phase(page.add_subplot(grid[1, 0]), drawn)
        _delay(page.add_subplot(grid[1, 1]), drawn)
        _step(page.add_subplot(grid[2, 0]), drawn)
        _figures(page.add_subplot(grid[2, 1]), found)
        note = f"Preview {__version__}: the exact circuit, small signal"
        page.text(0.965, 0.022, note, size=7.5, color=_FAINT, ha="right")
        return picture_bytes(page, kind)


def picture_bytes(page: Figure, kind: Literal["png", "svg"]) -> bytes:
    """A page as the bytes of a file, the same ones each time; within ``STYLE``."""
    out = io.BytesIO()
    metadata = {"Date": None} if kind == "svg" else {"Software": f"Preview {__version__}"}
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "Glyph")  # a title may have letters that the fonts have not
        page.savefig(out, format=kind, metadata=metadata)
    return out.getvalue()


def _conditions(session: Session) -> str:
    """Supply, source, load and every part, in three lines at most."""
    supply = session.supply
    ends = f"supply {format_volts(supply.positive_v)} and {format_volts(supply.negative_v)}"
    if session.source != IDEAL_SOURCE:
        ends += f"; source {said(session.source)}"
    if session.load != NO_LOAD:
        ends += f"; load {said(session.load)}"
    parts = [f"{part.designator} {setting_text(part)}" for part in session.stage.settable]
    parts += [f"{opamp.designator} {opamp.type}" for opamp in session.stage.opamps]
    lines = [textwrap.shorten(ends, _WIDE, placeholder=" ..."), *textwrap.wrap(", ".join(parts), _WIDE)]
    return "\n".join(lines if len(lines) <= 3 else [*lines[:2], f"{lines[2]} ..."])


def _figures(axes: Axes, found: Answers) -> None:
    """The figures in words."""
    axes.set_axis_off()
    rows = found.figures()
    rows.insert(1, ("corners", found.driven.corners_said()))
    if found.drawn is not None:
        rows.append(("as drawn", f"{found.drawn.gain_db:.2f} dB, corners {found.drawn.corners_said()}"))
    height = 0.96
    look: dict[str, Any] = {"size": 8.5, "va": "baseline", "transform": axes.transAxes}
    for word, text in rows:
        axes.text(-0.02, height, word, color=_FAINT, **look)
        together = re.sub(r"(?<=[0-9]) (?=[^0-9 ])|(?<=Hz) (?=Q)|(?<=Q) ", "\N{NO-BREAK SPACE}", text)
        for line in textwrap.wrap(together, 40)[:4]:
            axes.text(0.19, height, line, **look)
            height -= 0.085
        height -= 0.025


def _shown(curves: Curves) -> list[tuple[Any, dict[str, Any]]]:
    """Responses with the look of their lines, the most important last."""
    lines: list[tuple[Any, dict[str, Any]]] = [
        (response, {"color": _BETWEEN, "linewidth": 1.2, "label": f"at {node}"})
        for node, response in curves.stages
    ]
    if curves.drawn is not None:
        lines.append((curves.drawn, {"color": _DRAWN, "linestyle": (0, (5, 2.5)), "label": "as drawn"}))
    name = "as driven and loaded" if curves.drawn is not None else "at out"
    return [*lines, (curves.driven, {"color": _DRIVEN, "label": name})]


def _over_frequency(axes: Axes, curves: Curves) -> None:
    """A frequency axis in decades, each with its 2 and 5, and the corners."""
    f = curves.driven.frequency_hz
    axes.set_xscale("log")
    axes.set_xlim(f[0], f[-1])
    decades = [10.0**k for k in range(round(math.log10(f[0])), round(math.log10(f[-1])) + 1)]
    axes.xaxis.set_major_locator(FixedLocator(decades))
    axes.xaxis.set_minor_locator(FixedLocator([k * hz for hz in decades[:-1] for k in (2.0, 5.0)]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda hz, _: _short(hz)))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.grid(True, which="minor", axis="x", linewidth=0.4)
    for hz in curves.driven.corners_hz:
        axes.axvline(hz, color=_CORNER, linewidth=0.9, linestyle=(0, (1, 2.2)))


def _short(hz: float) -> str:
    """A frequency on the axis: 10, 1k, 1M."""
    return format_value(hz, "frequency").replace(" ", "").removesuffix("Hz")


def _gain(axes: Axes, curves: Curves) -> None:
    highest = max(
        float(np.max(response.gain_db[np.isfinite(response.gain_db)], initial=-300.0))
        for response, _ in _shown(curves)
    )
    for response, look in _shown(curves):
        axes.plot(response.frequency_hz, np.maximum(response.gain_db, highest - 1.5 * _LOWEST_DB), **look)
    low, high = axes.get_ylim()
    axes.set_ylim(max(low, highest - _LOWEST_DB), max(high, highest + 1.0))
    if high - low < 2.0:
        axes.set_ylim(highest - 4.0, highest + 1.0)
    axes.set_title("Gain, dB")
    _over_frequency(axes, curves)
    axes.set_xlabel("Hz", loc="right", labelpad=1)
    edge = curves.driven.passband_gain_db - 10.0 * math.log10(2.0)
    for hz in curves.driven.corners_hz:
        axes.plot([hz], [edge], "o", color=_CORNER, markersize=4.5)
        left = hz > math.sqrt(curves.driven.frequency_hz[0] * curves.driven.frequency_hz[-1])
        axes.annotate(
            format_value(hz, "frequency"),
            (hz, edge),
            textcoords="offset points",
            xytext=(-6 if left else 6, -13),
            ha="right" if left else "left",
            color=_CORNER,
            size=8.5,
        )
    if len(_shown(curves)) > 1:
        axes.legend(loc="lower center", frameon=False, ncols=4, bbox_to_anchor=(0.5, 1.0), borderaxespad=0.1)


def _phase(axes: Axes, curves: Curves) -> None:
    for response, look in _shown(curves):
        axes.plot(response.frequency_hz, np.degrees(np.unwrap(np.angle(response.gain))), **look)
    axes.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 1.5, 3, 4.5, 9, 10]))
    axes.set_title("Phase, degrees")
    _over_frequency(axes, curves)


def _delay(axes: Axes, curves: Curves) -> None:
    whole = np.concatenate([response.group_delay_s for response, _ in _shown(curves)])
    largest = float(np.max(np.abs(whole[np.isfinite(whole)]), initial=0.0))
    factor, unit = _unit_of_time(largest)
    for response, look in _shown(curves):
        axes.plot(response.frequency_hz, response.group_delay_s * factor, **look)
    axes.set_title(f"Group delay, {unit}")
    _over_frequency(axes, curves)


def _step(axes: Axes, curves: Curves) -> None:
    axes.set_title("Output after a step of 1 V, V")
    if curves.step is None:
        axes.set_title("Step")
        axes.set_axis_off()
        axes.text(0.0, 0.9, "does not come to rest", transform=axes.transAxes, color=_FAINT, va="top")
        return
    time_s, volts = curves.step
    factor, unit = _unit_of_time(float(time_s[-1]))
    axes.plot(np.concatenate([[0.0], time_s]) * factor, np.concatenate([[0.0], volts]), color=_DRIVEN)
    axes.axhline(volts[-1], color=_CORNER, linewidth=0.9, linestyle=(0, (1, 2.2)))
    axes.set_xlim(-0.02 * time_s[-1] * factor, time_s[-1] * factor)
    axes.set_xlabel(unit, loc="right", labelpad=1)


def _unit_of_time(longest_s: float) -> tuple[float, str]:
    """What times are multiplied by for an axis, and the unit that makes of them."""
    for factor, unit in ((1.0, "s"), (1e3, "ms"), (1e6, "µs")):
        if longest_s * factor >= 1.0:
            return factor, unit
    return 1e9, "ns"
