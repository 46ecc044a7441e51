"""What the meters read: frozen values; tuples have one entry a channel. Volts unless the unit says otherwise."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "ClipEvent",
    "ClipReading",
    "CrestReading",
    "DcReading",
    "LevelReading",
    "LoudnessReading",
    "Meter",
    "PeakReading",
    "PpmReading",
    "QuasiPeakReading",
    "Reading",
    "RmsReading",
    "TruePeakReading",
    "VuReading",
]


@dataclass(frozen=True, slots=True)
class LevelReading:
    """One reading of a level meter; tuples have one entry a channel."""

    peak_v: tuple[float, ...]
    """Largest sample magnitude since the last reading [V]."""
    hold_v: tuple[float, ...]
    """Largest sample magnitude since the hold was cleared [V]."""
    rms_v: tuple[float, ...]
    """RMS over the last 300 ms (exponential) [V]."""


@dataclass(frozen=True, slots=True)
class PeakReading:
    """Sample peak."""

    shown_v: tuple[float, ...]
    """Magnitude that rises at once and falls 20 dB in 1.7 s [V]."""
    max_v: tuple[float, ...]
    """Largest sample since the start, 0 V or more [V]."""
    min_v: tuple[float, ...]
    """Smallest sample since the start, 0 V or less [V]."""

    @property
    def peak_v(self) -> tuple[float, ...]:
        """Largest magnitude since the start [V]."""
        return tuple(max(high, -low) for high, low in zip(self.max_v, self.min_v, strict=True))


@dataclass(frozen=True, slots=True)
class TruePeakReading:
    """Peak of the signal between its samples."""

    shown_v: tuple[float, ...]
    """Magnitude that rises at once and falls 20 dB in 1.7 s [V]."""
    peak_v: tuple[float, ...]
    """Largest magnitude since the start [V]."""


@dataclass(frozen=True, slots=True)
class RmsReading:
    """RMS, weighted by frequency or not."""

    rms_v: tuple[float, ...]
    """RMS with an exponential time weighting [V]."""
    max_rms_v: tuple[float, ...]
    """Highest of it since the start [V]."""
    mean_rms_v: tuple[float, ...]
    """RMS of all since the start [V]."""
    time_s: float
    """Time constant of the time weighting [s]."""
    weighting: str
    """Name of the frequency weighting; empty for none."""


@dataclass(frozen=True, slots=True)
class LoudnessReading:
    """Loudness of all channels together; -inf where there is silence, or not enough signal yet."""

    momentary_lufs: float
    """Over the last 400 ms [LUFS]."""
    short_term_lufs: float
    """Over the last 3 s [LUFS]."""
    integrated_lufs: float
    """Since the start, gated [LUFS]."""
    range_lu: float
    """Loudness range since the start; 0 where nothing is above the gate [LU]."""
    max_momentary_lufs: float
    """Highest momentary loudness since the start [LUFS]."""
    max_short_term_lufs: float
    """Highest short-term loudness since the start [LUFS]."""
    full_scale_v: float
    """Peak volts of full scale, from which the loudness is counted [V]."""


@dataclass(frozen=True, slots=True)
class VuReading:
    """Volume indicator."""

    level_vrms: tuple[float, ...]
    """RMS of the steady sine that deflects the needle as far [V rms]."""
    max_vrms: tuple[float, ...]
    """Highest of it since the start [V rms]."""
    vu: tuple[float, ...]
    """Reading on the scale, 0 at the reference [VU]."""
    reference_vrms: float
    """RMS of the sine that reads 0 VU [V rms]."""


@dataclass(frozen=True, slots=True)
class PpmReading:
    """Peak programme meter."""

    level_vrms: tuple[float, ...]
    """RMS of the steady sine that reads the same [V rms]."""
    max_vrms: tuple[float, ...]
    """Highest of it since the start [V rms]."""
    mark: tuple[float, ...]
    """Reading on the scale of the type: dB on I and IIb, marks of 4 dB on IIa."""
    kind: Literal["I", "IIa", "IIb"]
    """Type of meter."""


@dataclass(frozen=True, slots=True)
class QuasiPeakReading:
    """Weighted quasi-peak level of noise."""

    level_vrms: tuple[float, ...]
    """RMS of the steady sine of 1 kHz that reads the same [V rms]."""
    max_vrms: tuple[float, ...]
    """Highest of it since the start [V rms]."""


@dataclass(frozen=True, slots=True)
class CrestReading:
    """Peak against RMS since the start, DC included in both; NaN for silence."""

    peak_v: tuple[float, ...]
    """Largest sample magnitude [V]."""
    rms_v: tuple[float, ...]
    """RMS [V]."""
    crest_ratio: tuple[float, ...]
    """Peak over RMS."""
    crest_db: tuple[float, ...]
    """The same [dB]."""


@dataclass(frozen=True, slots=True)
class DcReading:
    """DC."""

    dc_v: tuple[float, ...]
    """Of late: behind two low-passes of 0.5 s each [V]."""
    mean_v: tuple[float, ...]
    """Mean of all since the start [V]."""


@dataclass(frozen=True, slots=True)
class ClipEvent:
    """One visit to a limit."""

    channel: int
    """Counted from 0."""
    start_frame: int
    """First frame at or beyond the limit."""
    frames: int
    """Frames at or beyond the limit."""
    start_s: float
    """The same from the start of the signal [s]."""
    duration_s: float
    """The same as a duration [s]."""
    at_high: bool
    """Whether it is the upper limit."""
    peak_v: float
    """Farthest voltage [V]."""


@dataclass(frozen=True, slots=True)
class ClipReading:
    """Visits to the limits since the start."""

    events: tuple[ClipEvent, ...]
    """In the order of their starts; the first so many, as far as there was room."""
    count: tuple[int, ...]
    """Visits on each channel, those without room included."""
    clipped_s: tuple[float, ...]
    """Time at the limits on each channel [s]."""
    high_v: float
    """Upper limit [V]."""
    low_v: float
    """Lower limit [V]."""


Reading = (
    PeakReading
    | TruePeakReading
    | RmsReading
    | LoudnessReading
    | VuReading
    | PpmReading
    | QuasiPeakReading
    | CrestReading
    | DcReading
    | ClipReading
)


class Meter(Protocol):
    """A meter: fed with volts, read at any time."""

    def feed(self, volts: NDArray[np.float64]) -> None:
        """Take the next frames, shape (frames, channels); real-time safe."""

    def read(self) -> Reading:
        """The present reading."""

    def reset(self) -> None:
        """Start anew."""
