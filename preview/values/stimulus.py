"""Test signals in volts, and reading them from text: ``sine 1k 1V``, ``sweep 20 20k 10s 1V``."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from enum import StrEnum

from preview.errors import NotationError
from preview.values.levels import parse_level
from preview.values.notation import clean_text, format_value, parse_value, quoted

__all__ = ["STIMULUS_EXAMPLES", "STIMULUS_RATE_HZ", "Stimulus", "Waveform", "parse_stimulus"]

STIMULUS_RATE_HZ = 48_000
"""Sample rate of test signals [Hz]."""
_HIGHEST_HZ = 0.45 * STIMULUS_RATE_HZ
_SHORTEST_S, _LONGEST_S = 0.1, 600.0
_LONGEST_CYCLES = 100_000


class Waveform(StrEnum):
    """The test signals there are."""

    SINE = "sine"
    """One frequency."""
    TWO_TONE = "two-tone"
    """Two sines; ``4:1`` is the ratio of the first's peak to the second's."""
    SWEEP = "sweep"
    """From one frequency to the other, equal time an octave, again and again."""
    BURST = "burst"
    """Whole cycles of a sine, then silence; ``10/100`` is 10 cycles heard of every 100."""
    SQUARE = "square"
    """Up and down for half a period each, all harmonics that fit under half the sample rate."""
    PINK = "pink"
    """Noise of equal power in each octave, 20 Hz to 20 kHz."""


STIMULUS_EXAMPLES: dict[Waveform, str] = {
    Waveform.SINE: "sine 1k 1V",
    Waveform.TWO_TONE: "two-tone 60 7k 4:1 1V",
    Waveform.SWEEP: "sweep 20 20k 10s 1V",
    Waveform.BURST: "burst 1k 10/100 1V",
    Waveform.SQUARE: "square 100 1V",
    Waveform.PINK: "pink 0.5Vrms",
}
"""One of each as it is written."""


@dataclass(frozen=True, slots=True)
class Stimulus:
    """A test signal."""

    waveform: Waveform
    """Its kind."""
    level_v: float
    """Peak volts; of pink noise, of the sine with its rms; of a square, of its flat top."""
    first_hz: float = 0.0
    """Frequency, or the first of two [Hz]; 0 for noise."""
    second_hz: float = 0.0
    """Second frequency of a sweep or of two tones [Hz]."""
    first_ratio: float = 1.0
    """Two tones: peak of the first over that of the second."""
    duration_s: float = 10.0
    """Length of one sweep [s]."""
    cycles_on: int = 1
    """Burst: cycles heard ..."""
    cycles_period: int = 2
    """... of so many."""

    @property
    def text(self) -> str:
        """As it is written; ``parse_stimulus`` reads it back."""
        first, second = (format_value(f, "frequency", digits=9) for f in (self.first_hz, self.second_hz))
        shape = {
            Waveform.SINE: first,
            Waveform.SQUARE: first,
            Waveform.TWO_TONE: f"{first} {second} {self.first_ratio:.9g}:1",
            Waveform.SWEEP: f"{first} {second} {format_value(self.duration_s, 'time', digits=9)}",
            Waveform.BURST: f"{first} {self.cycles_on}/{self.cycles_period}",
            Waveform.PINK: "",
        }[self.waveform]
        level_v, unit = self.level_v, ""
        if self.waveform is Waveform.PINK:
            level_v, unit = level_v / 2.0**0.5, "rms"
        return " ".join(f"{self.waveform} {shape} {_volts(level_v)}{unit}".split())


def _volts(volts: float) -> str:
    """Volts that read back as the same number to nine digits."""
    return format_value(volts, "voltage", digits=9)


def parse_stimulus(text: str) -> Stimulus:
    """A test signal from its text, see ``STIMULUS_EXAMPLES``.

    Raises
    ------
    NotationError
        No such signal, a number missing or left over, or one out of range.
    """
    body = clean_text(text, _examples())
    name, _, rest = body.partition(" ")
    try:
        waveform = Waveform(name.lower())
    except ValueError:
        raise NotationError(f"{quoted(text)}: no such test signal", _examples()) from None
    hint = f"such as {STIMULUS_EXAMPLES[waveform]}"
    words = _words(rest)
    counts = {
        Waveform.TWO_TONE: (3, 4),
        Waveform.SWEEP: (4, 4),
        Waveform.BURST: (3, 3),
        Waveform.PINK: (1, 1),
    }
    fewest, most = counts.get(waveform, (2, 2))
    if not fewest <= len(words) <= most:
        raise NotationError(f"{quoted(text)}: {len(words)} figures after {waveform}", hint)
    try:
        stimulus = Stimulus(waveform, parse_level(words.pop()))
        if words:
            stimulus = replace(stimulus, first_hz=parse_value(words.pop(0), "frequency"))
        if waveform in (Waveform.TWO_TONE, Waveform.SWEEP):
            stimulus = replace(stimulus, second_hz=parse_value(words.pop(0), "frequency"))
        if waveform is Waveform.SWEEP:
            stimulus = replace(stimulus, duration_s=parse_value(words.pop(0), "time"))
        elif waveform is Waveform.TWO_TONE and words:
            above, below = _pair(words.pop(0), ":")
            stimulus = replace(stimulus, first_ratio=above / below)
        elif waveform is Waveform.BURST:
            on, period = _pair(words.pop(0), "/")
            stimulus = replace(stimulus, cycles_on=int(on), cycles_period=int(period))
    except NotationError as error:
        raise NotationError(f"{quoted(text)}: {error.message}", error.hint or hint) from error
    _check(stimulus, text, hint)
    return stimulus


def _examples() -> str:
    return "; ".join(STIMULUS_EXAMPLES.values())


def _words(rest: str) -> list[str]:
    """Figures with their units: a word that does not begin like a number belongs to the one before."""
    words: list[str] = []
    for word in rest.split():
        if words and not re.match(r"[+-]?\.?[0-9]", word):
            words[-1] += word
        else:
            words.append(word)
    return words


def _pair(word: str, mark: str) -> tuple[float, float]:
    found = re.fullmatch(rf"([0-9]+(?:\.[0-9]+)?){mark}([0-9]+(?:\.[0-9]+)?)", word)
    if found is None or float(found[1]) == 0.0 or float(found[2]) == 0.0:
        raise NotationError(f"{quoted(word)}: not two numbers joined by {mark}")
    return float(found[1]), float(found[2])


def _check(stimulus: Stimulus, text: str, hint: str) -> None:
    """Raise NotationError for figures that make no such signal."""
    frequencies = [f for f in (stimulus.first_hz, stimulus.second_hz) if f]
    trouble = ""
    if any(not 0.1 <= f <= _HIGHEST_HZ for f in frequencies):
        trouble = f"a frequency outside 0.1 Hz to {_HIGHEST_HZ:g} Hz"
    elif stimulus.waveform in (Waveform.SWEEP, Waveform.TWO_TONE) and frequencies[0] == frequencies[-1]:
        trouble = "both frequencies are the same"
    elif stimulus.waveform is Waveform.SQUARE and abs(10.0 * frequencies[0] % 1.0) > 1e-9:
        trouble = "a square whose frequency is not a multiple of 0.1 Hz"
    elif not _SHORTEST_S <= stimulus.duration_s <= _LONGEST_S:
        trouble = f"a sweep outside {_SHORTEST_S:g} s to {_LONGEST_S:g} s"
    elif not 1e-3 <= stimulus.first_ratio <= 1e3:
        trouble = "a ratio outside 1:1000 to 1000:1"
    elif not 0 < stimulus.cycles_on < stimulus.cycles_period <= _LONGEST_CYCLES:
        trouble = f"a burst is fewer cycles of more, at most {_LONGEST_CYCLES}"
    if trouble:
        raise NotationError(f"{quoted(text)}: {trouble}", hint)
