"""How quick the desk is: from start to its keys, from key to screen, and what it costs while it plays."""

from __future__ import annotations

import os
import statistics
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.ui.test_terminal import LISTEN, Terminal

pytestmark = pytest.mark.benchmark

START_S, KEY_S, CORE_RATIO = 1.2, 0.050, 0.20
"""What was promised: start warm, key to screen (19 of 20), share of a core at 120x40 while playing."""
WATCHED_S = 10.0
STEPS = 40


@pytest.fixture
def desk(tmp_path) -> Iterator[Terminal]:
    terminal = Terminal(LISTEN, tmp_path, size=(120, 40))
    yield terminal
    terminal.end()


def _busy() -> str:
    return f"load of the machine {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores"


def _cpu_s(process_id: int) -> float:
    """Time on a core so far, user and system [s]."""
    fields = Path(f"/proc/{process_id}/stat").read_text("utf-8").rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def test_the_desk_takes_keys_within_1_2_s_of_its_start(tmp_path, monkeypatch) -> None:
    # warm is with the bytecode that any installation has
    monkeypatch.delenv("PYTHONDONTWRITEBYTECODE", raising=False)
    times_s, cpu_s = [], []
    for _ in range(4):
        started_s = time.monotonic()
        terminal = Terminal(LISTEN, tmp_path, size=(120, 40))
        try:
            terminal.until_shown("R1 10 k")
            terminal.type(b"\x1b[C")
            terminal.until_shown("R1 11 k")
            times_s.append(time.monotonic() - started_s)
            cpu_s.append(_cpu_s(terminal.process.pid))
        finally:
            terminal.end()
    said = f"{', '.join(f'{t:.2f}' for t in times_s)} s, {min(cpu_s):.2f} s of it computing; {_busy()}"
    print(f"\nstart to the first key on the screen: {said}")
    assert min(cpu_s) <= START_S
    if min(times_s) > START_S and os.getloadavg()[0] > 0.75 * (os.cpu_count() or 1):
        pytest.skip(f"the machine is too busy to judge: {said}")
    assert min(times_s) <= START_S


def test_a_key_is_on_the_screen_within_50_ms(desk) -> None:
    desk.until_shown("R1 10 k")
    desk.until_shown("silent clock")
    times_s = []
    for step in range(STEPS):
        keys, value = (b"\x1b[C", "11 k") if step % 2 == 0 else (b"\x1b[D", "10 k")
        desk.read(0.3)
        desk.shown = b""
        pressed_s = time.monotonic()
        desk.type(keys)
        while value.encode() not in desk.shown:
            assert time.monotonic() - pressed_s < 5.0
            desk.read(0.005)
        times_s.append(time.monotonic() - pressed_s)
    median_s, worst_s = statistics.median(times_s), max(times_s)
    print(f"\nkey to screen: median {median_s * 1e3:.0f} ms, worst {worst_s * 1e3:.0f} ms; {_busy()}")
    assert sorted(times_s)[int(0.95 * STEPS) - 1] <= KEY_S


@pytest.mark.skipif(sys.platform != "linux", reason="reads /proc")
@pytest.mark.parametrize("view", ["f2", "f3", "f4", "f5", "f6"])
def test_the_desk_needs_a_fifth_of_a_core_at_most_while_it_plays(desk, view) -> None:
    desk.until_shown("silent clock")
    desk.type({"f2": b"\x1bOQ", "f3": b"\x1bOR", "f4": b"\x1bOS", "f5": b"\x1b[15~", "f6": b"\x1b[17~"}[view])
    desk.read(1.0)
    before_s, began_s = _cpu_s(desk.process.pid), time.monotonic()
    while time.monotonic() - began_s < WATCHED_S:
        desk.read()
    share = (_cpu_s(desk.process.pid) - before_s) / (time.monotonic() - began_s)
    print(f"\n{view} at 120x40: {100.0 * share:.1f} % of a core; {_busy()}")
    assert share <= CORE_RATIO
