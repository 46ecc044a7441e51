"""The live spectrum in volts: 1/6-octave bands, computed away from the audio thread."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from preview.dsp.block import Volts
from preview.engine.readings import SpectrumReading

__all__ = ["Spectrum", "Tap", "band_centers_hz"]

Real = NDArray[np.float64]

_OCTAVE_RATIO = 10.0**0.3
_BANDS_PER_OCTAVE = 6
_REFERENCE_HZ = 1000.0
_LOWEST_HZ = 10.0
_LONG_S, _SHORT_S = 0.5, 0.06
_SHORT_FROM_HZ = 400.0
_CHANNELS = 2


class Tap:
    """The last frames of a signal; one thread writes, another copies what lies well behind the writer.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the frames [Hz].
    channels : int
        Channels of the signal; the first two are kept.
    """

    def __init__(self, sample_rate_hz: float, channels: int) -> None:
        self.frames = _power_of_two(_LONG_S * sample_rate_hz)
        self._ring = np.zeros((2 * self.frames, min(channels, _CHANNELS)))
        self._written = 0

    def write(self, volts: Volts) -> None:
        """Keep the next frames; real-time safe."""
        size, kept = self._ring.shape
        volts = volts[-size:, :kept]
        at = self._written % size
        first = min(len(volts), size - at)
        self._ring[at : at + first] = volts[:first]
        self._ring[: len(volts) - first] = volts[first:]
        self._written += len(volts)

    def last(self) -> Real:
        """A copy of the last ``frames`` frames, shape (frames, kept channels); zeros before the first."""
        end = self._written % len(self._ring)
        return np.take(self._ring, np.arange(end - self.frames, end), axis=0, mode="wrap")


class Spectrum:
    """RMS in bands of a sixth of an octave [IEC 61260-1].

    Hann windows of half a second at least, from 400 Hz up of 60 ms. The power of a line of the transform goes to the
    bands in whose share of the frequency axis it lies. A sine spreads over four lines, so in a band narrower than
    these, below 50 Hz, it reads low by up to 2 dB and its neighbours high.

    Parameters
    ----------
    sample_rate_hz : float
        Rate of the frames [Hz].
    """

    def __init__(self, sample_rate_hz: float) -> None:
        self._rate_hz = sample_rate_hz
        self.center_hz = band_centers_hz(sample_rate_hz)
        centers = np.array(self.center_hz)
        half = _OCTAVE_RATIO ** (0.5 / _BANDS_PER_OCTAVE)
        self._edges_hz = np.concatenate([centers[:1] / half, centers * half])
        self._short_band = int(np.searchsorted(centers, _SHORT_FROM_HZ))
        self._windows = [
            np.hanning(_power_of_two(seconds * sample_rate_hz) + 1)[:-1] for seconds in (_LONG_S, _SHORT_S)
        ]

    def read(self, input_tap: Tap, output_tap: Tap) -> SpectrumReading:
        """The spectrum of what the taps hold now."""
        before, after = (self._bands_vrms(tap.last()) for tap in (input_tap, output_tap))
        return SpectrumReading(self.center_hz, tuple(before.tolist()), tuple(after.tolist()))

    def _bands_vrms(self, volts: Real) -> Real:
        """RMS of each band [V], of the louder channel."""
        long, short = (self._power(volts[-len(window) :], window) for window in self._windows)
        both = np.concatenate([long[:, : self._short_band], short[:, self._short_band :]], axis=1)
        return np.asarray(np.sqrt(both.max(axis=0)))

    def _power(self, volts: Real, window: Real) -> Real:
        """Mean square of each band [V^2], a row a channel."""
        count = len(window)
        lines = np.abs(np.fft.rfft(volts.T * window, axis=1)) ** 2
        lines *= 2.0 / (count * np.sum(window * window))
        lines[:, [0, -1]] *= 0.5
        # line k stands for the frequencies from k - 1/2 to k + 1/2
        edges = np.clip(self._edges_hz * count / self._rate_hz + 0.5, 0.0, lines.shape[1])
        summed = np.concatenate([np.zeros((len(lines), 1)), np.cumsum(lines, axis=1)], axis=1)
        at = np.arange(summed.shape[1])
        return np.maximum(np.diff([np.interp(edges, at, row) for row in summed], axis=1), 0.0)


def band_centers_hz(sample_rate_hz: float) -> tuple[float, ...]:
    """Exact mid-band frequencies of the bands from 10 Hz up to half the sample rate [Hz]; base ten."""
    b = _BANDS_PER_OCTAVE
    number = np.arange(-200, 200)
    centers = _REFERENCE_HZ * _OCTAVE_RATIO ** ((2 * number + 1) / (2 * b))
    inside = (centers >= _LOWEST_HZ) & (centers * _OCTAVE_RATIO ** (0.5 / b) <= 0.5 * sample_rate_hz)
    return tuple(centers[inside].tolist())


def _power_of_two(frames: float) -> int:
    return 1 << int(np.ceil(np.log2(frames)))
