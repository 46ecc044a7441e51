"""A computation that does not keep up is told of once, with what takes less."""

from __future__ import annotations

from dataclasses import replace

import pytest

from preview.engine.messages import Snapshot
from preview.engine.overload import TURNS, Overload
from preview.values.quality import Quality


@pytest.fixture
def snapshot(make_rig) -> Snapshot:
    rig = make_rig()
    rig.player.play()
    rig.hear(512)
    return rig.player.report()


@pytest.mark.parametrize(
    ("quality", "cure"),
    [
        (Quality.FINE, "a lower quality than fine"),
        (Quality.STANDARD, "a lower quality than standard"),
        (Quality.DRAFT, "another op-amp type or stage"),
    ],
)
def test_what_takes_too_long_is_said_once_with_a_cure(snapshot, quality, cure):
    watch = Overload()
    busy = replace(snapshot, load_ratio=1.55, quality=quality)
    said = [line for line in (watch.look(busy) for _ in range(200)) if line]
    assert said == [f"the sound drops out: computing it takes 155 % of the time; {cure} takes less"]


def test_a_short_burst_says_nothing_and_what_comes_back_is_said_again(snapshot):
    watch = Overload()
    busy, calm = replace(snapshot, load_ratio=1.2), replace(snapshot, load_ratio=0.3)
    assert [watch.look(one) for one in [busy] * (TURNS - 1) + [calm] + [busy] * (TURNS - 1)] == [""] * (
        2 * TURNS - 1
    )
    assert watch.look(busy)
    assert not watch.look(busy)
    assert not watch.look(calm)
    assert [bool(watch.look(busy)) for _ in range(TURNS)] == [False] * (TURNS - 1) + [True]
