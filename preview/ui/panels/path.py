"""The signal path: source, every op-amp, output, on one scale with the rails as walls; the worst one marked."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence

from rich.style import Style
from textual.events import Click

from preview.ui.desk import Desk
from preview.ui.signalpath import PathRow, State, path_rows, worst_of
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row
from preview.ui.widgets.levelbar import VoltAxis, level_bar, scale_line
from preview.ui.words import db, duration, percent

__all__ = ["PathPanel"]

_FALL_DB_PER_S = 26.0
"""How fast a peak bar falls back [dB/s]."""
_FIGURES_S = 0.125
"""Figures change no faster than this, so that they can be read [s]."""
_LIT_S = 1.5
"""For so long after the last clip event the clip light is lit; then it stays as a word with the count [s]."""
_LABEL, _TYPE = 8, 9
_COLUMNS = (
    *(("rms", 8, 0), ("peak", 8, 104), ("hold", 8, 0), ("left dB", 8, 0)),
    *(("slew", 6, 0), ("amps", 6, 0), ("clips", 6, 0), ("clipped", 8, 116), ("state", 10, 0)),
)
"""Name, cells, and the width from which a column is there."""
_WORST = "◂"


class PathPanel(Board):
    """A scale, and a row for the source, each op-amp and the output. A click on an op-amp selects it."""

    def __init__(self, desk: Desk, look: Look, *, now_s: Callable[[], float] = time.monotonic) -> None:
        super().__init__(look, name="path")
        self.desk = desk
        self._now_s = now_s
        self._peaks: dict[str, float] = {}
        self._fell_s = now_s()
        self._figures: dict[str, str] = {}
        self._figures_s = -1e9
        self._lit: dict[str, tuple[float, float]] = {}
        self._shown: list[PathRow] = []

    # ---- size ----

    def wanted_height(self, screen_height: int) -> int:
        """Rows that the path would like on a screen of that height."""
        snapshot = self.desk.snapshot
        channels = len(snapshot.input.peak_v) if snapshot else 2
        opamps = len(self.desk.session.stage.opamps)
        most = max(4, screen_height // 3)
        whole = 1 + 2 * min(channels, 2 if screen_height < 36 else 6) + opamps
        return whole if whole <= most else min(3 + opamps, most)

    # ---- rows ----

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        desk, palette = self.desk, self.look.palette
        unit, full_scale_v = desk.view.unit, desk.session.full_scale.volts
        columns = [(name, cells) for name, cells, least in _COLUMNS if width >= least]
        label_cells = _LABEL + (_TYPE if width >= 92 and desk.session.stage.opamps else 0)
        bar_cells = max(8, width - label_cells - sum(cells for _, cells in columns) - 1)
        found = self._fitting(height - 1)
        walls_v = [r.wall_v for r in found if r.wall_v is not None and math.isfinite(r.wall_v)]
        axis = VoltAxis.up_to(max([full_scale_v, *walls_v]), bar_cells)
        now_s = self._now_s()
        if now_s - self._figures_s >= _FIGURES_S:
            self._figures_s = now_s
            self._figures.clear()
        fall = 10.0 ** (-_FALL_DB_PER_S * (now_s - self._fell_s) / 20.0)
        self._fell_s = now_s
        worst = worst_of(found)
        heads = "".join(f"{name:>{cells}}" for name, cells in columns)
        scale = scale_line(axis, unit, full_scale_v)
        result = [row((fit(f" {unit}", label_cells), palette.strong), (scale + heads, palette.faint))]
        self._shown = []
        for path in found:
            peak_v = max(path.peak_v or 0.0, self._peaks.get(path.label, 0.0) * fall)
            self._peaks[path.label] = peak_v
            self._shown.append(path)
            bar = level_bar(
                axis,
                palette,
                rms_v=path.rms_v or 0.0,
                peak_v=peak_v,
                hold_v=path.hold_v,
                wall_v=path.wall_v,
                rail=path.kind != "in",
            )
            text = self._figures.setdefault(path.label, self._figure_text(path, peak_v, columns))
            is_worst = path is worst
            label = fit(f"{'▸' if path.label == desk.view.opamp else ' '}{path.label}", _LABEL)
            if label_cells > _LABEL:
                label += fit(path.type, _TYPE)
            word = f" {_WORST if is_worst else ' '} {self._word(path, is_worst)}"
            state = (fit(word, columns[-1][1] + 1), self._state_style(path, is_worst, now_s))
            result.append((*row((label, palette.plain)), *bar, *row((text, palette.plain), state)))
        return result[:height]

    def _fitting(self, room: int) -> list[PathRow]:
        """As many rows as there is room for: channels are folded first, then the op-amps with most room go."""
        for channel_rows in (6, 2, 1):
            found = path_rows(self.desk, channel_rows=channel_rows)
            if len(found) <= room:
                return found
        opamps = sorted((r for r in found if r.kind == "opamp"), key=lambda r: (-r.state, r.room_db))
        kept = opamps[: max(0, room - 2)]
        return [r for r in found if r.kind != "opamp" or any(r is k for k in kept)]

    def _figure_text(self, path: PathRow, peak_v: float, columns: Sequence[tuple[str, int]]) -> str:
        unit, full_scale_v = self.desk.view.unit, self.desk.session.full_scale.volts
        texts = {
            "rms": "" if path.rms_v is None else unit.rms(path.rms_v, full_scale_v),
            "peak": "" if path.peak_v is None else unit.peak(peak_v, full_scale_v),
            "hold": unit.peak(path.hold_v, full_scale_v),
            "left dB": db(path.headroom_db),
            "slew": "" if path.slew_ratio is None else percent(path.slew_ratio),
            "amps": "" if path.current_ratio is None else percent(path.current_ratio),
            "clips": "" if path.events is None else f"×{path.events}",
            "clipped": "" if path.events is None else duration(path.clipped_s),
        }
        return "".join(f"{texts[name]:>{cells}}" for name, cells in columns if name in texts)

    @staticmethod
    def _word(path: PathRow, worst: bool) -> str:
        """The state in a word; the worst of the rows that are fine is the tightest."""
        if path.kind not in ("in", "opamp"):
            return ""
        return "tightest" if worst and path.state is State.FINE else path.state.word

    def _state_style(self, path: PathRow, worst: bool, now_s: float) -> Style:
        """Reversed while it clips or slews just now, and for the worst one that is at a limit."""
        palette = self.look.palette
        if path.state is State.FINE:
            return palette.strong if worst else palette.faint
        return palette.alarm if self._clips_now(path, now_s) or worst else palette.strong

    def _clips_now(self, path: PathRow, now_s: float) -> bool:
        """Whether the op-amp has clipped just now."""
        known_s, lit_until_s = self._lit.get(path.label, (0.0, -1e9))
        if path.clipped_s > known_s:
            lit_until_s = now_s + _LIT_S
        self._lit[path.label] = (path.clipped_s, lit_until_s)
        return now_s < lit_until_s

    def on_click(self, event: Click) -> None:
        """Select the op-amp that was clicked."""
        if 1 <= event.y <= len(self._shown) and self._shown[event.y - 1].kind == "opamp":
            self.act(lambda: self.desk.view.choose_opamp(self._shown[event.y - 1].label))
