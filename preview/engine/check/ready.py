"""What a check needs compiled, compiled before it begins."""

from __future__ import annotations

import multiprocessing
import os
import signal

from preview.compiled import in_cache
from preview.engine.check.levels import Levels
from preview.engine.check.results import CheckPlan
from preview.engine.check.run import Stages
from preview.network.expansion import runs_as_they_are

__all__ = ["compile_first", "is_compiled"]


def is_compiled(plan: CheckPlan) -> bool:
    """Whether everything only has to be loaded, or could not be kept if it were compiled."""
    runs = "run_macro" if runs_as_they_are(plan.session.netlist()) else "run_steps"
    kept = os.access(os.environ["NUMBA_CACHE_DIR"], os.W_OK)
    needed = (runs, "up_block", "down_block", "note_plain", "note_true_peaks", "note_loudness")
    return not kept or all(in_cache(name) for name in needed)


def compile_first(plan: CheckPlan) -> None:
    """Compile it in a process that ends: the compiler takes more memory than a check, and each worker would."""
    process = multiprocessing.get_context("spawn").Process(
        target=_compile, args=(plan,), name="preview-compile", daemon=True
    )
    process.start()
    try:
        process.join()
    finally:
        process.kill()


def _compile(plan: CheckPlan) -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the terminal sends it to all; the parent ends this process
    Stages(plan.session).of(48_000.0, 2)
    Levels(48_000.0, 2, 1.0)
