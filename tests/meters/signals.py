"""Signals that the tests of the meters feed, and the published figures they are held to."""

from __future__ import annotations

import math
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from preview.meters.reading import Meter, Reading
from preview.meters.weighting import Weighting, sections

Real = NDArray[np.float64]

PUBLISHED: dict[str, Any] = tomllib.loads(
    (Path(__file__).parents[1] / "published" / "meters.toml").read_text(encoding="utf-8")
)
FULL_SCALE_V = 8.70142984443495  # +18 dBu


def row(table: str, **wanted: object) -> dict[str, Any]:
    """The first published row of a table in which these keys have these values."""
    rows: list[dict[str, Any]] = PUBLISHED[table]
    return next(r for r in rows if all(r.get(key) == value for key, value in wanted.items()))


def sine(
    rate: float, frequency_hz: float, seconds: float, peak_v: float = 1.0, phase_deg: float = 0.0
) -> Real:
    """One channel (frames,) of a sine."""
    n = np.arange(round(seconds * rate))
    return peak_v * np.sin(2 * np.pi * frequency_hz / rate * n + math.radians(phase_deg))


def tones(rate: float, segments_dbfs_s: list[tuple[float, float]], frequency_hz: float = 1000.0) -> Real:
    """Stereo sine, in phase, at the levels for the seconds of the segments."""
    gain = np.concatenate([np.full(round(s * rate), 10 ** (db / 20)) for db, s in segments_dbfs_s])
    one = FULL_SCALE_V * gain * np.sin(2 * np.pi * frequency_hz / rate * np.arange(len(gain)))
    return np.column_stack([one, one])


def programme(rate: int, seconds: float, channels: int = 2) -> Real:
    """Noise whose level wanders over 40 dB, with a gap of silence: something for both gates."""
    rng = np.random.default_rng(12)
    frames = round(seconds * rate)
    steps = rng.uniform(-55, -12, round(seconds / 1.7) + 2)
    level = np.interp(np.arange(frames) / rate / 1.7, np.arange(len(steps)), steps)
    volts = rng.standard_normal((frames, channels)) * FULL_SCALE_V * 10 ** (level[:, np.newaxis] / 20)
    volts[frames // 3 : frames // 3 + 3 * rate] = 0.0
    return volts


def feed(meter: Meter, volts: Real, chunk: int = 1 << 30) -> Reading:
    """Feed a signal in chunks, one channel or several, and read."""
    frames = volts[:, np.newaxis] if volts.ndim == 1 else volts
    for start in range(0, len(frames), chunk):
        meter.feed(frames[start : start + chunk])
    return meter.read()


def db(ratio: float) -> float:
    return 20 * math.log10(ratio)


def sos(weighting: Weighting, rate: float) -> Real:
    """The weighting filter as scipy has sections: with a0."""
    rows = sections(weighting, rate)
    return np.column_stack([rows[:, :3], np.ones(len(rows)), rows[:, 3:]])
