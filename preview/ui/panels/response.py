"""The response: gain as heard, as driven, as drawn; phase; the live spectrum and the noise behind it."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from rich.style import Style
from textual.events import Click

from preview.ui.desk import Desk
from preview.ui.figures import Figures
from preview.ui.theme import Look
from preview.ui.view import Behind, Ghost
from preview.ui.widgets.board import Board, Row, heading, row
from preview.ui.widgets.dots import DotField
from preview.ui.widgets.plot import Cells, FrequencyAxis, merged
from preview.ui.widgets.spectrum import Spectrum, VoltScale
from preview.ui.words import hertz

__all__ = ["ResponsePanel", "cursor_text"]

_LABEL = 5
"""Cells of the gain labels at the left."""
_RIGHT = 6
"""Cells of the phase or volt labels at the right."""
_MOST_DB, _LEAST_DB = 80.0, 30.0
"""Largest and smallest span of the gain axis [dB]."""
_VOLTS_FROM = 44
"""From this width on the scale of volts is written beside the plot [cells]."""
_CORNER, _CURSOR, _GRID = "╎", "┃", "·"
_SPECTRUM_S = 0.12
"""The spectrum is drawn no more often than this, so that it can be read [s]."""


@dataclass(frozen=True, slots=True)
class _GainAxis:
    """Gain from top to bottom of the plot [dB]."""

    top_db: float
    bottom_db: float

    @classmethod
    def around(cls, *curves: NDArray[np.float64]) -> _GainAxis:
        """An axis in whole tens that holds these curves, from the highest down to 80 dB below."""
        gains = np.concatenate([curve[np.isfinite(curve)] for curve in curves])
        if len(gains) == 0:
            return cls(10.0, -20.0)
        top_db = 10.0 * math.ceil((float(gains.max()) + 0.5) / 10.0)
        bottom_db = max(10.0 * math.floor(float(gains.min()) / 10.0), top_db - _MOST_DB)
        return cls(top_db, min(bottom_db, top_db - _LEAST_DB))

    def dots(self, gain_db: NDArray[np.float64], height: int) -> NDArray[np.float64]:
        """Heights in dots from the top of a plot of ``height`` cells; -inf dB lies below the plot."""
        scaled = (self.top_db - gain_db) / (self.top_db - self.bottom_db) * (4 * height - 1)
        return np.where(np.isneginf(gain_db), 4.0 * height + 4.0, scaled)


@dataclass(slots=True)
class _Layers:
    """What lies over what in a plot, the first on top."""

    axis: FrequencyAxis
    dots: list[tuple[DotField, Style]] = field(default_factory=list)
    under: list[tuple[DotField, Style]] = field(default_factory=list)
    corners: dict[int, float] = field(default_factory=dict)
    cursor: int | None = None
    labels: dict[int, str] = field(default_factory=dict)
    right: dict[int, str] = field(default_factory=dict)
    right_style: Style = field(default_factory=Style)
    spectrum: Spectrum | None = None


class ResponsePanel(Board):
    """Gain of the circuit now as a line, another setting's as dots, corners marked with figures.

    The line is bright as far as it is heard and thin above. A click puts the cursor.
    """

    def __init__(self, desk: Desk, look: Look, *, now_s: Callable[[], float] = time.monotonic) -> None:
        super().__init__(look, name="response")
        self.desk = desk
        self._now_s = now_s
        self._drawn_for: tuple[object, ...] = ()
        self._drawn_from: tuple[object, ...] = ()  # held, so that no other object takes their identity
        self._drawn: Sequence[Row] = ()
        self._spectrum: object = None
        self._spectrum_s = -1e9
        self._axis: FrequencyAxis | None = None

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`; drawn again only when what it shows has changed, for a held key asks often."""
        view, figures = self.desk.view, self.desk.figures
        now_s = self._now_s()
        if now_s - self._spectrum_s >= _SPECTRUM_S:
            snapshot = self.desk.snapshot
            self._spectrum, self._spectrum_s = snapshot.spectrum if snapshot else None, now_s
        spectrum = None if view.behind is Behind.NONE else self._spectrum
        wanted = (
            *(id(figures.now), id(figures.before), id(figures.last), id(spectrum)),
            *(view.phase, view.ghost, view.behind, view.noise, view.axis, view.cursor_hz, view.unit),
            *(self.look.palette.name, width, height),
        )
        if wanted != self._drawn_for:
            self._drawn_for, self._drawn = wanted, self._draw(width, height)
            self._drawn_from = (figures.now, figures.before, figures.last, spectrum)
        return self._drawn

    def _ghost(self) -> Figures | None:
        """The other curve, where it is another one."""
        figures, view = self.desk.figures, self.desk.view
        ghost = {Ghost.BEFORE: figures.before, Ghost.LAST: figures.last, Ghost.NONE: None}[view.ghost]
        now = figures.now
        same = ghost is None or now is None or np.array_equal(ghost.gain_db, now.gain_db)
        return None if same or ghost is None or len(ghost.frequency_hz) == 0 else ghost

    def _draw(self, width: int, height: int) -> Sequence[Row]:
        view, palette = self.desk.view, self.look.palette
        now, ghost = self.desk.figures.now, self._ghost()
        notes = ["gain in dB"]
        if view.phase:
            notes.append("phase (dotted)")
        if now is not None and now.drawn_db is not None:
            notes.append("⠒⠂⠒ as drawn")
        if ghost is not None:
            notes.append(f"⠒ ⠒ {view.ghost}")
        result = [heading("response", ", ".join(notes), width - 1, self.look)]
        self._axis = None
        if now is None or now.problem or len(now.frequency_hz) == 0:
            return [*result, row((" no curve yet" if now is None else " no curve", palette.faint))]
        if view.cursor_hz is not None:
            result.append(row((f" {cursor_text(self.desk, width - 2)}", palette.strong)))
        volts = VoltScale.of(self.desk) if view.behind is not Behind.NONE or view.noise else None
        labelled = view.phase or (volts is not None and width >= _VOLTS_FROM)
        plot_width = width - _LABEL - 1 - (_RIGHT if labelled else 0)
        plot_height = height - 2 - len(result)
        if plot_width < 10 or plot_height < 2:
            return result
        self._axis = FrequencyAxis(*view.axis.ends_hz, plot_width)
        layers = self._layers(now, ghost, volts, plot_height, labelled)
        result.append(_corner_labels(layers, self.look))
        result += [self._line(layers, y) for y in range(plot_height)]
        result.append(row((layers.axis.labels(_LABEL), palette.faint)))
        return result

    def _layers(
        self, now: Figures, ghost: Figures | None, volts: VoltScale | None, height: int, labelled: bool
    ) -> _Layers:
        view, palette, axis = self.desk.view, self.look.palette, self._axis
        assert axis is not None
        layers = _Layers(axis, right_style=palette.faint)
        shown = [axis.sampled(now.frequency_hz, now.gain_db)]
        shown += [axis.sampled(f.frequency_hz, f.gain_db) for f in (ghost,) if f is not None]
        gains = _GainAxis.around(*shown)

        def traced(figures: Figures, values: NDArray[np.float64], every: int = 1) -> DotField:
            dots = DotField(axis.cells, height)
            dots.trace(gains.dots(axis.sampled(figures.frequency_hz, values), height), every=every)
            return dots

        if now.heard_db is not None:
            layers.dots.append((traced(now, now.heard_db), palette.output))
            layers.dots.append((traced(now, now.gain_db), palette.plain))
        else:
            layers.dots.append((traced(now, now.gain_db), palette.output))
        if view.phase:
            wrapped = (axis.sampled(now.frequency_hz, now.phase_deg) + 180.0) % 360.0 - 180.0
            phase = DotField(axis.cells, height)
            phase.trace((180.0 - wrapped) / 360.0 * (4 * height - 1), every=2)
            layers.dots.append((phase, palette.input))
            layers.right = {0: " 180°", height // 2: "   0°", height - 1: "-180°"}
            layers.right_style = palette.input
        if now.drawn_db is not None:
            layers.under.append((traced(now, now.drawn_db, 2), palette.plain))
        if ghost is not None:
            layers.under.append((traced(ghost, ghost.gain_db, 3), palette.faint))
        if volts is not None:
            if labelled and not view.phase:
                layers.right = volts.labels(height, view.unit, self.desk.session.full_scale.volts)
            if view.noise and now.noise_v_rthz is not None:
                dots = DotField(axis.cells, height)
                bands_v = volts.noise_band_v(now.frequency_hz, now.noise_v_rthz)
                dots.trace(volts.dots(axis.sampled(now.frequency_hz, bands_v), height), every=2)
                layers.under.append((dots, palette.input))
            snapshot = self.desk.snapshot
            if snapshot is not None and snapshot.spectrum is not None:
                layers.spectrum = Spectrum(snapshot.spectrum, view.behind, volts, axis, height)
        for corner_hz in now.corners_hz:
            if axis.holds(corner_hz):
                layers.corners.setdefault(axis.column(corner_hz), corner_hz)
        if view.cursor_hz is not None and axis.holds(view.cursor_hz):
            layers.cursor = axis.column(view.cursor_hz)
        layers.labels = _gain_labels(gains, height)
        return layers

    def _line(self, layers: _Layers, y: int) -> Row:
        palette = self.look.palette
        decades = {column for column, _ in layers.axis.decades}
        pieces: Cells = []
        for x in range(layers.axis.cells):
            found = next(((dots, style) for dots, style in layers.dots if dots.filled(x, y)), None)
            if found is None and x == layers.cursor:
                pieces.append((_CURSOR, palette.mark))
                continue
            if found is None and x in layers.corners:
                pieces.append((_CORNER, palette.mark))
                continue
            found = found or next(((dots, style) for dots, style in layers.under if dots.filled(x, y)), None)
            if found is not None:
                pieces.append((found[0].glyph(x, y), found[1]))
            elif layers.spectrum is not None and (glyph := layers.spectrum.glyph(x, y)):
                pieces.append((glyph, palette.faint))
            elif y in layers.labels or x in decades:
                pieces.append((_GRID, palette.faint))
            else:
                pieces.append((" ", palette.plain))
        label = layers.labels.get(y, "").rjust(_LABEL - 1) + " "
        return row((label, palette.faint), *merged(pieces), (layers.right.get(y, ""), layers.right_style))

    def on_click(self, event: Click) -> None:
        """Put the cursor where the plot was clicked."""
        if self._axis is not None and 0 <= event.x - _LABEL < self._axis.cells:
            place_hz = self._axis.frequency_hz(event.x - _LABEL)
            self.act(lambda: self.desk.view.put_cursor(place_hz))


def cursor_text(desk: Desk, width: int) -> str:
    """What the curves read at the cursor, as much as fits."""
    view, now = desk.view, desk.figures.now
    if view.cursor_hz is None or now is None:
        return ""
    place_hz = view.cursor_hz
    texts = [f"{hertz(place_hz)}:", f"{now.at(now.gain_db, place_hz):+.2f} dB"]
    texts.append(f"{now.at(now.phase_deg, place_hz):+.0f}°")
    if now.drawn_db is not None:
        texts.append(f"drawn {now.at(now.drawn_db, place_hz):+.2f}")
    heard_db = now.at(now.heard_db, place_hz)
    if math.isfinite(heard_db):
        texts.append(f"heard {heard_db:+.3f}")
    volts = VoltScale.of(desk)
    spectrum = desk.snapshot.spectrum if desk.snapshot else None
    if spectrum is not None and volts is not None:
        texts += volts.reading(spectrum, place_hz, view.unit, desk.session.full_scale.volts)
    noise = now.at(now.noise_v_rthz, place_hz)
    if math.isfinite(noise):
        texts.append(f"noise {noise * 1e9:.3g} nV/√Hz")
    while len(texts) > 2 and len(" ".join(texts)) > width:
        texts.pop()
    return " ".join(texts)


def _corner_labels(layers: _Layers, look: Look) -> Row:
    """The corners' frequencies above their marks, as many as have room."""
    cells = [" "] * (layers.axis.cells + _LABEL)
    free_from = 0
    for x, corner_hz in sorted(layers.corners.items()):
        label = f"▾ {hertz(corner_hz)}"
        at = x + _LABEL
        if at + len(label) > len(cells):
            label = f"{hertz(corner_hz)} ▾"
            at = x + _LABEL - len(label) + 1
        if at >= free_from:
            cells[at : at + len(label)] = list(label)
            free_from = at + len(label) + 1
        elif x + _LABEL >= free_from:
            cells[x + _LABEL] = "▾"
    return row(("".join(cells), look.palette.mark))


def _gain_labels(axis: _GainAxis, height: int) -> dict[int, str]:
    """Labels by line: whole tens, spaced at least two lines apart."""
    span_db = axis.top_db - axis.bottom_db
    every_db = next((e for e in (10.0, 20.0, 40.0) if height * e / span_db >= 2.0), 40.0)
    labels: dict[int, str] = {}
    level_db = every_db * math.floor(axis.top_db / every_db)
    while level_db >= axis.bottom_db:
        dot = (axis.top_db - level_db) / span_db * (4 * height - 1)
        labels.setdefault(min(height - 1, int(dot) // 4), f"{level_db:.0f}")
        level_db -= every_db
    return labels
