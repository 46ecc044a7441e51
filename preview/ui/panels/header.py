"""The head of the desk: what is open, at which level, where it goes, and the state in words."""

from __future__ import annotations

from collections.abc import Sequence

from rich.style import Style

from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, row, row_cells, spread
from preview.ui.words import clock, full_scale, kilohertz, rails

__all__ = ["HeaderPanel"]


class HeaderPanel(Board):
    """Three rows: recording and stage; levels and device; state."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="head")
        self.desk = desk

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        return [self._open_row(width), self._level_row(width), self._state_row(width)][:height]

    def _open_row(self, width: int) -> Row:
        palette, snapshot = self.look.palette, self.desk.snapshot
        about = ""
        if snapshot is not None and snapshot.sample_rate_hz > 0.0:
            channels = len(snapshot.input.peak_v)
            shape = {1: "mono", 2: "stereo"}.get(channels, f"{channels} channels")
            length = clock(snapshot.frames / snapshot.sample_rate_hz) if snapshot.frames else ""
            about = f"  {kilohertz(snapshot.sample_rate_hz)} {shape} {length}".rstrip()
            if snapshot.live_latency_s:
                about += f" {snapshot.live_latency_s * 1e3:.0f} ms in to out"
        title = printable(self.desk.session.stage.title or self.desk.session.stage.name)
        right = row((" through ", palette.faint), (title + " ", palette.strong))
        room = width - sum(s.cell_length for s in right) - len(about) - 3
        name = printable(self.desk.file_name)
        name = fit(name, max(8, room)).rstrip() if len(name) > room else name
        return spread(row((" " + name, palette.strong), (about, palette.plain)), right, width, palette.plain)

    def _level_row(self, width: int) -> Row:
        palette, desk = self.look.palette, self.desk
        snapshot = desk.snapshot
        session = desk.session
        left = row(
            (" " + full_scale(session.full_scale), palette.plain),
            (f"   supply {rails(session.supply)}", palette.plain),
        )
        if snapshot is None:
            return spread(left, row(("engine is starting ", palette.faint)), width, palette.plain)
        lost = f" dropouts {snapshot.dropouts} "
        if snapshot.limited_blocks:
            lost = f" device limiter ×{snapshot.limited_blocks} {lost}"
        name = printable(snapshot.output_name) or "no output"
        extra = ""
        if width >= 132:
            extra = f"   computing {snapshot.load_ratio * 100.0:.0f} % of the time"
            extra += f"   delay {snapshot.latency_s * 1e3:.0f} ms"
        room = width - sum(s.cell_length for s in left) - len(lost) - len(extra) - 6
        out = row(
            ("to ", palette.faint),
            (fit(name, max(4, room)).rstrip() if len(name) > room else name, palette.plain),
            (extra, palette.faint),
            ("  ", palette.plain),
            (lost, palette.alarm if snapshot.dropouts or snapshot.limited_blocks else palette.plain),
        )
        return spread(left, out, width, palette.plain)

    def _state_row(self, width: int) -> Row:
        palette, desk = self.look.palette, self.desk
        snapshot = desk.snapshot
        if desk.stopped or desk.unanswered:
            again, leave = (desk.keys.shown(name) for name in ("restart", "quit"))
            words = f"ENGINE DOES NOT ANSWER. Press {again} to restart it; {leave} leaves."
            if desk.stopped:
                words = f"ENGINE STOPPED: no sound. Press {again} to restart it; {leave} leaves."
            if snapshot is None:
                words = (
                    f"ENGINE DID NOT START. Press {again} to try again; {leave} leaves, then try --silent."
                )
            return row((fit(f" {words}", width), palette.alarm))
        if snapshot is not None and snapshot.fault is not None:
            fault = snapshot.fault
            again = desk.keys.shown("restart")
            words = f"MUTED: {printable(fault.reason)} at {printable(fault.node)}. Press {again}: from rest again."
            return row((fit(f" {words}", width), palette.alarm))
        listening, narrow = desk.listening, width < 100
        exporting = desk.keeping.export_line()
        right = row(
            (f"{exporting}   " if exporting else "", palette.strong),
            (
                ("moving  " if narrow else "a value is moving   ") if snapshot and snapshot.gliding else "",
                palette.plain,
            ),
            ("volume ", palette.faint),
            (
                "off" if listening.volume_db == float("-inf") else f"{listening.volume_db:.0f} dB",
                palette.plain,
            ),
            ("  end: " if narrow else "   at the end: ", palette.faint),
            (str(desk.session.at_end), palette.plain),
            ("  " if narrow else "   quality: ", palette.faint),
            (f"{desk.session.quality} ", palette.plain),
        )
        playing = (" ▶ playing " if listening.playing else " ‖ paused  ", palette.strong)
        room = width - len(playing[0]) - row_cells(right)
        offered = self._heard()
        words, style = next((each for each in offered if len(each[0]) + 2 <= room), offered[-1])
        left = row(playing, (f"  {words}", style))
        return spread(left, right, width, style if style is palette.alarm else palette.plain)

    def _heard(self) -> list[tuple[str, Style]]:
        """What is heard, in words, the longest first."""
        palette, desk, snapshot = self.look.palette, self.desk, self.desk.snapshot
        if snapshot is not None and snapshot.muted:
            why = f": {printable(snapshot.mute_reason)}" if snapshot.mute_reason else ""
            return [(f"MUTED{why}", palette.alarm), ("MUTED", palette.alarm)]
        if desk.listening.bypass:
            texts = "BYPASS: you hear the input, not the stage", "BYPASS: input heard"
            return [(text, palette.alarm) for text in texts]
        room = desk.candidates
        if room.null is not None:
            texts = f"NULL: {room.null[0]} minus {room.null[1]}", f"NULL {room.null[0]}-{room.null[1]}"
            return [(text, palette.alarm) for text in texts]
        without = desk.session.without
        if without:
            return [(f"heard WITHOUT {', '.join(without)}", palette.alarm), ("limits OFF", palette.alarm)]
        if len(room.letters) == 1:
            return [("stage heard", palette.plain)]
        title = printable(room.title(room.letter))
        match = f", matched {snapshot.match_db:+.1f} dB" if room.matched and snapshot else ""
        said = f"candidate {title} heard{match}", f"candidate {room.letter}{match}", room.letter
        return [(text, palette.plain) for text in said]
