"""Pictures of a checked recording: levels over time, how much headroom was left how long, the worst moments."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, Literal

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator

from preview.engine.check.excerpt import Moment
from preview.engine.check.report import time_code
from preview.engine.check.results import FileCheck
from preview.plots import INKS, STYLE, picture_bytes

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from preview.dsp.block import Volts

__all__ = ["Kind", "headroom_picture", "level_picture", "moment_picture"]

Kind = Literal["png", "svg"]

_FAINT, _SHADE = "#66757d", "#f0dcd4"
_DASHED: Any = (0, (4, 2.5))
_MOST_DB = 60


def _page(width: float, height: float) -> Figure:
    page = Figure(figsize=(width, height), dpi=110, layout="constrained")
    FigureCanvasAgg(page)
    return page


def _minutes(axes: Axes, longest_s: float) -> None:
    """A time axis in seconds, or in minutes and seconds."""
    if longest_s < 120.0:
        axes.set_xlabel("s", loc="right", labelpad=1)
        return
    axes.xaxis.set_major_locator(MaxNLocator(nbins=8, steps=[1, 1.5, 3, 6, 10]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda s, _: time_code(max(s, 0.0)).split(".")[0]))


def level_picture(found: FileCheck, kind: Kind) -> bytes:
    """Peaks at input and output, and the headroom of each op-amp, over time."""
    trace = found.trace
    at = np.arange(len(trace.input_peak_v)) * trace.step_s
    with mpl.rc_context(STYLE):
        page = _page(8.0, 3.8)
        above, below = page.subplots(2, 1, sharex=True, height_ratios=(1.0, 1.0))
        for name, volts, ink in (
            ("input", trace.input_peak_v, INKS[1]),
            ("output", trace.output_peak_v, INKS[0]),
        ):
            above.step(at, np.maximum(volts, 1e-9), where="post", color=ink, linewidth=1.0, label=name)
        above.set_yscale("log")
        above.yaxis.set_major_formatter(FuncFormatter(lambda volts, _: f"{volts:g}"))
        top = max(*trace.input_peak_v, *trace.output_peak_v, 1e-6)
        above.set_ylim(top * 1e-4, top * 2.0)
        above.set_title("Peak, V")
        above.legend(loc="lower right", frameon=False, ncols=2, bbox_to_anchor=(1.0, 1.0), borderaxespad=0.1)
        for j, opamp in enumerate(found.opamps):
            shown = np.minimum(trace.headroom_db[j], _MOST_DB)
            below.step(at, shown, where="post", color=INKS[j % len(INKS)], linewidth=1.0, label=opamp.name)
        below.axhline(0.0, color=INKS[2], linewidth=0.9, linestyle=_DASHED)
        below.set_ylim(_MOST_DB, -2.0)
        below.set_title("Headroom, dB (the rail at the top)")
        if len(found.opamps) > 1:
            below.legend(
                loc="lower right", frameon=False, ncols=8, bbox_to_anchor=(1.0, 1.0), borderaxespad=0.1
            )
        below.set_xlim(0.0, max(found.length_s, trace.step_s))
        _minutes(below, found.length_s)
        return picture_bytes(page, kind)


def headroom_picture(found: FileCheck, kind: Kind) -> bytes:
    """How much of the time each op-amp had how much headroom."""
    with mpl.rc_context(STYLE):
        page = _page(8.0, 2.4)
        axes = page.subplots()
        for j, opamp in enumerate(found.opamps):
            time_s = np.array(found.trace.headroom_s[j])
            share = 100.0 * time_s / max(float(time_s.sum()), 1e-12)
            ink = INKS[j % len(INKS)]
            axes.stairs(
                share[:-1], np.arange(len(share)), color=ink, linewidth=1.3, label=opamp.name, fill=j == 0
            )
        axes.set_xlim(0.0, _MOST_DB)
        axes.set_title("Share of the time by headroom, % (steps of 1 dB; what is beyond 60 dB not shown)")
        axes.set_xlabel("dB", loc="right", labelpad=1)
        if len(found.opamps) > 1:
            axes.legend(loc="upper right", frameon=False, ncols=4)
        return picture_bytes(page, kind)


def moment_picture(
    moment: Moment,
    first_s: float,
    sample_rate_hz: float,
    volts_in: Volts,
    volts_out: Volts,
    limits_v: tuple[float, float],
    kind: Kind,
) -> bytes:
    """What went in and what an op-amp gave around one moment, with its limits.

    Parameters
    ----------
    first_s : float
        Time of the first frame [s].
    volts_in, volts_out : ndarray, (frames, channels)
        Input of the stage and output of the op-amp.
    limits_v : tuple of float
        Lowest and highest output [V].
    """
    channel = moment.channel - 1 if moment.channel else int(np.abs(volts_out).max(axis=0).argmax())
    time_ms = (first_s - moment.at_s + np.arange(len(volts_in)) / sample_rate_hz) * 1e3
    with mpl.rc_context(STYLE):
        page = _page(8.0, 3.2)
        above, below = page.subplots(2, 1, sharex=True, height_ratios=(1.0, 1.8))
        above.plot(time_ms, volts_in[:, channel], color=INKS[1], linewidth=1.2)
        above.set_title("Input, V")
        for limit_v in limits_v:
            if math.isfinite(limit_v):
                below.axhline(limit_v, color=INKS[2], linewidth=1.0, linestyle=_DASHED)
        for axes in (above, below):
            axes.axvspan(0.0, moment.length_s * 1e3, color=_SHADE, linewidth=0.0)
            axes.axvline(0.0, color=_FAINT, linewidth=0.7)
        below.plot(time_ms, volts_out[:, channel], color=INKS[0], linewidth=1.4)
        below.set_title(f"{moment.opamp}, V")
        below.set_xlim(time_ms[0], time_ms[-1])
        below.set_xlabel(f"ms from {time_code(moment.at_s)}", loc="right", labelpad=1)
        return picture_bytes(page, kind)
