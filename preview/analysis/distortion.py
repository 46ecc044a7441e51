"""Distortion by measurement: tones through the running circuit, read off in the steady state.

A test tone has a whole number of periods in a window whose length is a prime, so that every harmonic falls on a line of
its own and nothing that folds back hides under one. The circuit runs until two windows are alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.dsp.block import Volts
from preview.dsp.events import LOG_FRAMES, EventFinder, LimitKind
from preview.dsp.oversample import PASSBAND_RATIO
from preview.dsp.settle import memory_s
from preview.dsp.stage import StageProcessor
from preview.errors import UsageError
from preview.values.quality import Quality

__all__ = [
    "AES17_BAND_HZ",
    "Onset",
    "Ran",
    "Tone",
    "TwoTone",
    "coherent",
    "harmonic_distortion",
    "onset",
    "two_tone",
]

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

AES17_BAND_HZ = 20e3
"""Edge of the standard low-pass of AES17 [Hz]."""
AES17_NOTCH_Q = 3.0
"""Q of the standard notch; AES17 allows 1.2 to 3."""
THD_BAND_HZ = 80e3
"""Harmonics are counted up to here, or to the edge of the computation's flat band [Hz]."""
HARMONICS_NAMED = 10

SMPTE_HZ, SMPTE_RATIO = (60.0, 7000.0), 4.0
CCIF_HZ = (19e3, 20e3)

SETTLED = 3e-8
"""Change of any line from one window to the next, as a share of the largest, at which it is steady."""
MOST_WINDOWS = 40
ONSET_DB = 0.01
HIGHEST_V = 1e3


class Ran(Protocol):
    """What is measured: a running circuit, or anything else from volts to volts."""

    def process(self, volts_in: Volts, volts_out: Volts) -> None:
        """Fill ``volts_out`` from the next ``volts_in``, both (frames, 1)."""


@dataclass(frozen=True, slots=True)
class Tone:
    """What one tone comes to."""

    frequency_hz: float
    """Of the tone, within half a thousandth of what was asked for [Hz]."""
    level_v: float
    """Its peak at the source [V]."""
    fundamental_v: float
    """Peak of the fundamental at the output [V]."""
    harmonics_v: tuple[float, ...]
    """Peaks of the second harmonic and those above it [V]."""
    dc_v: float
    """Mean of the output [V]."""
    thd_f: float
    """Harmonics over the fundamental."""
    thd_n: float
    """All but the fundamental over all, 20 Hz to 20 kHz, by the standard notch and low-pass of AES17."""
    band_hz: float
    """Harmonics are counted up to here [Hz]."""
    settled: bool
    """Whether it came to a steady state."""

    @property
    def thd_r(self) -> float:
        """Harmonics over all, the definition of IEC 60268-3."""
        return self.thd_f / math.sqrt(1.0 + self.thd_f**2)


@dataclass(frozen=True, slots=True)
class TwoTone:
    """What two tones together come to."""

    kind: str
    """``smpte`` or ``ccif``."""
    frequency_hz: tuple[float, float]
    """Of both tones [Hz]."""
    level_v: float
    """Peak of their sum at the source [V]."""
    rms: float
    """SMPTE RP 120: root of the sum of squares of the sidebands, first to third, over the upper tone. CCIF: nan."""
    second: float
    """IEC 60268-3, sum of the products of second order: SMPTE over the upper tone, CCIF over both tones."""
    third: float
    """The same of third order."""
    settled: bool
    """Whether it came to a steady state."""


@dataclass(frozen=True, slots=True)
class Onset:
    """The level at which a tone begins to bring an op-amp to a limit."""

    frequency_hz: float
    """Of the tone [Hz]."""
    kind: LimitKind
    """Rail or slew rate."""
    opamp: str
    """The op-amp that comes to it first."""
    level_v: float
    """Largest peak at the source at which none does, to 0.01 dB [V]."""


def coherent(frequency_hz: float, sample_rate_hz: float) -> tuple[int, int]:
    """Periods and frames, a prime, of a window of about a second that hold the frequency best.

    Raises
    ------
    UsageError
        The frequency is below 2 Hz or too high for the sample rate.
    """
    if not 2.0 <= frequency_hz <= PASSBAND_RATIO * sample_rate_hz:
        raise UsageError(
            f"{frequency_hz:g} Hz cannot be measured at {sample_rate_hz:g} Hz",
            f"2 Hz to {PASSBAND_RATIO * sample_rate_hz:.0f} Hz",
        )
    least = max(4999, int(0.95 * sample_rate_hz))
    frames = _primes(least, max(int(1.05 * sample_rate_hz), least + 500))
    periods = np.maximum(1, np.round(frequency_hz * frames / sample_rate_hz))
    best = int(np.argmin(np.abs(periods * sample_rate_hz / frames - frequency_hz)))
    return int(periods[best]), int(frames[best])


def _primes(low: int, high: int) -> NDArray[np.int64]:
    numbers = np.arange(low, high + 1)
    prime = np.ones(len(numbers), dtype=np.bool_)
    for d in range(2, math.isqrt(high) + 1):
        prime &= numbers % d != 0
    return numbers[prime]


def _steady(device: Ran, volts: Real) -> tuple[Complex, bool]:
    """Lines of the output for a window that is fed again and again, and whether two of them were alike."""
    frames = len(volts)
    block = np.ascontiguousarray(volts[:, None])
    out = np.empty_like(block)
    before: Complex | None = None
    for _ in range(MOST_WINDOWS):
        device.process(block, out)
        lines = np.fft.rfft(out[:, 0]) * (2.0 / frames)
        lines[0] *= 0.5
        if before is not None and np.abs(lines - before).max() <= SETTLED * np.abs(lines).max():
            return lines, True
        before = lines
    return lines, False


def harmonic_distortion(
    device: Ran, frequency_hz: float, level_v: float, sample_rate_hz: float, *, noise_vrms: float = 0.0
) -> Tone:
    """One tone through a device.

    Parameters
    ----------
    device : Ran
        What is measured, one channel, at rest.
    frequency_hz, level_v, sample_rate_hz : float
        Frequency [Hz] and peak [V] of the tone, and the rate at which the device runs [Hz].
    noise_vrms : float
        Noise of the device at its output, 20 Hz to 20 kHz, which does not run with the tone [V rms].
    """
    periods, frames = coherent(frequency_hz, sample_rate_hz)
    lines, settled = _steady(device, level_v * np.sin(2.0 * np.pi * periods * np.arange(frames) / frames))
    magnitude = np.abs(lines)
    line_hz = sample_rate_hz / frames
    band_hz = min(THD_BAND_HZ, PASSBAND_RATIO * sample_rate_hz)
    harmonics = magnitude[2 * periods : int(band_hz / line_hz) + 1 : periods]
    fundamental = float(magnitude[periods])
    return Tone(
        frequency_hz=periods * line_hz,
        level_v=level_v,
        fundamental_v=fundamental,
        harmonics_v=tuple(harmonics[: HARMONICS_NAMED - 1].tolist()),
        dc_v=float(lines[0].real),
        thd_f=float(np.linalg.norm(harmonics)) / fundamental if fundamental > 0.0 else math.nan,
        thd_n=_aes17(magnitude, periods, line_hz, noise_vrms),
        band_hz=band_hz,
        settled=settled,
    )


def _aes17(magnitude: Real, periods: int, line_hz: float, noise_vrms: float) -> float:
    """THD+N: what is behind the standard notch over what is before it, both within 20 Hz to 20 kHz."""
    f = np.arange(len(magnitude)) * line_hz
    inside = (f >= 20.0) & (f <= AES17_BAND_HZ)
    power = np.where(inside, magnitude**2 / 2.0, 0.0)
    ratio = f[1:] / (periods * line_hz)
    detuned = AES17_NOTCH_Q * (ratio - 1.0 / ratio)
    passed = np.concatenate([[0.0], detuned**2 / (1.0 + detuned**2)])
    total = float(power.sum()) + noise_vrms**2
    rest = float((power * passed).sum()) + noise_vrms**2
    return math.sqrt(rest / total) if total > 0.0 else math.nan


def two_tone(device: Ran, kind: str, level_v: float, sample_rate_hz: float) -> TwoTone:
    """Two tones through a device: ``smpte``, 60 Hz and 7 kHz, 4 to 1, or ``ccif``, 19 and 20 kHz, 1 to 1.

    ``level_v`` is the peak of their sum at the source [V].
    """
    tones_hz, share = (SMPTE_HZ, SMPTE_RATIO / (1.0 + SMPTE_RATIO)) if kind == "smpte" else (CCIF_HZ, 0.5)
    _, frames = coherent(tones_hz[0], sample_rate_hz)
    low, high = (round(f * frames / sample_rate_hz) for f in tones_hz)
    n = 2.0 * np.pi * np.arange(frames) / frames
    volts = level_v * (share * np.sin(low * n) + (1.0 - share) * np.sin(high * n))
    lines, settled = _steady(device, volts)
    magnitude = np.abs(lines)
    at = (low * sample_rate_hz / frames, high * sample_rate_hz / frames)
    if kind == "smpte":
        order = np.arange(1, 4)
        below, above, carrier = magnitude[high - order * low], magnitude[high + order * low], magnitude[high]
        pairs = (below + above) / carrier
        rms = float(np.sqrt((below**2 + above**2).sum()) / carrier)
        return TwoTone(kind, at, level_v, rms, float(pairs[0]), float(pairs[1]), settled)
    both = magnitude[low] + magnitude[high]
    third = magnitude[2 * low - high]
    if 2 * high - low < len(magnitude):
        third = third + magnitude[2 * high - low]
    return TwoTone(
        kind, at, level_v, math.nan, float(magnitude[high - low] / both), float(third / both), settled
    )


def onset(
    circuit: Netlist,
    frequency_hz: float,
    kind: LimitKind,
    *,
    sample_rate_hz: float,
    quality: Quality,
) -> Onset | None:
    """The level of a tone from which on an op-amp comes to a limit, found by running; None where none ever does.

    The tone is faded in until the circuit has forgotten its beginning, and then judged over some periods.
    """
    stage = StageProcessor(circuit, sample_rate_hz=sample_rate_hz, channels=1, quality=quality)
    fade = int(max(8.0 / frequency_hz, min(memory_s(circuit, 12.0), 5.0)) * sample_rate_hz)
    frames = fade + max(int(4.0 / frequency_hz * sample_rate_hz), 2 * LOG_FRAMES)
    n = np.arange(frames)
    shape = 0.5 - 0.5 * np.cos(np.pi * np.minimum(n / fade, 1.0))
    tone = (shape * np.sin(2.0 * np.pi * frequency_hz / sample_rate_hz * n))[:, None]

    def first_at(level_v: float) -> str:
        """The op-amp that is first at the limit; empty for none."""
        stage.reset()
        finder = EventFinder(stage)
        volts = level_v * tone
        for start in range(0, frames, LOG_FRAMES):
            finder.process(volts[start : start + LOG_FRAMES], None)
            if start < fade:
                finder.events.clear()
        finder.finish()
        begun = [e for e in finder.events if e.kind == kind]
        return min(begun, key=lambda e: e.start_s).designator if begun else ""

    low, high, who = 0.0, HIGHEST_V, first_at(HIGHEST_V)
    if not who:
        return None
    level_v = 1.0
    while low == 0.0 or 20.0 * math.log10(high / low) > ONSET_DB:
        found = first_at(level_v)
        if found:
            high, who = level_v, found
        else:
            low = level_v
        if low == 0.0 and high < 1e-9:
            return Onset(frequency_hz, kind, who, 0.0)
        level_v = math.sqrt(low * high) if low > 0.0 else high * 0.1
    return Onset(frequency_hz, kind, who, low)
