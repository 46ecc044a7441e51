"""Reading ahead, so that a real-time caller never touches the disk.

A thread fills a lane: a ring of frames with two plain counters. Only the thread moves ``written``, only
the caller moves ``taken``; reading one and writing the other needs no lock. A seek is a request with a
number; the thread answers with a new lane that carries the number, and until it comes ``read`` gives
nothing. A new region also gives a new lane, but the old one plays on and the caller steps over at the same
frame, so nothing is heard. Where there is no such frame, as playing was faster, the old lane plays on and
``strays`` says so; a seek ends that.
"""

from __future__ import annotations

import threading
from dataclasses import dataclass
from time import monotonic
from types import TracebackType
from typing import Protocol, Self

import numpy as np
from numpy.typing import NDArray

from preview.errors import AudioFileError

__all__ = ["Prefetch", "SeekableSource"]

_RING_S = 1.0
_RING_BYTES_MAX = 16 << 20
_HELD_BYTES_MAX = 16 << 20
_CHUNK_FRAMES = 4096
_REST_S = 0.004
_ATTEMPTS = 3


class SeekableSource(Protocol):
    """What ``Prefetch`` reads from."""

    @property
    def channels(self) -> int:
        """Number of channels."""

    @property
    def sample_rate_hz(self) -> float:
        """Sample rate [Hz]."""

    @property
    def frames(self) -> int:
        """Length as promised [frames]."""

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array; the count of frames filled, 0 at the end."""

    def seek(self, frame: int) -> None:
        """Make that frame the next to be read."""

    def close(self) -> None:
        """Let go of the file."""


@dataclass(frozen=True, slots=True)
class _Wish:
    """What is to be played, as asked for last."""

    seek_number: int
    """Counts the seeks."""
    frame: int
    """Where to begin."""
    region: tuple[int, int] | None
    """First frame and frame after the last; None for the whole file."""
    loop: bool
    """Whether to begin again at the end."""


class _Lane:
    """A ring of frames and the map from its frames to the file's."""

    def __init__(self, wish: _Wish, ring: NDArray[np.float64], first: int, start: int, end: int) -> None:
        self.wish = wish
        self.ring = ring
        self.start = start  # file frame that follows the end in a loop
        self.first = first  # file frame of lane frame 0
        self.end = end  # file frame after the last; moves forward if the file proves shorter
        self.turn = end - first  # lane frame at which the end is reached for the first time
        self.written = 0  # lane frames put in, by the thread
        self.taken = 0  # lane frames taken out, by the caller
        self.complete = False  # nothing more will be put in

    def file_frame(self, lane_frame: int) -> int:
        """The file's frame at a frame of the lane."""
        if lane_frame < self.turn:
            return max(0, self.first + lane_frame)
        if self.wish.loop and self.end > self.start:
            return self.start + (lane_frame - self.turn) % (self.end - self.start)
        return self.end

    def lane_frame(self, file_frame: int) -> int | None:
        """The first frame of the lane that is that frame of the file; None where it has none."""
        if 0 <= file_frame - self.first < self.turn:
            return file_frame - self.first
        if self.wish.loop and self.start <= file_frame < self.end:
            return self.turn + file_frame - self.start
        return None

    def ahead_of(self, other: _Lane) -> int | None:
        """The frame of this lane that the other gives next; None where it has none."""
        return self.lane_frame(other.file_frame(other.taken))

    @property
    def room_frames(self) -> int:
        """Frames that may be put in now; 0 where there are only few, or nothing more will be."""
        size = len(self.ring)
        room = size - (self.written - self.taken)
        return 0 if self.complete or room < min(_CHUNK_FRAMES, size // 2) else room

    def cut(self, end: int) -> None:
        """The file proved to end here, at the frame that was to be written next."""
        self.first, self.turn, self.end = end - self.written, self.written, end


class Prefetch:
    """A file read ahead by a thread of its own.

    Parameters
    ----------
    source : SeekableSource
        Owned from now on: only the thread reads it, and ``close`` closes it.
    loop : bool
        Whether to begin again at the end of the file or region.
    """

    def __init__(self, source: SeekableSource, *, loop: bool = False) -> None:
        self._source = source
        frame_bytes = 8 * source.channels
        wanted = min(int(_RING_S * source.sample_rate_hz), _RING_BYTES_MAX // frame_bytes)
        self._capacity = max(2 * _CHUNK_FRAMES, wanted)
        self._held_max = _HELD_BYTES_MAX // frame_bytes
        self._frames = source.frames
        self._held: NDArray[np.float64] | None = None
        self._held_span: tuple[int, int] | None = None
        self._wish = _Wish(0, 0, None, loop)
        self._wish_lock = threading.Lock()  # between those who ask; the real-time caller never takes it
        self._next: _Lane | None = None
        self._current: _Lane | None = None
        self._retired: list[_Lane] = []
        self._ended = threading.Event()
        self.error: AudioFileError | None = None
        """The damage at which the file had to be given up, None while all is well."""
        self.began_at = 0
        """The file's frame that the last ``read`` began with."""
        self.starved = 0
        """Reads that got fewer frames than they asked for although there were more to come."""
        self._thread = threading.Thread(target=self._run, name="prefetch", daemon=True)
        self._thread.start()

    # -- the real-time caller -------------------------------------------------------------------------------

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array from its start with what is there; never waits.

        Returns
        -------
        int
            Frames filled: 0 while a seek is on its way and at the end.
        """
        lane, taken = self._choose()
        if lane is None:
            return 0
        if lane is not self._current:
            lane.taken = taken
            self._current = lane
        want = len(samples_out)
        count = min(want, lane.written - taken)
        ring, size = lane.ring, len(lane.ring)
        self.began_at = lane.file_frame(taken)
        at = taken % size
        first = min(count, size - at)
        samples_out[:first] = ring[at : at + first]
        if count > first:
            samples_out[first:count] = ring[: count - first]
        lane.taken = taken + count
        if count < want and not lane.complete:
            self.starved += 1
        return count

    @property
    def ready(self) -> bool:
        """Whether the frames of the last seek are there."""
        lane = self._next
        return lane is not None and lane.wish.seek_number == self._wish.seek_number

    @property
    def at_end(self) -> bool:
        """Whether all has been read and nothing follows; never while looping."""
        lane = self._next
        return self.ready and lane is not None and lane.complete and lane.taken == lane.written

    @property
    def position(self) -> int:
        """The file's frame that the next ``read`` begins with."""
        lane, taken = self._choose()
        return self._wish.frame if lane is None else lane.file_frame(taken)

    @property
    def strays(self) -> bool:
        """Whether what is read lies outside the region that was asked for, and only a seek leads into it."""
        new, old = self._next, self._current
        if new is None or old is None or new is old or new.wish != self._wish:
            return False
        if old.wish.seek_number != new.wish.seek_number:
            return False
        ahead = new.ahead_of(old)
        return ahead is None or (ahead > new.written and not new.room_frames)

    def _choose(self) -> tuple[_Lane | None, int]:
        """The lane to take from now, and from which of its frames; None while a seek is on its way."""
        new, old = self._next, self._current
        if new is None or new.wish.seek_number != self._wish.seek_number:
            return None, 0
        if new is old or old is None or old.wish.seek_number != new.wish.seek_number:
            return new, new.taken
        ahead = new.ahead_of(old)
        if ahead is None or ahead > new.written:
            return old, old.taken  # the new lane is not that far yet, or will never be
        return new, ahead

    # -- those who ask --------------------------------------------------------------------------------------

    @property
    def frames(self) -> int:
        """Length of the file; what it really holds as soon as that is known."""
        return self._frames

    @property
    def source(self) -> SeekableSource:
        """The source, to look at its counts; only the thread may read it."""
        return self._source

    @property
    def memory_bytes(self) -> int:
        """Memory of the ring and of a held region; bounded, whatever the length of the file."""
        held = self._held
        return 8 * self._source.channels * self._capacity + (0 if held is None else held.nbytes)

    @property
    def region(self) -> tuple[int, int] | None:
        """First frame and frame after the last of the region; None for the whole file."""
        return self._wish.region

    @property
    def loop(self) -> bool:
        """Whether it begins again at the end."""
        return self._wish.loop

    def seek(self, frame: int) -> None:
        """Ask for another frame; returns at once, ``ready`` says when it is there."""
        with self._wish_lock:
            old = self._wish
            target = min(max(0, frame), self._frames)
            self._wish = _Wish(old.seek_number + 1, target, old.region, old.loop)

    def set_region(self, start: int | None, end: int | None, loop: bool) -> None:
        """Play from ``start`` up to, not including, ``end`` (None: the file's), once or again and again.

        Playing goes on without a gap where the present frame lies before the region's end; else it goes on where it
        is, and ``strays`` until the next seek.
        """
        first = 0 if start is None else min(max(0, start), self._frames)
        last = self._frames if end is None else min(max(0, end), self._frames)
        region = None if start is None and end is None else (first, last)
        if last <= first:
            region = None
        with self._wish_lock:
            old = self._wish
            self._wish = _Wish(old.seek_number, old.frame, region, loop)

    def wait_ready(self, timeout_s: float = 5.0, *, frames: int = 1) -> bool:
        """Wait, off the real-time path, for that many frames or the end; False if they are late."""
        deadline = monotonic() + timeout_s
        while True:
            lane = self._next
            if lane is not None and lane.wish == self._wish:
                there = lane.written - lane.taken
                if lane.complete or there >= min(frames, self._capacity - _CHUNK_FRAMES):
                    return True
            if monotonic() > deadline or not self._thread.is_alive():
                return False
            self._ended.wait(0.001)

    def close(self) -> None:
        """End the thread and close the source."""
        self._ended.set()
        if self._thread is not threading.current_thread():
            self._thread.join(2.0)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # -- the thread -----------------------------------------------------------------------------------------

    def _run(self) -> None:
        lane: _Lane | None = None
        while not self._ended.is_set():
            wish = self._wish
            try:
                if lane is None or lane.wish != wish:
                    lane = self._begin(wish)
                elif not self._fill(lane):
                    self._ended.wait(_REST_S)
            except Exception as error:  # whatever it was: the caller must see an end, not wait for ever
                self.error = AudioFileError(f"reading ahead failed: {error}")
                lane = _Lane(wish, np.zeros((1, self._source.channels)), wish.frame, 0, wish.frame)
                lane.complete = True
                self._next = lane
        self._source.close()

    def _begin(self, wish: _Wish) -> _Lane:
        """A new lane for the wish, with its first frames in, handed to the caller."""
        start, end = wish.region or (0, self._frames)
        end = min(end, self._frames)
        old = self._next
        playing = next(
            (
                one
                for one in (self._current, old)
                if one is not None and one.wish.seek_number == wish.seek_number
            ),
            None,
        )
        for _ in range(_ATTEMPTS):
            first = wish.frame if playing is None else playing.file_frame(playing.taken)
            if first >= end and (wish.loop or playing is not None):
                first = start
            lane = _Lane(wish, np.zeros((self._capacity, self._source.channels)), first, start, end)
            self._hold(lane)
            enough = min(self._capacity, 4 * _CHUNK_FRAMES)
            while lane.written < enough and self._fill(lane):
                pass
            ahead = 0 if playing is None else lane.ahead_of(playing)
            if ahead is not None and ahead <= lane.written:
                break  # what plays has not turned or left the region meanwhile
        self._retired = [old] if old is not None else []  # freed here, not in the caller's thread
        self._next = lane
        return lane

    def _fill(self, lane: _Lane) -> bool:
        """Put a piece into the lane; False where there is no room or nothing left."""
        size, room = len(lane.ring), lane.room_frames
        if not room:
            return False
        frame = lane.file_frame(lane.written)
        at = lane.written % size
        count = min(room, _CHUNK_FRAMES, size - at)
        held = self._held
        if held is not None and lane.start <= frame < lane.end:
            offset = frame - lane.start
            lane.ring[at : at + count] = held[offset : offset + count]
            lane.written += count
            return True
        count = min(count, lane.end - frame)
        if count > 0:
            got = self._take(frame, lane.ring[at : at + count])
            lane.written += got
            if got == count:
                return True
            lane.cut(frame + got)
            self._frames = min(self._frames, lane.end)
        lane.complete = not lane.wish.loop or lane.end <= lane.start
        return not lane.complete

    def _take(self, frame: int, piece: NDArray[np.float64]) -> int:
        """Fill the piece from that frame of the file; fewer at its end or at damage."""
        filled = 0
        try:
            self._source.seek(frame)
            while filled < len(piece):
                got = self._source.read(piece[filled:])
                if got == 0:
                    break
                filled += got
        except AudioFileError as error:
            self.error = error
        return filled

    def _hold(self, lane: _Lane) -> None:
        """Keep a short looped region in memory, its beginning again behind its end: no seek at the turn."""
        span = lane.end - lane.start
        key = (lane.start, lane.end)
        if not lane.wish.loop or not 0 < span <= self._held_max:
            self._held, self._held_span = None, None
            return
        if self._held_span == key:
            return
        self._held, self._held_span = None, None
        held = np.empty((span + _CHUNK_FRAMES, self._source.channels))
        if self._take(lane.start, held[:span]) < span:
            return  # shorter than promised: reading in order will find out where it ends
        for at in range(span, len(held), span):
            held[at : at + span] = held[: min(span, len(held) - at)]
        self._held, self._held_span = held, key
