"""The recording as a line: playhead, region, times."""

from __future__ import annotations

from collections.abc import Sequence

from textual.events import Click

from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, row
from preview.ui.words import clock

__all__ = ["TimelinePanel"]


class TimelinePanel(Board):
    """One row: the playhead's time, the line, the length. A click seeks."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="timeline")
        self.desk = desk
        self._first, self._cells = 0, 0

    def rows(self, width: int, height: int) -> Sequence[Row]:  # noqa: ARG002 - every board has both
        """See :class:`Board`."""
        palette, desk = self.look.palette, self.desk
        snapshot = desk.snapshot
        if snapshot is None or snapshot.frames == 0 or snapshot.sample_rate_hz <= 0.0:
            return [row((" nothing to play yet", palette.faint))]
        rate_hz, frames = snapshot.sample_rate_hz, snapshot.frames
        now = f" {clock(desk.listening.position_frame / rate_hz)} "
        length = f" {clock(frames / rate_hz)}"
        region = ""
        if desk.listening.region is not None:
            start, end = desk.listening.region
            region = f"  region {clock(start / rate_hz)} to {clock(end / rate_hz)}"
        after = f"{length}{region} "
        cells = width - len(now) - len(after)
        self._first, self._cells = len(now), cells
        if cells < 4:
            return [row((now + after, palette.plain))]

        def place(frame: int) -> int:
            return min(cells - 1, int(frame * cells / frames))

        line = ["─"] * cells
        if desk.listening.region is not None:
            first, last = place(desk.listening.region[0]), place(desk.listening.region[1] - 1)
            line[first : last + 1] = ["═"] * (last + 1 - first)
            line[first], line[last] = "(", ")"
        head = place(desk.listening.position_frame)
        return [
            row(
                (now, palette.strong),
                ("".join(line[:head]), palette.input),
                ("◆", palette.strong),
                ("".join(line[head + 1 :]), palette.faint),
                (after, palette.plain),
            )
        ]

    def on_click(self, event: Click) -> None:
        """Seek to where the line was clicked."""
        snapshot = self.desk.snapshot
        if snapshot is not None and self._cells > 0 and 0 <= event.x - self._first < self._cells:
            frame = round((event.x - self._first) * snapshot.frames / self._cells)
            self.act(lambda: self.desk.listening.seek(frame))
