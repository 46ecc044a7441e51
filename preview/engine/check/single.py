"""One recording checked."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

from preview.audio.logs import is_log, open_signal
from preview.engine.check.margin import find_margin
from preview.engine.check.results import CheckPlan, FileCheck
from preview.engine.check.run import Stages, WholeRun
from preview.values.levels import FullScale, full_scale_in_comment

__all__ = ["check_file", "scale_of"]


def scale_of(plan: CheckPlan, path: Path, comment: str) -> FullScale:
    """Full scale of one recording: as the options state it, else as its comment does, else what is assumed."""
    stated = (plan.per_unit if is_log(path) else None) or plan.full_scale
    return (
        stated
        or full_scale_in_comment(comment)
        or (plan.log_scale if is_log(path) else plan.session.full_scale)
    )


def check_file(
    path: Path,
    plan: CheckPlan,
    stages: Stages,
    progress: Callable[[int, int], None] = lambda _done, _more: None,
) -> FileCheck:
    """Check one recording.

    Parameters
    ----------
    path : Path
        The file.
    plan : CheckPlan
        What it is put through.
    stages : Stages
        Running stages of the plan's circuit, kept from file to file.
    progress : callable
        Told the frames done since the last call, and the frames that have come to be done besides.

    Raises
    ------
    AudioFileError
        The recording cannot be read.
    CircuitError
        The computation ran away.
    """
    with open_signal(path, plan.log) as signal:
        stages.at_rest(signal)  # compiled, or loaded, before the time is taken
        began_s = time.perf_counter()
        full_scale_v = scale_of(plan, path, signal.info.comment).volts
        whole = WholeRun(
            signal,
            full_scale_v,
            stages,
            lambda frames: progress(frames, 0),
            settled=plan.settled or is_log(path),
        )
        opamps = whole.opamps()
        margin = None
        if plan.margin and whole.frames and whole.input.peak_v > 0.0:
            margin = find_margin(signal, full_scale_v, stages, whole, progress)
        return FileCheck(
            path=str(path),
            sample_rate_hz=float(signal.sample_rate_hz),
            frames=whole.frames,
            channels=signal.channels,
            full_scale_v=full_scale_v,
            quality=plan.session.quality.value,
            elapsed_s=time.perf_counter() - began_s,
            input=whole.input.read(),
            output=whole.output.read(),
            opamps=opamps,
            events=tuple(sorted(whole.events, key=lambda e: (e.start_s, e.designator, e.channel))),
            margin=margin,
            trace=whole.trace.read(),
            warnings=signal.warnings,
        )
