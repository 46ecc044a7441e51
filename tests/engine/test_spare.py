"""A second engine's process that waits beside the one that plays."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import pytest

from preview.engine.process import EngineConfig
from preview.engine.spare import Spare
from tests.engine.running import DEADLINE_S, session_of, wait_for

pytestmark = pytest.mark.slow


@pytest.fixture
def spare() -> Iterator[Spare]:
    made = Spare(0.0)
    yield made
    made.close()


def until(holds: Callable[[], object], what: str) -> None:
    deadline = time.monotonic() + DEADLINE_S
    while not holds():
        assert time.monotonic() < deadline, what
        time.sleep(0.005)  # polling a process, with a deadline


def test_the_one_that_waits_takes_over_where_a_killed_engine_was(spare: Spare, tone: Path, tmp_path) -> None:
    config = EngineConfig(session=session_of(tone), silent=True, play=True, log=tmp_path / "log")
    engine = spare.begin(config)
    try:
        wait_for(engine, lambda s: s.position_frame > 0, "sound")
        until(lambda: spare.waiting, "a spare")
        waiting = spare.waiting
        os.kill(engine.pid, signal.SIGKILL)
        until(lambda: not engine.alive, "its end")
        engine.close()
        engine = spare.begin(replace(config, start_frame=20_000))
        assert engine is waiting
        heard = wait_for(engine, lambda s: s.playing and s.position_frame > 0, "sound again")
        assert heard.position_frame >= 20_000
        until(lambda: spare.waiting not in (None, engine), "another spare")
    finally:
        engine.close()


def test_an_engine_begins_without_a_spare_and_after_one_that_has_died(
    spare: Spare, tone: Path, tmp_path
) -> None:
    config = EngineConfig(session=session_of(tone), silent=True, log=tmp_path / "log")
    first = spare.begin(config)
    wait_for(first, lambda s: True, "a snapshot")
    until(lambda: spare.waiting, "a spare")
    os.kill(spare.waiting.pid, signal.SIGKILL)
    until(lambda: spare.waiting is None, "its end")
    second = spare.begin(config)
    wait_for(second, lambda s: True, "a snapshot of the second")
    first.close()
    second.close()


def test_none_is_left_when_the_desk_is_closed(spare: Spare, tone: Path, tmp_path) -> None:
    engine = spare.begin(EngineConfig(session=session_of(tone), silent=True, log=tmp_path / "log"))
    until(lambda: spare.waiting, "a spare")
    waiting = spare.waiting
    spare.close()
    engine.close()
    assert not waiting.alive
