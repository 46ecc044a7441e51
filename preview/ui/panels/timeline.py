"""The recording as a waveform: playhead, region, and where each op-amp clips."""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich.style import Style
from textual.events import MouseDown, MouseUp

from preview.ui.clips import clips_of
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, heading, row
from preview.ui.widgets.dots import DotField
from preview.ui.widgets.plot import Cells, merged
from preview.ui.words import clock

__all__ = ["TimelinePanel", "WaveformPanel"]

_EIGHTHS = "▁▂▃▄▅▆▇█"
_HEAD, _CLIP = "◆", "×"
_PLAYED = "│"


class _Timeline(Board):
    """What both boards share: the line's place on the screen, and the mouse. A click seeks, a drag sets the region."""

    def __init__(self, desk: Desk, look: Look, name: str) -> None:
        super().__init__(look, name=name)
        self.desk = desk
        self._first, self._cells = 0, 0
        self._pressed: int | None = None
        # What was made last, and what it was made from: reports are compared by identity, for they are long.
        self._marked: tuple[object, int, dict[str | None, set[int]]] = (None, 0, {})
        self._found: tuple[object, int, list[tuple[float, float]]] = (None, 0, [])
        self._waves: tuple[object, tuple[int, int], DotField] = (None, (0, 0), DotField(0, 0))

    def _place(self, frame: int) -> int:
        """The cell of a frame."""
        snapshot = self.desk.snapshot
        frames = snapshot.frames if snapshot else 1
        return max(0, min(self._cells - 1, int(frame * self._cells / max(1, frames))))

    def _ruler(self) -> str:
        """A line with the region and the playhead in it."""
        line = ["─"] * self._cells
        region = self.desk.listening.region
        if region is not None:
            first, last = self._place(region[0]), self._place(region[1] - 1)
            line[first : last + 1] = ["═"] * (last + 1 - first)
            line[first], line[last] = "(", ")"
        line[self._place(self.desk.listening.position_frame)] = _HEAD
        return "".join(line)

    def _clipped(self, designator: str | None = None) -> set[int]:
        """The cells in which an op-amp clips."""
        marks = self.desk.marks
        if self._marked[0] is not marks or self._marked[1] != self._cells:
            by_name: dict[str | None, set[int]] = {None: set()}
            for clip in clips_of(marks):
                cells = range(self._place(clip.start), self._place(max(clip.start, clip.end - 1)) + 1)
                by_name[None].update(cells)
                by_name.setdefault(clip.designator, set()).update(cells)
            self._marked = (marks, self._cells, by_name)
        return self._marked[2].get(designator, set())

    def _extremes(self, columns: int) -> list[tuple[float, float]]:
        """Smallest and largest sample of each column, the largest of all as 1; none as far as it is not built."""
        overview = self.desk.overview
        if overview is None or not overview.low:
            return []
        if self._found[0] is overview and self._found[1] == columns:
            return self._found[2]
        largest = max(0.001, max(overview.high), -min(overview.low))  # drawn as high as there is room
        found = []
        for column in range(columns):
            first = column * overview.columns // columns
            last = max(first + 1, (column + 1) * overview.columns // columns)
            if last > len(overview.low):
                break
            found.append((min(overview.low[first:last]) / largest, max(overview.high[first:last]) / largest))
        self._found = (overview, columns, found)
        return found

    def waves(self, height: int) -> DotField:
        """The waveform in dots; made again only when it or the size has changed."""
        overview, size = self.desk.overview, (self._cells, height)
        if self._waves[0] is not overview or self._waves[1] != size:
            dots = DotField(self._cells, height)
            middle = (4 * height - 1) / 2.0
            for x, (low, high) in enumerate(self._extremes(2 * self._cells)):
                top = max(0, math.floor(middle - min(1.0, high) * middle + 0.5))
                bottom = min(4 * height - 1, math.floor(middle - max(-1.0, low) * middle + 0.5))
                for y in range(min(top, bottom), max(top, bottom) + 1):
                    dots.set(x, y)
            self._waves = (overview, size, dots)
        return self._waves[2]

    def _frame_at(self, x: int) -> int | None:
        snapshot = self.desk.snapshot
        if snapshot is None or self._cells < 1 or not 0 <= x - self._first < self._cells:
            return None
        return round((x - self._first) * snapshot.frames / self._cells)

    def on_mouse_down(self, event: MouseDown) -> None:
        """Where a click or a drag begins."""
        self._pressed = event.x
        self.capture_mouse()

    def on_mouse_up(self, event: MouseUp) -> None:
        """A click seeks; a drag sets the region."""
        self.release_mouse()
        pressed, self._pressed = self._pressed, None
        if pressed is None:
            return
        ends = (min(max(x, self._first), self._first + self._cells - 1) for x in (pressed, event.x))
        start, end = sorted(ends)
        first, last = self._frame_at(start), self._frame_at(end)
        if first is None or last is None:
            return
        if start == end:
            self.act(lambda: self.desk.listening.seek(first))
        else:
            self.act(lambda: self.desk.listening.set_region(first, last))


class TimelinePanel(_Timeline):
    """One row, or three: times, the line with playhead and region; above it the waveform with the clips."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(desk, look, "timeline")

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        palette, desk = self.look.palette, self.desk
        snapshot = desk.snapshot
        if snapshot is None or snapshot.sample_rate_hz <= 0.0:
            return [row((" nothing to play yet", palette.faint))]
        rate_hz = snapshot.sample_rate_hz
        now = f" {clock(desk.listening.position_frame / rate_hz)} "
        if snapshot.frames == 0:
            return [row((f"{now}{snapshot.input_name or 'endless'}", palette.plain))]
        after = f" {clock(snapshot.frames / rate_hz)}"
        if desk.listening.region is not None:
            start, end = desk.listening.region
            after += f"  region {clock(start / rate_hz)} to {clock(end / rate_hz)}"
        after += " "
        self._first, self._cells = len(now), width - len(now) - len(after)
        if self._cells < 4:
            return [row((now + after, palette.plain))]
        ruler = self._ruler()
        head = ruler.index(_HEAD)
        pieces: Cells = [(now, palette.strong)]
        if height == 1:
            pieces += self._spark(ruler, head)
        else:
            pieces += [
                (ruler[:head], palette.input),
                (_HEAD, palette.strong),
                (ruler[head + 1 :], palette.faint),
            ]
        line = row(*pieces, (after, palette.plain))
        if height == 1:
            return [line]
        margin = (" " * self._first, palette.plain)
        if height == 2:
            return [row(margin, *self._spark(" " * self._cells, head)), line]
        return [*(row(margin, *cells) for cells in _waveform(self, height - 1)), line]

    def _spark(self, ruler: str, head: int) -> Cells:
        """The line with the waveform in it; clips reversed."""
        palette = self.look.palette
        clipped, heights = self._clipped(), self._extremes(self._cells)
        pieces: Cells = []
        for x, mark in enumerate(ruler):
            glyph = mark
            if mark in "─═ " and x < len(heights):
                largest = max(abs(heights[x][0]), abs(heights[x][1]))
                glyph = _EIGHTHS[min(7, int(largest * 8.0))] if largest > 1e-3 else mark
            if x in clipped and mark in "─═ ":
                pieces.append((_CLIP, palette.alarm))
            else:
                style = (
                    palette.strong
                    if x == head or mark in "()"
                    else palette.input
                    if x < head
                    else palette.faint
                )
                pieces.append((glyph, style))
        return merged(pieces)


def _waveform(line: _Timeline, height: int) -> list[Cells]:
    """So many lines of waveform; what is outside of the region is thin, clips have a mark in the last line."""
    palette = line.look.palette
    dots = line.waves(height)
    clipped = line._clipped()
    head = line._place(line.desk.listening.position_frame)
    region = line.desk.listening.region
    inside = (line._place(region[0]), line._place(region[1] - 1)) if region else (0, line._cells)
    lines = []
    for y in range(height):
        pieces: Cells = []
        for x in range(line._cells):
            style: Style = palette.input if inside[0] <= x <= inside[1] else palette.faint
            if x in clipped and y == height - 1:
                pieces.append((_CLIP, palette.alarm))
            elif x == head and not dots.filled(x, y):
                pieces.append((_PLAYED, palette.strong))
            else:
                pieces.append((dots.glyph(x, y) if dots.filled(x, y) else " ", style))
        lines.append(merged(pieces))
    return lines


class WaveformPanel(_Timeline):
    """The waveform in a view of its own, a row of marks for each op-amp, and the clips by time."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(desk, look, "waveform")

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        desk, palette = self.desk, self.look.palette
        snapshot = desk.snapshot
        clips = desk.clips.all
        count = "1 clip" if len(clips) == 1 else f"{len(clips)} clips"
        note = desk.clips.progress() or (count if desk.marks else "")
        overview = desk.overview
        if overview is None or overview.done_ratio < 1.0:
            note = (
                f"building the overview: {overview.done_ratio * 100.0:.0f} %"
                if overview
                else "no overview yet"
            )
        result = [heading("timeline", note, width - 1, self.look)]
        if snapshot is None or snapshot.frames == 0 or snapshot.sample_rate_hz <= 0.0:
            return [*result, row((" there is no recording to look at", palette.faint))]
        names = [opamp.designator for opamp in desk.session.stage.opamps]
        label = max([3, *(len(name) for name in names)]) + 2
        self._first, self._cells = label, max(4, width - label - 1)
        listed = min(len(clips), max(0, (height - 3 - len(names)) // 3))
        waves = max(1, height - 2 - len(names) - listed)
        margin = " " * label
        result += [row((margin, palette.plain), *cells) for cells in _waveform(self, waves)]
        ruler = self._ruler()
        result.append(row((margin, palette.plain), (ruler, palette.strong)))
        for name in names[: max(0, height - len(result))]:
            clipped = self._clipped(name)
            marks = "".join(_CLIP if x in clipped else "·" for x in range(self._cells))
            style = palette.selected if name == desk.view.opamp else palette.plain
            result.append(
                row((fit(f" {name}", label), style), (marks, palette.strong if clipped else palette.faint))
            )
        here = desk.listening.position_frame
        at = next((n for n, clip in enumerate(clips) if clip.end >= here), max(0, len(clips) - 1))
        first = max(0, min(at - listed // 2, len(clips) - listed))
        for number in range(first, first + listed):
            mark = "▸" if number == at else " "
            text = f" {number + 1:>4}  {desk.clips.words(clips[number])}"
            result.append(row((mark, palette.mark), (text, palette.plain)))
        return result[:height]
