"""Where the recording clips, and the way from one clip to the next. No screen in here."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from preview.engine.messages import ClipMarks
from preview.ui.words import clock, duration, percent

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["Clip", "Clips", "clips_of"]

_LEAD_S = 0.1
"""The playhead is sent to so much before a clip, so that it is heard coming [s]."""
_AROUND_S = 0.25
"""What is looped about a clip [s]."""


@dataclass(frozen=True, slots=True, order=True)
class Clip:
    """One passage in which an op-amp clips."""

    start: int
    """First frame."""
    end: int
    """Frame after the last."""
    designator: str
    """U1, U2 ..."""


def clips_of(marks: ClipMarks | None) -> list[Clip]:
    """Every passage, in the order of time."""
    found = marks.opamps if marks is not None else ()
    return sorted(Clip(start, end, one.designator) for one in found for start, end in one.spans)


class Clips:
    """The actions that go from clip to clip."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self._at: Clip | None = None

    @property
    def all(self) -> list[Clip]:
        """Every passage of the candidate that is heard, of the selected op-amp if one is selected."""
        chosen = self._desk.view.opamp
        return [clip for clip in clips_of(self._desk.marks) if chosen in (None, clip.designator)]

    def progress(self) -> str:
        """How far the recording was looked through, in words; empty where it is done or not begun."""
        marks = self._desk.marks
        if marks is None or marks.frames == 0 or marks.done_frames >= marks.frames:
            return ""
        return f"looking through the recording: {percent(marks.done_frames / marks.frames)}"

    def do_next_clip(self) -> str:
        """To a little before the next clip."""
        return self._go(1)

    def do_previous_clip(self) -> str:
        """To a little before the clip before."""
        return self._go(-1)

    def _go(self, way: int) -> str:
        clips = self.all
        rate_hz = self._rate_hz
        if not clips or rate_hz is None:
            return self._none()
        lead = round(_LEAD_S * rate_hz)
        here = self._desk.listening.position_frame
        # The clip that was gone to last is where the playhead has just been sent, or is still playing.
        if way > 0:
            found = next((clip for clip in clips if clip.start - lead > here), None)
            if self._at in clips and self._at is not None and here <= self._at.end:
                at = clips.index(self._at)
                found = clips[at + 1] if at + 1 < len(clips) else None
        else:
            found = next((clip for clip in reversed(clips) if clip.end < here), None)
            if self._at in clips and self._at is not None and self._at.start - lead <= here <= self._at.end:
                at = clips.index(self._at)
                found = clips[at - 1] if at > 0 else None
        if found is None:
            return f"no clip {'after' if way > 0 else 'before'} this one"
        self._at = found
        self._desk.listening.seek(max(0, found.start - lead))
        return f"clip {clips.index(found) + 1} of {len(clips)}: {self.words(found)}"

    def do_loop_clip(self) -> str:
        """Loop the clip at the playhead, with a little around it."""
        clips = self.all
        rate_hz, snapshot = self._rate_hz, self._desk.snapshot
        if not clips or rate_hz is None or snapshot is None:
            return self._none()
        here = self._desk.listening.position_frame
        clip = self._at if self._at in clips else None
        if clip is None:
            clip = min(clips, key=lambda c: max(c.start - here, here - c.end, 0))
        around = round(_AROUND_S * rate_hz)
        start = max(0, clip.start - around)
        said = self._desk.listening.set_region(start, min(snapshot.frames, clip.end + around))
        self._desk.listening.seek(start)
        return f"{self.words(clip)}; {said}"

    def words(self, clip: Clip) -> str:
        """A clip in words: ``U1 at 0:03.2 for 4.1 ms``."""
        rate_hz = self._rate_hz or 1.0
        length = duration((clip.end - clip.start) / rate_hz)
        return f"{clip.designator} at {clock(clip.start / rate_hz)} for {length}"

    @property
    def _rate_hz(self) -> float | None:
        snapshot = self._desk.snapshot
        return snapshot.sample_rate_hz if snapshot is not None and snapshot.sample_rate_hz > 0.0 else None

    def _none(self) -> str:
        if self._desk.marks is None:
            return "the recording has not been looked through yet"
        return self.progress() or "nothing clips in this recording"
