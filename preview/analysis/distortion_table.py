"""Measurements of distortion side by side: every frequency at every level, two tones, where the limits begin."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from preview.analysis.distortion import (
    AES17_NOTCH_Q,
    Onset,
    Tone,
    TwoTone,
    harmonic_distortion,
    onset,
    two_tone,
)
from preview.circuit.netlist import Netlist
from preview.dsp.events import LimitKind
from preview.dsp.stage import StageProcessor
from preview.network.noise import AUDIO_BAND_HZ, OutputNoise
from preview.values.levels import dbu_from_vpk, format_db, format_volts, ratio_db
from preview.values.notation import format_value
from preview.values.quality import Quality

__all__ = ["DistortionReport", "measure"]

_LIMITS: tuple[tuple[LimitKind, str], ...] = (("rail", "clipping"), ("slew", "slewing"))
_MODEL = "of rails, slew rate and diodes; what a real op-amp distorts before its limits is not in its model"
_SWEEP_DB = tuple(range(-36, 13, 3))
"""Levels of a sweep around the first onset [dB]."""
_SWEEP_WITHOUT_V = tuple(10.0 ** (k / 20.0) for k in range(-40, 21, 6))
"""Levels of a sweep of a stage that has no limit [V]."""


@dataclass(frozen=True, slots=True)
class DistortionReport:
    """Everything that was measured."""

    sample_rate_hz: float
    """Rate at which the circuit ran [Hz]."""
    noise_vrms: float
    """Noise of the circuit at its output, 20 Hz to 20 kHz, which is in THD+N [V rms]."""
    tones: tuple[Tone, ...]
    """Single tones."""
    pairs: tuple[TwoTone, ...]
    """Pairs of tones."""
    onsets: tuple[Onset, ...]
    """Where clipping and slewing begin."""

    def as_object(self) -> dict[str, object]:
        """The report, the unit in each key; ratios are of amplitudes."""
        return {
            "sample_rate_hz": self.sample_rate_hz,
            "noise_vrms": self.noise_vrms,
            "notch_q": AES17_NOTCH_Q,
            "note": _MODEL,
            "distortion": [_tone_object(tone) for tone in self.tones],
            "two_tone": [_pair_object(pair) for pair in self.pairs],
            "onsets": [
                {
                    "frequency_hz": one.frequency_hz,
                    "limit": one.kind,
                    "opamp": one.opamp,
                    "level_v": one.level_v,
                    "level_dbu": dbu_from_vpk(one.level_v),
                }
                for one in self.onsets
            ],
        }

    def as_lines(self) -> list[str]:
        """Tables for a screen."""
        band = format_value(min((t.band_hz for t in self.tones), default=0.0), "frequency")
        lines = [
            f"THD: harmonics to {band} over the fundamental. THD+N: 20 Hz to 20 kHz over all, by the notch "
            f"(Q {AES17_NOTCH_Q:g}) and low-pass of AES17,",
            f"the circuit's noise of {format_volts(self.noise_vrms)} rms included. Harmonics re the fundamental; "
            "levels are peaks of the source",
            f"{'frequency':>12}{'level':>24}{'output':>10}{'THD':>12}{'THD+N':>12}"
            f"{'2nd':>8}{'3rd':>8}{'4th':>8}{'5th':>8}",
        ]
        lines += [_tone_line(tone) for tone in self.tones]
        if self.pairs:
            lines.append("")
        lines += [_pair_line(pair) for pair in self.pairs]
        if self.onsets:
            lines.append("")
        names = dict(_LIMITS)
        lines += [
            f"{names[one.kind]} begins at {format_value(one.frequency_hz, 'frequency')} with "
            f"{format_volts(one.level_v)} {_dbu(one.level_v)} at the source: {one.opamp}"
            for one in self.onsets
        ]
        lines.append(f"({_MODEL})")
        if not (all(tone.settled for tone in self.tones) and all(pair.settled for pair in self.pairs)):
            lines.append("* did not come to a steady state in the time given")
        return lines


def measure(
    circuit: Netlist,
    frequencies_hz: Sequence[float],
    levels_v: Sequence[float] | None,
    *,
    sample_rate_hz: float,
    quality: Quality,
) -> DistortionReport:
    """Measure a circuit: each frequency at each level, two tones at each level, and where its limits begin.

    ``levels_v`` None sweeps the level about the first onset of each frequency, without pairs of tones.
    """
    stage = StageProcessor(circuit, sample_rate_hz=sample_rate_hz, channels=1, quality=quality)
    noise_vrms = OutputNoise(circuit).total(*AUDIO_BAND_HZ).output_vrms
    onsets = {f: _onsets(circuit, f, sample_rate_hz, quality) for f in frequencies_hz}
    tones, pairs = [], []
    for f in frequencies_hz:
        for level_v in levels_v or _swept(onsets[f]):
            stage.reset()
            tones.append(harmonic_distortion(stage, f, level_v, sample_rate_hz, noise_vrms=noise_vrms))
    for level_v in levels_v or ():
        for kind in ("smpte", "ccif"):
            if kind == "ccif" and sample_rate_hz < 48_000.0:
                continue
            stage.reset()
            pairs.append(two_tone(stage, kind, level_v, sample_rate_hz))
    begins = tuple(one for f in frequencies_hz for one in onsets[f])
    return DistortionReport(sample_rate_hz, noise_vrms, tuple(tones), tuple(pairs), begins)


def _onsets(circuit: Netlist, frequency_hz: float, sample_rate_hz: float, quality: Quality) -> list[Onset]:
    found = (
        onset(circuit, frequency_hz, kind, sample_rate_hz=sample_rate_hz, quality=quality)
        for kind, _ in _LIMITS
    )
    return [one for one in found if one is not None]


def _swept(onsets: Sequence[Onset]) -> list[float]:
    """Levels from well below to well above the first onset [V]."""
    first_v = min((one.level_v for one in onsets), default=0.0)
    if first_v == 0.0:
        return list(_SWEEP_WITHOUT_V)
    return [first_v * 10.0 ** (k / 20.0) for k in _SWEEP_DB]


def _tone_object(tone: Tone) -> dict[str, object]:
    return {
        "frequency_hz": tone.frequency_hz,
        "level_v": tone.level_v,
        "level_dbu": dbu_from_vpk(tone.level_v),
        "output_v": tone.fundamental_v,
        "gain_db": ratio_db(tone.fundamental_v / tone.level_v),
        "dc_v": tone.dc_v,
        "band_hz": tone.band_hz,
        "thd_ratio": tone.thd_f,
        "thd_db": ratio_db(tone.thd_f),
        "thd_of_total_ratio": tone.thd_r,
        "thd_n_ratio": tone.thd_n,
        "thd_n_db": ratio_db(tone.thd_n),
        "harmonics_v": list(tone.harmonics_v),
        "harmonics_db": [ratio_db(v / tone.fundamental_v) for v in tone.harmonics_v],
        "settled": tone.settled,
    }


def _pair_object(pair: TwoTone) -> dict[str, object]:
    return {
        "kind": pair.kind,
        "frequency_hz": list(pair.frequency_hz),
        "level_v": pair.level_v,
        "level_dbu": dbu_from_vpk(pair.level_v),
        "smpte_rms_ratio": pair.rms,
        "second_order_ratio": pair.second,
        "third_order_ratio": pair.third,
        "settled": pair.settled,
    }


def _tone_line(tone: Tone) -> str:
    harmonics = "".join(f"{_db(v / tone.fundamental_v):>8}" for v in tone.harmonics_v[:4])
    return (
        f"{'' if tone.settled else '*'}{tone.frequency_hz:>10.2f} Hz"
        f"{f'{format_volts(tone.level_v)} {_dbu(tone.level_v)}':>24}{format_volts(tone.fundamental_v):>10}"
        f"{_percent(tone.thd_f):>12}{_percent(tone.thd_n):>12}{harmonics}"
    )


def _pair_line(pair: TwoTone) -> str:
    low, high = (format_value(f, "frequency") for f in pair.frequency_hz)
    star = "" if pair.settled else "*"
    level = f"{format_volts(pair.level_v)} peak"
    if pair.kind == "smpte":
        return (
            f"{star}SMPTE, {low} and {high}, 4 to 1, {level}: {_percent(pair.rms)} rms of the sidebands; "
            f"by IEC 60268-3 {_percent(pair.second)} second, {_percent(pair.third)} third order"
        )
    return (
        f"{star}CCIF, {low} and {high}, 1 to 1, {level}: by IEC 60268-3 {_percent(pair.second)} second, "
        f"{_percent(pair.third)} third order"
    )


def _dbu(level_v: float) -> str:
    return format_db(dbu_from_vpk(level_v), "dBu")


def _percent(ratio: float) -> str:
    return "" if math.isnan(ratio) else f"{100.0 * ratio:.3g} %" if ratio >= 1e-9 else "< 1e-7 %"


def _db(ratio: float) -> str:
    return f"{ratio_db(ratio):.1f}" if ratio > 1e-9 else "< -180"
