"""One op-amp in one line: room to its limits, clipping, slewing, current."""

from __future__ import annotations

import math

from rich.style import Style

from preview.circuit.netlist import OpAmpSite
from preview.circuit.opamp import OpAmpReading
from preview.ui.theme import Palette
from preview.ui.widgets.board import Row, row, row_cells
from preview.ui.words import db, duration, limits, milliamperes, slew_of, type_name, volts

__all__ = ["opamp_row", "slews"]

AT_THE_LIMIT = 0.999
"""From this share of its limit on the slew rate counts as at the limit."""

Pieces = tuple[tuple[str, Style], ...]


def slews(reading: OpAmpReading) -> bool:
    """Whether the signal has taken the op-amp to its slew limit."""
    limit_v_per_s = reading.slew_limit_v_per_s
    return math.isfinite(limit_v_per_s) and reading.slew_peak_v_per_s >= AT_THE_LIMIT * limit_v_per_s


def opamp_row(reading: OpAmpReading, site: OpAmpSite | None, palette: Palette, lit: bool, width: int) -> Row:
    """The line of one op-amp.

    Rails and clipping are always there; what else finds room in ``width`` cells is there too: that it slews,
    the time at the rails, its slew rate (after the type where the word SLEWS has said it), its type, its current,
    its swing, in this order.

    Parameters
    ----------
    site : OpAmpSite, optional
        Its limits; None where they are not known.
    lit : bool
        Whether it has clipped just now.
    """
    # A visit to the rail that was under way when the counts were cleared is one visit since then.
    events = max(reading.clip_events, 1) if reading.clipped_s > 0.0 else reading.clip_events
    unsolved = f" UNSOLVED ×{reading.unsolved_steps} " if reading.unsolved_steps else ""
    slewing = slews(reading)
    clip_style = palette.alarm if lit and events else palette.strong if events else palette.faint
    time_style = palette.plain if events else palette.faint
    # In the order of the line; the number says what goes first, 0 stays.
    offered: list[tuple[int, Pieces]] = [
        (0, ((f" {reading.designator}", palette.strong),)),
        (3, ((f" {type_name(site.type)}" if site else "", palette.plain),)),
        (0, ((f" {_room(reading, site)}  ", palette.plain),)),
        (0, ((f" {'CLIP' if events else 'clip'} ×{events} ", clip_style),)),
        (1, ((f" clipped {duration(reading.clipped_s)}", time_style),)),
        (0, ((unsolved, palette.alarm),)),
    ]
    if math.isfinite(reading.slew_limit_v_per_s):
        figures = slew_of(reading.slew_peak_v_per_s, reading.slew_limit_v_per_s)
        if slewing:
            offered += [(0, (("  ", palette.plain), (" SLEWS ", palette.alarm)))]
        offered += [
            (4 if slewing else 2, ((f" {figures}" if slewing else f"  slew {figures}", palette.plain),))
        ]
    if reading.current_peak_a > 0.0:
        offered += [(5, ((f"  {milliamperes(reading.current_peak_a)} out", palette.plain),))]
    if width >= 120:
        offered += [(6, ((f"   swings {volts(reading.low_v)} to {volts(reading.high_v)}", palette.faint),))]
    return _that_fit(offered, width)


def _room(reading: OpAmpReading, site: OpAmpSite | None) -> str:
    """The distance to the rails, or to the limits of a real type inside of them."""
    if site is None:
        return "limits not known"
    if not (math.isfinite(site.high_v) or math.isfinite(site.low_v)):
        return "no limit"
    ends = limits(site.low_v, site.high_v)
    if not math.isfinite(reading.headroom_db):
        return f"limits {ends}" if site.model.real else f"rails {ends}"
    return f"{db(reading.headroom_db)} dB to {'' if site.model.real else 'the rails '}{ends}"


def _that_fit(offered: list[tuple[int, Pieces]], width: int) -> Row:
    """The pieces in their order, the least needed left out until the rest fits."""
    kept = list(offered)
    while True:
        cells = row(*(piece for _, pieces in kept for piece in pieces))
        least = max(rank for rank, _ in kept)
        if row_cells(cells) <= width or least == 0:
            return cells
        kept = [offer for offer in kept if offer[0] != least]
