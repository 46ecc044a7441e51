"""Playing the recording and hearing it: the actions of the playhead, the region, the volume. No screen in here."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from preview.engine.messages import (
    ClearHolds,
    Pause,
    Play,
    Seek,
    SetAtEnd,
    SetBypass,
    SetQuality,
    SetRegion,
    SetVolume,
    Snapshot,
)
from preview.engine.sessionfile import Saved
from preview.session import AtEnd
from preview.ui.link import EngineLink
from preview.ui.words import clock
from preview.values.quality import Quality

if TYPE_CHECKING:
    from preview.ui.desk import Desk

__all__ = ["FIRST_VOLUME_DB", "Listening"]

FIRST_VOLUME_DB = -20.0
"""Listening volume when the desk opens [dB]."""
LOWEST_VOLUME_DB = -60.0
"""Below this the volume is off [dB]."""
OFF_DB = float("-inf")
SMALL_S, LARGE_S = 1.0, 10.0
"""Steps of the playhead [s]."""
_SHORTEST_REGION_S = 0.05
"""A shorter loop is not the recording any more, but a tone or a direct voltage [s]."""
_TRUST_S = 0.4
"""For so long after a key the desk's own wish is shown, not a snapshot that may be older [s]."""


class Listening:
    """What plays, and where."""

    def __init__(self, desk: Desk) -> None:
        self._desk = desk
        self.playing = False
        self.bypass = False
        self.volume_db = FIRST_VOLUME_DB
        self.region: tuple[int, int] | None = None
        self._asked_s = -1e9
        self._sought: tuple[float, int] | None = None

    # ---- what the engine says ----

    def take(self, snapshot: Snapshot) -> None:
        """The newest word of the engine."""
        if self._desk.now_s() - self._asked_s > _TRUST_S:
            self.playing = snapshot.playing

    @property
    def position_frame(self) -> int:
        """The playhead: where the engine is, or where it was just sent."""
        if self._sought is not None and self._desk.now_s() - self._sought[0] < _TRUST_S:
            return self._sought[1]
        snapshot = self._desk.snapshot
        return snapshot.position_frame if snapshot else 0

    def resume(self, link: EngineLink) -> None:
        """What a new engine must be told besides what it began with; it waits at the playhead."""
        if self.bypass:
            link.send(SetBypass(True))
        self._sought = (self._desk.now_s(), self.position_frame)
        self.playing = False

    def restore(self, saved: Saved) -> None:
        """Place, region and bypass as they were saved; the volume goes down to what was saved, never up."""
        self.region = saved.region
        self._desk.node_peaks = None
        self._desk.link.send(SetRegion(*(saved.region or (None, None))))
        if saved.bypass != self.bypass:
            self.do_bypass()
        if saved.volume_db < self.volume_db:
            self._set_volume(saved.volume_db)
        self._sought = (self._desk.now_s(), saved.position_frame)
        self._desk.link.send(Seek(saved.position_frame))

    # ---- the playhead ----

    def play(self, on: bool) -> None:
        """Play or pause."""
        self.playing = on
        self._asked_s = self._desk.now_s()
        self._desk.link.send(Play() if on else Pause())

    def do_play_pause(self) -> None:
        """Play or pause."""
        self.play(not self.playing)

    def seek(self, frame: int) -> None:
        """Send the playhead to a frame, within the recording."""
        snapshot = self._desk.snapshot
        last = max(0, snapshot.frames - 1) if snapshot else 0
        frame = max(0, min(frame, last))
        self._sought = (self._desk.now_s(), frame)
        self._desk.link.send(Seek(frame))

    def seek_by(self, seconds: float) -> None:
        """Send the playhead on by so much; back if negative."""
        snapshot = self._desk.snapshot
        if snapshot is not None:
            self.seek(self.position_frame + round(seconds * snapshot.sample_rate_hz))

    def do_back_small(self) -> None:
        """Back 1 s."""
        self.seek_by(-SMALL_S)

    def do_forward_small(self) -> None:
        """Forward 1 s."""
        self.seek_by(SMALL_S)

    def do_back_large(self) -> None:
        """Back 10 s."""
        self.seek_by(-LARGE_S)

    def do_forward_large(self) -> None:
        """Forward 10 s."""
        self.seek_by(LARGE_S)

    def do_to_start(self) -> None:
        """To the start of the region or of the recording."""
        self.seek(self.region[0] if self.region else 0)

    # ---- the region ----

    def set_region(self, start: int, end: int) -> str:
        """Play within these frames, at least the shortest region; both ends are brought into the recording."""
        snapshot = self._desk.snapshot
        assert snapshot is not None
        rate_hz, frames = snapshot.sample_rate_hz, snapshot.frames
        shortest = min(frames, max(2, round(_SHORTEST_REGION_S * rate_hz)))
        start = max(0, min(start, frames - shortest))
        end = min(max(end, start + shortest), frames)
        self.region = (start, end)
        self._desk.node_peaks = None
        self._desk.link.send(SetRegion(start, end))
        clears = f"{self._desk.keys.shown('region_clear')} clears it"
        return f"region {clock(start / rate_hz)} to {clock(end / rate_hz)}; {clears}"

    @property
    def _shortest(self) -> int:
        """Frames of the shortest region that can be set."""
        snapshot = self._desk.snapshot
        assert snapshot is not None
        return max(2, round(_SHORTEST_REGION_S * snapshot.sample_rate_hz))

    def do_region_start(self) -> str | None:
        """The region starts here."""
        snapshot = self._desk.snapshot
        if snapshot is None or snapshot.frames < 2:
            return None
        frames = snapshot.frames
        start = max(0, min(self.position_frame, frames - self._shortest))
        end = self.region[1] if self.region else frames
        return self.set_region(start, end if end >= start + self._shortest else frames)

    def do_region_end(self) -> str | None:
        """The region ends here."""
        snapshot = self._desk.snapshot
        if snapshot is None or snapshot.frames < 2:
            return None
        end = min(max(self._shortest, self.position_frame), snapshot.frames)
        start = self.region[0] if self.region else 0
        return self.set_region(start if start <= end - self._shortest else 0, end)

    def do_region_clear(self) -> str:
        """The whole recording."""
        self.region = None
        self._desk.node_peaks = None
        self._desk.link.send(SetRegion(None, None))
        return "no region: the whole recording"

    def do_at_end(self) -> str:
        """Loop or stop."""
        desk = self._desk
        at_end = AtEnd.STOP if desk.session.at_end is AtEnd.LOOP else AtEnd.LOOP
        desk.session = replace(desk.session, at_end=at_end)
        desk.link.send(SetAtEnd(at_end))
        return f"at the end: {at_end}"

    # ---- what is heard, and how loud ----

    def do_bypass(self) -> None:
        """The input without the stage, and back."""
        self.bypass = not self.bypass
        self._desk.link.send(SetBypass(self.bypass))

    def _set_volume(self, volume_db: float) -> None:
        self.volume_db = volume_db
        self._desk.link.send(SetVolume(volume_db))

    def do_volume_up(self) -> str | None:
        """Volume up 1 dB, at most 0 dB."""
        self._set_volume(LOWEST_VOLUME_DB if self.volume_db == OFF_DB else min(0.0, self.volume_db + 1.0))
        return "the volume is at its highest" if self.volume_db == 0.0 else None

    def do_volume_down(self) -> str | None:
        """Volume down 1 dB; below -60 dB it is off."""
        self._set_volume(self.volume_db - 1.0 if self.volume_db > LOWEST_VOLUME_DB else OFF_DB)
        return "the volume is off" if self.volume_db == OFF_DB else None

    def do_next_quality(self) -> str:
        """Draft, standard, fine."""
        desk = self._desk
        names = list(Quality)
        quality = names[(names.index(desk.session.quality) + 1) % len(names)]
        desk.session = replace(desk.session, quality=quality)
        desk.link.send(SetQuality(quality))
        return f"quality: {quality}"

    def do_clear_holds(self) -> str:
        """Clear peak holds and counts."""
        self._desk.link.send(ClearHolds())
        return "peak holds and counts cleared"
