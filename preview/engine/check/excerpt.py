"""The worst moments of a checked recording again: what went in and what came out, in volts, as files if wanted."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from preview import __version__
from preview.audio.logs import is_log, open_signal
from preview.audio.sink import FileSink, holds_volts
from preview.dsp.block import Volts
from preview.dsp.settle import memory_s
from preview.engine.check.results import CheckPlan, FileCheck
from preview.engine.check.run import Signal, Stages, pieces, settle_at
from preview.values.levels import FullScale, format_volts, full_scale_comment
from preview.values.notation import format_value

__all__ = ["Moment", "cut_out", "excerpt", "worst_moments"]

BEFORE_S, AFTER_S = 0.25, 0.75
"""What is cut out around a moment [s]; of logs as many times more as they are slower than 8 kHz."""
MOST_RUN_IN_S = 5.0
APART = 0.5
"""Moments nearer to each other than this share of a cut-out are one."""


@dataclass(frozen=True, slots=True)
class Moment:
    """One moment worth another look."""

    at_s: float
    """When [s]."""
    opamp: str
    """Which op-amp was at its worst."""
    what: str
    """What it did, in words."""
    length_s: float = 0.0
    """How long [s]; 0 for a peak."""
    channel: int = 0
    """Channel, counted from 1; 0 where it is not known."""


def worst_moments(found: FileCheck, most: int = 3) -> list[Moment]:
    """The longest visits to a rail, or where there are none the peak of each op-amp; the worst first."""
    visits = sorted((e for e in found.events if e.kind == "rail"), key=lambda e: -e.length_s)
    listed = [
        Moment(
            e.start_s,
            e.designator,
            f"at the {e.side} rail for {format_value(e.length_s, 'time')}",
            e.length_s,
            e.channel,
        )
        for e in visits
    ]
    clipped = {m.opamp for m in listed}
    rest = [o for o in found.opamps if o.name not in clipped and o.worst_s == o.worst_s]
    for opamp in sorted(rest, key=lambda o: o.headroom_db):
        listed.append(Moment(opamp.worst_s, opamp.name, f"peak {format_volts(opamp.peak_v)}"))
    kept: list[Moment] = []
    for moment in listed:
        apart_s = APART * (BEFORE_S + AFTER_S) * _slowness(found.sample_rate_hz)
        if all(abs(moment.at_s - other.at_s) > apart_s for other in kept):
            kept.append(moment)
    return kept[:most]


def _slowness(rate_hz: float) -> float:
    return max(1.0, 8_000.0 / rate_hz)


def excerpt(
    signal: Signal, full_scale_v: float, stages: Stages, first: int, frames: int, *, settled: bool
) -> tuple[Volts, Volts]:
    """Some frames of a recording and what the circuit makes of them, both in volts, the circuit run in before."""
    stage = stages.at_rest(signal)
    rate_hz = signal.sample_rate_hz
    start = max(0, first - round(min(memory_s(stages.netlist, 12.0), MOST_RUN_IN_S) * rate_hz))
    if settled:
        settle_at(stage, signal, full_scale_v, start)
    skip = first - start
    count = skip + frames + stage.latency_frames
    volts_in, volts_out = np.zeros((count, signal.channels)), np.zeros((count, signal.channels))
    at = 0
    for volts, own in pieces(signal, full_scale_v, start, count, hold=stage.latency_frames):
        end = min(at + len(volts), count)
        volts_in[at:end] = volts[: end - at]
        stage.process(volts_in[at:end], volts_out[at:end])
        at += own
    last = min(skip + frames, at)
    latency = stage.latency_frames
    return volts_in[skip:last], volts_out[skip + latency : last + latency]


def cut_out(found: FileCheck, plan: CheckPlan, stages: Stages, folder: Path) -> list[Path]:
    """Write the worst moments of a recording as short files, input and output; the files written.

    Raises
    ------
    AudioFileError
        The recording cannot be read again, or a file not written.
    """
    written = []
    path = Path(found.path)
    ending = ".csv" if is_log(path) else ".wav"
    with open_signal(path, plan.log) as signal:
        rate_hz = signal.sample_rate_hz
        slow = _slowness(rate_hz)
        for moment in worst_moments(found):
            first = max(0, round((moment.at_s - BEFORE_S * slow) * rate_hz))
            frames = round((BEFORE_S + AFTER_S) * slow * rate_hz)
            both = excerpt(
                signal, found.full_scale_v, stages, first, frames, settled=plan.settled or is_log(path)
            )
            for name, volts in zip(("in", "out"), both, strict=True):
                out = _free(folder, f"{path.stem}-{first / rate_hz:.3f}s-{moment.opamp}-{name}", ending)
                scale_v = 1.0 if holds_volts(out) else found.full_scale_v
                scale = full_scale_comment(FullScale(scale_v, f"{scale_v:.9g} V"))
                comment = (
                    f"{scale}; preview {__version__}; {moment.opamp} {moment.what} at {moment.at_s:.6f} s"
                )
                with FileSink(
                    out, sample_rate_hz=rate_hz, channels=signal.channels, depth="float", comment=comment
                ) as sink:
                    sink.write(volts / scale_v)
                written.append(out)
    return written


def _free(folder: Path, stem: str, ending: str) -> Path:
    """A name in the folder that nothing has yet."""
    path, number = folder / f"{stem}{ending}", 2
    while path.exists():
        path, number = folder / f"{stem}-{number}{ending}", number + 1
    return path
