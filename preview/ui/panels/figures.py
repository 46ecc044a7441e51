"""The figures in words: corner and gain before and after, and how near what is heard comes to the circuit."""

from __future__ import annotations

import math
from collections.abc import Sequence

from preview.ui.desk import Desk
from preview.ui.figures import Figures, heard_band_hz
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, row
from preview.ui.words import db, hertz, kilohertz

__all__ = ["FiguresPanel", "corner_text", "heard_text"]


def corner_text(figures: Figures) -> str:
    """The corners of one circuit: ``1.59 kHz``, or ``none``."""
    return " and ".join(hertz(corner_hz) for corner_hz in figures.corners_hz) or "none"


def _gain_text(figures: Figures) -> str:
    return f"{db(figures.passband_gain_db)} dB" if math.isfinite(figures.passband_gain_db) else "none"


def heard_text(figures: Figures) -> str:
    """How near the running computation comes to the circuit."""
    if figures.error_db is None:
        return "heard response: known once the recording runs"
    bound_db = max(1e-4, math.ceil(figures.error_db * 1e4 - 1e-9) / 1e4)  # "within" is rounded up
    digits = f"{bound_db:.4f}" if bound_db < 0.01 else f"{math.ceil(bound_db * 1e3 - 1e-9) / 1e3:.3f}"
    band = kilohertz(heard_band_hz(figures.sample_rate_hz))
    return f"heard response within {digits} dB of the circuit to {band} ({figures.quality})"


class FiguresPanel(Board):
    """Two rows: before and after; the heard response."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="figures")
        self.desk = desk

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        palette = self.look.palette
        now, before = self.desk.figures.now, self.desk.figures.before
        if now is None:
            return [row((" computing the response", palette.faint))]
        if now.problem:
            return [row((f" {now.problem}", palette.strong))]
        pieces = [(" corner ", palette.faint)]
        for label, text in (("", corner_text), ("   gain ", _gain_text)):
            pieces.append((label, palette.faint))
            if before is not None and not before.problem and text(before) != text(now):
                pieces += [(text(before), palette.plain), (" → ", palette.faint)]
            pieces.append((text(now), palette.strong))
        heard = heard_text(now)
        if len(heard) + 1 > width:
            heard = heard.replace("heard response within", "heard within").replace(" of the circuit", "")
        return [row(*pieces), row((f" {heard}", palette.plain))][:height]
