"""Speed of every meter, stereo at 48 kHz; run with ``pytest -m benchmark -s``. Times are the calling thread's."""

from __future__ import annotations

import time

import numpy as np
import pytest

from preview.meters.catalogue import METERS, MeterKind

pytestmark = [pytest.mark.benchmark, pytest.mark.timeout(900)]

RATE, SECONDS, BLOCK = 48_000, 20, 4800


@pytest.mark.parametrize("kind", METERS, ids=lambda kind: kind.name)
def test_a_meter_takes_less_than_two_percent_of_a_core(kind: MeterKind) -> None:
    volts = np.random.default_rng(1).standard_normal((RATE * SECONDS, 2)) * 2.0
    meter = kind.build(RATE, 2, full_scale_v=8.7)
    taken = []
    for _ in range(3):
        meter.reset()
        start = time.thread_time()
        for at in range(0, len(volts), BLOCK):
            meter.feed(volts[at : at + BLOCK])
        taken.append(time.thread_time() - start)
    times = SECONDS / min(taken)
    print(f"\n{kind.name}: {times:.0f} x real time, {min(taken) / len(volts) * 1e9:.0f} ns a frame")
    assert times > 50
