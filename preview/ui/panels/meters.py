"""Levels in volts at the stage's input and output, the room to the rails, and every op-amp's clipping."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from preview.circuit.opamp import OpAmpReading
from preview.engine.messages import Snapshot
from preview.meters.reading import LevelReading
from preview.ui.desk import Desk
from preview.ui.panels.opampline import opamp_row, slews
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row, row_cells, spread
from preview.ui.widgets.levelbar import VoltAxis, level_bar, scale_line
from preview.ui.words import db, dbu, volts
from preview.values.levels import ratio_db

__all__ = ["MetersPanel"]

_FALL_DB_PER_S = 26.0
"""How fast a peak bar falls back [dB/s]."""
_FIGURES_S = 0.125
"""Figures change no faster than this, so that they can be read [s]."""
_LIT_S = 1.5
"""For so long after the last clip event the clip light is lit; then it stays as a word with the count [s]."""
_LABEL = 7
_COLUMNS = (("rms", 8), ("dBu", 7), ("peak", 8), ("hold", 8), ("left dB", 9))
_COLUMN_CELLS = sum(cells for _, cells in _COLUMNS)


@dataclass(frozen=True, slots=True)
class _Channel:
    """One bar: a channel, or the loudest of several."""

    label: str
    rms_v: float
    peak_v: float
    hold_v: float


class MetersPanel(Board):
    """A scale, a row for each channel of input and output, a row for each op-amp."""

    def __init__(self, desk: Desk, look: Look, *, now_s: Callable[[], float] = time.monotonic) -> None:
        super().__init__(look, name="meters")
        self.desk = desk
        self._now_s = now_s
        self._peaks: dict[str, float] = {}
        self._fell_s = now_s()
        self._figures: dict[str, str] = {}
        self._figures_s = -1e9
        self._lit: dict[str, tuple[float, float]] = {}

    # ---- size ----

    def wanted_height(self, screen_height: int) -> int:
        """Rows that the meters would like on a screen of that height."""
        snapshot = self.desk.snapshot
        channels = len(snapshot.input.peak_v) if snapshot else 2
        opamps = max(1, len(self.desk.session.stage.opamps))
        most_channels = 2 if screen_height < 36 else 6
        most_opamps = 1 if screen_height < 30 else 4
        return 1 + 2 * min(channels, most_channels) + min(opamps, most_opamps)

    def _bars(self, height: int) -> int:
        opamps = min(max(1, len(self.desk.session.stage.opamps)), 1 if height < 8 else 4)
        return max(1, (height - 1 - opamps) // 2)

    # ---- rows ----

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        desk, palette = self.desk, self.look.palette
        snapshot = desk.snapshot
        full_scale_v = desk.session.full_scale.volts
        wall_v, drives_out = desk.output_wall()
        axis = VoltAxis.up_to(
            max(v for v in (full_scale_v, wall_v) if v is not None and math.isfinite(v)),
            max(8, width - _LABEL - _COLUMN_CELLS - 1),
        )
        heads = "".join(f"{name:>{cells}}" for name, cells in _COLUMNS)
        result = [row((fit(" volts", _LABEL), palette.faint), (scale_line(axis) + heads, palette.faint))]
        now_s = self._now_s()
        fresh = now_s - self._figures_s >= _FIGURES_S
        if fresh:
            self._figures_s = now_s
            self._figures.clear()
        fall = 10.0 ** (-_FALL_DB_PER_S * (now_s - self._fell_s) / 20.0)
        self._fell_s = now_s
        bars = self._bars(height)
        # In bypass the lower bars are the input again: they say so, and no rail is theirs.
        bypass = snapshot is not None and snapshot.bypass
        for word, rail in (("in", False), ("byp" if bypass else "out", True)):
            reading = (snapshot.output if rail else snapshot.input) if snapshot else LevelReading((), (), ())
            for channel in _channels(word, reading, bars):
                peak_v = max(channel.peak_v, self._peaks.get(channel.label, 0.0) * fall)
                self._peaks[channel.label] = peak_v
                limit_v = full_scale_v if not rail else None if bypass else wall_v
                left_db = self._left_db(channel, limit_v, rail, drives_out)
                bar = level_bar(
                    axis,
                    palette,
                    rms_v=channel.rms_v,
                    peak_v=peak_v,
                    hold_v=channel.hold_v,
                    wall_v=limit_v,
                    rail=rail,
                )
                figures = self._figures.setdefault(channel.label, _figure_text(channel, peak_v, left_db))
                result.append(
                    (
                        *row((fit(f" {channel.label}", _LABEL), palette.plain)),
                        *bar,
                        *row((figures, palette.plain)),
                    )
                )
        result += self._opamp_rows(snapshot, width, height - len(result), now_s)
        return result[:height]

    def _left_db(self, channel: _Channel, wall_v: float | None, rail: bool, drives_out: str | None) -> float:
        """Distance of the channel's hold to its wall [dB]."""
        if wall_v is None or not math.isfinite(wall_v) or channel.hold_v <= 0.0:
            return math.nan
        supply = self.desk.session.supply
        if rail and 0.0 in (supply.positive_v, supply.negative_v):
            snapshot = self.desk.snapshot  # a single supply: only the op-amp knows which rail is nearer
            readings = snapshot.opamps if snapshot else ()
            return next((r.headroom_db for r in readings if r.designator == drives_out), math.nan)
        left_db = ratio_db(wall_v / channel.hold_v)
        return max(0.0, left_db) if rail else left_db

    def _opamp_rows(self, snapshot: Snapshot | None, width: int, room: int, now_s: float) -> list[Row]:
        palette = self.look.palette
        readings = snapshot.opamps if snapshot else ()
        if snapshot is None or not readings:
            return [row((fit("", _LABEL) + "no op-amp reading yet", palette.faint))]
        if len(readings) > room > 0:
            worst = sorted(readings, key=lambda r: (-r.clip_events, not slews(r), r.headroom_db))[:room]
            readings = tuple(r for r in readings if r in worst)
        held = f" device limiter ×{snapshot.limited_blocks} "
        style = palette.alarm if snapshot.limited_blocks else palette.faint
        lines = []
        for place, reading in enumerate(readings):
            acted = place == 0 and snapshot.limited_blocks > 0
            site = next((s for s in self.desk.sites() if s.designator == reading.designator), None)
            lit = self._clip_lit(reading, now_s)
            left = opamp_row(reading, site, palette, lit, width - (len(held) + 1 if acted else 0))
            # clipping goes before a limiter that had nothing to do
            shown = acted or (place == 0 and row_cells(left) + len(held) < width)
            lines.append(spread(left, row((held, style)), width, palette.plain) if shown else left)
        return lines

    def _clip_lit(self, reading: OpAmpReading, now_s: float) -> bool:
        """Whether the op-amp has clipped just now."""
        known_s, lit_until_s = self._lit.get(reading.designator, (0.0, -1e9))
        if reading.clipped_s > known_s:
            lit_until_s = now_s + _LIT_S
        self._lit[reading.designator] = (reading.clipped_s, lit_until_s)
        return now_s < lit_until_s


def _channels(word: str, reading: LevelReading, bars: int) -> list[_Channel]:
    """The bars of one reading: every channel, or the first ones and the loudest of the rest."""
    count = len(reading.peak_v)
    if count == 0:
        return [_Channel(word, 0.0, 0.0, 0.0)]
    names = {1: [word], 2: [f"{word} L", f"{word} R"]}.get(count, [f"{word} {n + 1}" for n in range(count)])
    shown = count if count <= bars else bars - 1
    result = [
        _Channel(names[n], reading.rms_v[n], reading.peak_v[n], reading.hold_v[n]) for n in range(shown)
    ]
    if shown < count:
        rest = slice(shown, count)
        label = f"{word} {shown + 1}+" if shown else f"{word} max"
        result.append(
            _Channel(label, max(reading.rms_v[rest]), max(reading.peak_v[rest]), max(reading.hold_v[rest]))
        )
    return result


def _figure_text(channel: _Channel, peak_v: float, left_db: float) -> str:
    texts = (volts(channel.rms_v), dbu(channel.rms_v), volts(peak_v), volts(channel.hold_v), db(left_db))
    return "".join(f"{text:>{cells}}" for text, (_, cells) in zip(texts, _COLUMNS, strict=True))
