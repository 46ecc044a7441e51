"""The candidates: which is heard, how loud each is, how they differ."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from textual.events import Click

from preview.errors import printable
from preview.ui.desk import Desk
from preview.ui.theme import Look
from preview.ui.widgets.board import Board, Row, fit, heading, row
from preview.ui.words import db

__all__ = ["CandidatesPanel"]

_NAME, _LOUDNESS, _MATCH = 14, 12, 9


class CandidatesPanel(Board):
    """A row for each candidate, and below them what the heard one changes. A click hears a candidate."""

    def __init__(self, desk: Desk, look: Look) -> None:
        super().__init__(look, name="candidates")
        self.desk = desk
        self._letters: list[str] = []

    def rows(self, width: int, height: int) -> Sequence[Row]:
        """See :class:`Board`."""
        room, palette = self.desk.candidates, self.look.palette
        note = "matched loudness" if room.matched else "each as loud as it is"
        if room.null is not None:
            note = f"heard: {room.null[0]} minus {room.null[1]}"
        result = [heading("candidates", note, width - 1, self.look)]
        heads = f"   {fit('', _NAME)}{'loudness':>{_LOUDNESS}}{'match dB':>{_MATCH}}"
        result.append(row((fit(heads, width), palette.faint)))
        letters = list(room.letters)
        space = max(1, height - 2)
        at = letters.index(room.letter)
        first = max(0, min(at - space // 2, len(letters) - space))
        self._letters = letters[first : first + space]
        for letter in self._letters:
            result.append(self._candidate_row(letter, width))
        if len(result) + 3 <= height:
            result += self._changes(width, height - len(result))
        return result[:height]

    def _candidate_row(self, letter: str, width: int) -> Row:
        room, palette = self.desk.candidates, self.look.palette
        reading = room.reading(letter)
        loudness, match = "not measured", ""
        if reading is not None and reading.loudness_lufs is not None:
            loudness = f"{reading.loudness_lufs:.1f} LUFS"
            match = db(reading.match_db) if room.matched else "off"
        if reading is None or not reading.ready:
            loudness = "preparing"
        heard = letter == room.letter
        text = f" {letter} {fit(printable(room.name(letter)), _NAME)}"
        figures = f"{loudness:>{_LOUDNESS}}{match:>{_MATCH}}"
        left = width - len(text) - len(figures) - 3
        about = f"  {fit('heard' if heard else printable(room.summary(letter)), left)}" if left >= 8 else ""
        return row(
            ("▸" if heard else " ", palette.mark),
            (text, palette.selected if heard else palette.strong),
            (figures, palette.plain),
            (about, palette.faint),
        )

    def _changes(self, width: int, height: int) -> list[Row]:
        """How the heard one differs from the one before it, in words."""
        room, palette = self.desk.candidates, self.look.palette
        other = room.partner if room.partner in room.letters else None
        if other is None:
            keys = self.desk.keys
            words = f"{keys.shown('candidate_keep')} keeps what is heard and goes on in a copy of it"
            if len(room.letters) > 1:
                words = f"{keys.shown('candidate_next')} hears the next one"
            return [row(("", palette.plain)), row((f"  {fit(words, width - 3)}", palette.faint))]
        changes = room.different(other) or ["nothing: they are the same"]
        lines = textwrap.wrap("; ".join(printable(line) for line in changes), max(10, width - 4))
        title = f"  from {room.title(other)} to {room.title(room.letter)}"
        return [
            row(("", palette.plain)),
            row((fit(printable(title), width), palette.strong)),
            *(row((f"  {line}", palette.plain)) for line in lines[: height - 2]),
        ]

    def on_click(self, event: Click) -> None:
        """Hear the candidate that was clicked."""
        if 0 <= event.y - 2 < len(self._letters):
            letter = self._letters[event.y - 2]
            self.act(lambda: self.desk.candidates.hear(letter))
