"""The last thing before the device: volume, mute, which channels are heard, and nothing above full scale."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.engine.loop import Samples, peak
from preview.engine.transport import Ramp, gain_of

__all__ = ["START_VOLUME_DB", "Monitor"]

START_VOLUME_DB = -20.0
VOLUME_RAMP_S = 0.020
MUTE_RAMP_S = 0.010
DUCK_RAMP_S = 0.020


class Monitor:
    """Brings computed samples to the device; for the audio thread.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the frames [Hz].
    volume_db : float
        Listening volume at the start [dB].
    """

    def __init__(self, sample_rate_hz: float, volume_db: float = START_VOLUME_DB) -> None:
        self.volume_db = min(volume_db, 0.0)
        """Listening volume [dB]."""
        self.mute_reason = ""
        """Why it was muted without being asked to."""
        self.limited_blocks = 0
        """Blocks in which a sample was above full scale and had to be limited."""
        self.heard_channels: tuple[int, ...] = ()
        """Channels that are heard, from 0; empty where all are."""
        self._chosen: tuple[int, ...] = ()
        self._volume = Ramp(max(round(VOLUME_RAMP_S * sample_rate_hz), 1), gain_of(self.volume_db))
        self._mute = Ramp(max(round(MUTE_RAMP_S * sample_rate_hz), 1), 1.0)
        self._duck = Ramp(max(round(DUCK_RAMP_S * sample_rate_hz), 1), 1.0)

    @property
    def muted(self) -> bool:
        """Whether the device is silent, or about to be."""
        return self._mute.target == 0.0

    def set_volume(self, volume_db: float) -> None:
        """Glide to another volume, at most 0 dB; what is not a number changes nothing."""
        if not math.isnan(volume_db):
            self.volume_db = min(volume_db, 0.0)
            self._volume.to(gain_of(self.volume_db))

    def mute(self, on: bool, reason: str = "", *, at_once: bool = False) -> None:
        """Fade to silence or back; ``at_once`` where nothing is heard that could jump."""
        self.mute_reason = reason if on else ""
        gain = 0.0 if on else 1.0
        if at_once:
            self._mute.jump(gain)
        else:
            self._mute.to(gain)

    def duck(self, gain_db: float) -> None:
        """Glide to a gain of its own for a moment, behind the limit, so that what is limited follows as well."""
        self._duck.to(gain_of(gain_db))

    def choose(self, channels: tuple[int, ...]) -> None:
        """Which channels of the recording are heard where the device has fewer; in silence, as it jumps."""
        self._chosen = channels

    def leave(self, samples: Samples, out: NDArray[np.float32]) -> None:
        """Fill the device's block from samples, which are changed."""
        self._volume.apply(samples)
        self._mute.apply(samples)
        if peak(samples) > 1.0:
            np.clip(samples, -1.0, 1.0, out=samples)
            self.limited_blocks += 1
        self._duck.apply(samples)
        self._spread(samples, out)

    def _spread(self, samples: Samples, out: NDArray[np.float32]) -> None:
        """Lay the recording's channels on the device's: one on all, two on one as their mean, of more a choice."""
        have, want = samples.shape[1], out.shape[1]
        self.heard_channels = ()
        if have == 1 or want == have:
            out[:] = samples
        elif want > have:
            out[:, :have] = samples
            out[:, have:] = 0.0
        elif have == 2:
            np.mean(samples, axis=1, keepdims=True, out=samples[:, :1])
            out[:] = samples[:, :1]
        else:
            self.heard_channels = (*self._chosen, *range(have))[:want]
            for at, channel in enumerate(self.heard_channels):
                out[:, at] = samples[:, channel]
