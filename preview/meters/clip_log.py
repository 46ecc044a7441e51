"""The clip log: every visit to a limit, with its time and how far it went."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.errors import UsageError
from preview.meters import kernels
from preview.meters.intake import Intake
from preview.meters.reading import ClipEvent, ClipReading

__all__ = ["ClipLog", "full_scale_log"]

FULL_SCALE_RATIO = 1.0 - 2.0**-15
"""Share of full scale from which a recording counts as clipped: the largest sample of 16 bits."""


class ClipLog:
    """Visits of a signal in volts to its limits, each from its first frame at or beyond the limit to its last.

    Parameters
    ----------
    sample_rate_hz : float
        Sample rate of the signal [Hz].
    channels : int
        Number of channels.
    high_v, low_v : float
        Limits; ``low_v`` is ``-high_v`` where not given.
    min_frames : int
        Shorter visits are not counted.
    capacity : int
        Events that are kept, the first ones; all are counted.
    """

    def __init__(
        self,
        sample_rate_hz: float,
        channels: int,
        *,
        high_v: float,
        low_v: float | None = None,
        min_frames: int = 1,
        capacity: int = 10_000,
    ) -> None:
        self._rate = sample_rate_hz
        self._high_v, self._low_v = high_v, -high_v if low_v is None else low_v
        if not self._low_v < self._high_v:
            raise UsageError(f"clip log: lower limit {self._low_v:g} V is not below the upper, {high_v:g} V")
        self._min_frames = min_frames
        self._intake = Intake(channels)
        self._now = np.zeros((channels + 1, kernels.STATE_COLUMNS), dtype=np.int64)
        self._peak_v = np.zeros(channels)
        self._log = np.zeros((capacity, kernels.LOG_COLUMNS), dtype=np.int64)
        self._log_v = np.zeros(capacity)
        self.feed(np.zeros((1, channels)))  # compiles
        self.reset()

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""
        take = self._intake
        for count in take.chunks(volts):
            kernels.note_visits(
                take.rows,
                0,
                count,
                self._high_v,
                self._low_v,
                self._min_frames,
                self._now,
                self._peak_v,
                self._log,
                self._log_v,
            )

    def read(self) -> ClipReading:
        """The visits so far; one under way ends here, in the reading alone."""
        now, peak_v, log, log_v = self._now.copy(), self._peak_v, self._log.copy(), self._log_v.copy()
        for c in range(len(peak_v)):
            if now[c, kernels.NOW_SIDE] != 0:
                kernels.end_visit(now, peak_v, c, self._min_frames, log, log_v)
        used = now[-1, 0]
        events = [
            ClipEvent(
                channel=channel,
                start_frame=start,
                frames=frames,
                start_s=start / self._rate,
                duration_s=frames / self._rate,
                at_high=side > 0,
                peak_v=volts,
            )
            for (channel, side, start, frames), volts in zip(
                log[:used].tolist(), log_v[:used].tolist(), strict=True
            )
        ]
        return ClipReading(
            events=tuple(sorted(events, key=lambda event: (event.start_frame, event.channel))),
            count=tuple(now[:-1, kernels.VISITS].tolist()),
            clipped_s=tuple((now[:-1, kernels.CLIPPED] / self._rate).tolist()),
            high_v=self._high_v,
            low_v=self._low_v,
        )

    def reset(self) -> None:
        """Back to the start, with an empty log."""
        self._now.fill(0)


def full_scale_log(sample_rate_hz: float, channels: int, *, full_scale_v: float) -> ClipLog:
    """The log of a recording's visits to full scale, from the largest sample of 16 bits on."""
    return ClipLog(sample_rate_hz, channels, high_v=full_scale_v * FULL_SCALE_RATIO)
