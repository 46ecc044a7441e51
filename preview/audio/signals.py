"""Test signals as a source: volts, one channel, endless, and the same at a frame however it is reached."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from preview.values.stimulus import STIMULUS_RATE_HZ, Stimulus, Waveform

__all__ = ["ENDLESS_FRAMES", "SignalSource", "natural_frames"]

ENDLESS_FRAMES = 1 << 40
"""Length of what never ends: 265 days at 48 kHz [frames]."""
_PINK_FRAMES = 1 << 19
_PINK_HZ = (20.0, 20_000.0)
_PINK_SEED = 1925
_SWEEP_FADE_S = 0.005
_SHOWN_S = 10.0


def natural_frames(stimulus: Stimulus) -> int:
    """One sweep, or 10 s of a signal that has no length of its own [frames]."""
    seconds = stimulus.duration_s if stimulus.waveform is Waveform.SWEEP else _SHOWN_S
    return round(seconds * STIMULUS_RATE_HZ)


class SignalSource:
    """A test signal in volts (not as a share of full scale).

    Sine, tones and burst are evaluated at each frame. A sweep is exponential, its phase
    ``2 pi f1 L (exp(t / L) - 1)``, ``L = T / ln(f2 / f1)`` [Farina2000], faded over 5 ms at both ends and begun anew.
    The square is its Fourier series up to half the sample rate, so it overshoots its flat top by up to 18 % of it at
    the edges, as every band-limited square does [AbramowitzStegun1964]; its frequency is a multiple of 0.1 Hz, which
    makes it exactly periodic. Pink noise has a spectrum whose every line is exact, and comes round after 2^19 frames
    without a seam.

    Parameters
    ----------
    stimulus : Stimulus
        The signal.
    """

    channels = 1
    sample_rate_hz = STIMULUS_RATE_HZ
    frames = ENDLESS_FRAMES

    def __init__(self, stimulus: Stimulus) -> None:
        self.stimulus = stimulus
        self.position = 0
        """Frame that the next ``read`` begins with."""
        self._table: NDArray[np.float64] | None = None
        if stimulus.waveform is Waveform.SQUARE:
            self._table = _square(stimulus)
        elif stimulus.waveform is Waveform.PINK:
            self._table = _pink(stimulus)

    def read(self, samples_out: NDArray[np.float64]) -> int:
        """Fill the array, shape (n, 1), with the next volts; always all of it."""
        count = len(samples_out)
        frame = np.arange(count, dtype=np.int64) + self.position
        samples_out[:, 0] = self._volts(frame)
        self.position += count
        return count

    def seek(self, frame: int) -> None:
        """Make that frame the next to be read."""
        self.position = max(frame, 0)

    def close(self) -> None:
        """Nothing to let go of."""

    def _volts(self, frame: NDArray[np.int64]) -> NDArray[np.float64]:
        signal = self.stimulus
        if self._table is not None:
            return np.asarray(self._table[frame % len(self._table)])
        match signal.waveform:
            case Waveform.SINE:
                return signal.level_v * _sine(signal.first_hz, frame)
            case Waveform.TWO_TONE:
                second_v = signal.level_v / (1.0 + signal.first_ratio)
                first = signal.first_ratio * second_v * _sine(signal.first_hz, frame)
                return np.asarray(first + second_v * _sine(signal.second_hz, frame))
            case Waveform.BURST:
                cycle = _cycles(signal.first_hz, frame, signal.cycles_period)
                return np.where(cycle < signal.cycles_on, signal.level_v * np.sin(2.0 * np.pi * cycle), 0.0)
            case _:
                return signal.level_v * _sweep(signal, frame)


def _cycles(frequency_hz: float, frame: NDArray[np.int64], period: int = 1) -> NDArray[np.float64]:
    """Cycles since frame 0, modulo ``period``; the division comes last, so nothing is lost after days."""
    turn = period * float(STIMULUS_RATE_HZ)
    return np.asarray(np.fmod(frequency_hz * frame, turn) / STIMULUS_RATE_HZ)


def _sine(frequency_hz: float, frame: NDArray[np.int64]) -> NDArray[np.float64]:
    return np.asarray(np.sin(2.0 * np.pi * _cycles(frequency_hz, frame)))


def _sweep(signal: Stimulus, frame: NDArray[np.int64]) -> NDArray[np.float64]:
    whole = natural_frames(signal)
    within = frame % whole
    time_s = within / STIMULUS_RATE_HZ
    slope_s = signal.duration_s / math.log(signal.second_hz / signal.first_hz)
    phase = 2.0 * np.pi * signal.first_hz * slope_s * np.expm1(time_s / slope_s)
    near_end = np.minimum(within, whole - within) / (_SWEEP_FADE_S * STIMULUS_RATE_HZ)
    fade = 0.5 - 0.5 * np.cos(np.pi * np.minimum(near_end, 1.0))
    return np.asarray(fade * np.sin(phase))


def _square(signal: Stimulus) -> NDArray[np.float64]:
    """As many periods as take a whole number of frames, from the lines of the spectrum."""
    tenths = round(10.0 * signal.first_hz)
    shared = math.gcd(tenths, 10 * STIMULUS_RATE_HZ)
    periods, frames = tenths // shared, 10 * STIMULUS_RATE_HZ // shared
    harmonic = np.arange(1, (frames - 1) // (2 * periods) + 1, 2)
    lines = np.zeros(frames // 2 + 1, np.complex128)
    lines[harmonic * periods] = -2j * frames * signal.level_v / (np.pi * harmonic)
    return np.asarray(np.fft.irfft(lines, frames))


def _pink(signal: Stimulus) -> NDArray[np.float64]:
    frequency_hz = np.fft.rfftfreq(_PINK_FRAMES, 1.0 / STIMULUS_RATE_HZ)
    low_hz, high_hz = _PINK_HZ
    heard = (frequency_hz >= low_hz) & (frequency_hz <= high_hz)
    angle = np.random.default_rng(_PINK_SEED).uniform(0.0, 2.0 * np.pi, np.count_nonzero(heard))
    lines = np.zeros(len(frequency_hz), np.complex128)
    lines[heard] = np.exp(1j * angle) / np.sqrt(frequency_hz[heard])
    noise = np.fft.irfft(lines, _PINK_FRAMES)
    return np.asarray(noise * (signal.level_v / math.sqrt(2.0) / math.sqrt(np.mean(noise * noise))))
