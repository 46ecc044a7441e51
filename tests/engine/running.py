"""Engines as processes of their own on the silent clock, for tests."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

from preview.circuit.library import find_stage
from preview.engine.messages import Report, Snapshot
from preview.engine.process import EngineProcess
from preview.session import Session
from preview.values.levels import parse_full_scale

RATE_HZ = 48000
DEADLINE_S = 120.0  # the first engine on a machine compiles its kernels


def session_of(audio: Path | None, **changes: object) -> Session:
    stage = find_stage("inverting-low-pass")
    values: dict[str, object] = {
        "audio": audio,
        "stage": stage,
        "supply": stage.supply,
        "full_scale": parse_full_scale("10 V"),
    } | changes
    return Session(**values)  # type: ignore[arg-type]  # a test's shorthand


def wait_for(engine: EngineProcess, wanted: Callable[[Snapshot], bool], what: str) -> Snapshot:
    """Poll until a snapshot is as wanted."""
    deadline = time.monotonic() + DEADLINE_S
    last = None
    while time.monotonic() < deadline:
        snapshot = engine.latest()
        if snapshot is not None:
            last = snapshot
            if wanted(snapshot):
                return snapshot
        assert engine.alive, "the engine has ended"
        time.sleep(0.005)  # polling a process, with a deadline
    raise AssertionError(f"never {what}; last {last}; notices {engine.notices()}")


def wait_for_report(engine: EngineProcess, wanted: Callable[[Report], bool], what: str) -> Report:
    """Poll until a report is as wanted."""
    deadline = time.monotonic() + DEADLINE_S
    seen: list[Report] = []
    while time.monotonic() < deadline:
        for report in engine.reports():
            seen.append(report)
            if wanted(report):
                return report
        assert engine.alive, "the engine has ended"
        time.sleep(0.005)  # polling a process, with a deadline
    raise AssertionError(f"never {what}; {seen[-3:]}; notices {engine.notices()}")
