"""A picture of the desk as SVG, for a page or a report; no terminal is needed."""

from __future__ import annotations

import asyncio
import time
from html import escape

from rich.cells import cell_len
from rich.segment import Segment
from textual.pilot import Pilot

from preview.engine.messages import Report, Snapshot
from preview.session import Session
from preview.ui.app import DeskApp
from preview.ui.figures import MakeFigures, compute_figures
from preview.ui.link import StillLink
from preview.ui.theme import Palette
from preview.ui.view import Shown

__all__ = ["desk_svg"]

_LONGEST_S = 30.0
_SETTLE_S = 0.3
"""The figures of the meters change eight times a second [s]."""
_CELL_WIDTH, _CELL_HEIGHT = 8.4, 17.0
_MARGIN = 10.0


def desk_svg(
    session: Session,
    *,
    snapshot: Snapshot | None = None,
    reports: tuple[Report, ...] = (),
    shown: Shown = Shown.RESPONSE,
    size: tuple[int, int] = (132, 44),
    make_figures: MakeFigures = compute_figures,
) -> str:
    """The desk on this session as an SVG document.

    Parameters
    ----------
    session : Session
        What is open.
    snapshot : Snapshot, optional
        What the meters show; None for an engine that has not spoken yet.
    reports : tuple of Report
        What the engine has found out: waveform, clips.
    shown : Shown
        The view.
    size : tuple of int
        Columns and rows.
    make_figures : callable
        Computes the response.
    """
    pictures: list[str] = []
    app = DeskApp(
        session, StillLink(snapshot, reports), autoplay=False, show_caution=False, make_figures=make_figures
    )

    async def take(pilot: Pilot[object]) -> None:
        give_up_s = time.monotonic() + _LONGEST_S
        rate_hz = snapshot.sample_rate_hz if snapshot is not None else 0.0
        while time.monotonic() < give_up_s:
            now = app.desk.figures.now
            if now is not None and (now.problem or now.sample_rate_hz == rate_hz):
                break
            await asyncio.sleep(0.02)
        if snapshot is not None:
            app.desk.listening.playing = snapshot.playing
        app.desk.view.show(shown)
        app.show()
        await asyncio.sleep(_SETTLE_S)
        app.show()
        await pilot.pause()
        pictures.append(_svg(app, size))
        app.exit()

    app.run(headless=True, size=size, auto_pilot=take)
    return pictures[0]


def _svg(app: DeskApp, size: tuple[int, int]) -> str:
    """The panels as text elements on the palette's ground; the document refers to nothing outside itself."""
    palette = app.look.palette
    width = size[0] * _CELL_WIDTH + 2 * _MARGIN
    height = size[1] * _CELL_HEIGHT + 2 * _MARGIN
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width:g} {height:g}" role="img">',
        "<title>The desk</title>",
        f'<rect width="100%" height="100%" fill="{palette.ground}"/>',
        '<g font-family="DejaVu Sans Mono, monospace" font-size="14" xml:space="preserve">',
    ]
    for board in app.boards:
        if not board.display:
            continue
        for line, cells in enumerate(board.painted):
            column = board.content_region.x
            y = _MARGIN + (board.content_region.y + line) * _CELL_HEIGHT
            for segment in cells:
                parts += _piece(segment, _MARGIN + column * _CELL_WIDTH, y, palette)
                column += segment.cell_length
    return "\n".join([*parts, "</g>", "</svg>", ""])


def _piece(segment: Segment, x: float, y: float, palette: Palette) -> list[str]:
    """One piece of text, with a ground of its own where it is reversed."""
    style = segment.style or palette.plain
    ground = style.bgcolor.name if style.bgcolor else palette.ground
    ink = style.color.name if style.color else palette.ink
    weight = ' font-weight="bold"' if style.bold else ""
    result = []
    if ground != palette.ground:
        wide = segment.cell_length * _CELL_WIDTH
        result.append(
            f'<rect x="{x:.1f}" y="{y:.1f}" width="{wide:.1f}" height="{_CELL_HEIGHT}" fill="{ground}"/>'
        )
    text = segment.text.rstrip()
    lead = len(text) - len(text.lstrip())
    if text.strip():
        x += lead * _CELL_WIDTH
        text = text.strip()
        wide = cell_len(text) * _CELL_WIDTH
        result.append(
            f'<text x="{x:.1f}" y="{y + 13.0:.1f}" fill="{ink}" textLength="{wide:.1f}" '
            f'lengthAdjust="spacingAndGlyphs"{weight}>{escape(text)}</text>'
        )
    return result
