"""A device that another one stands in for is taken back when it can be opened again."""

from __future__ import annotations

import itertools

from preview.engine.comeback import FIRST_S, LONGEST_S, Comeback


def test_a_device_is_looked_for_now_and_then_and_taken_back_once_it_is_there() -> None:
    looks: list[str] = []
    comeback = Comeback(looks.append)
    assert not comeback.due("desk speaker", 0.0)
    assert not looks, "it has just gone"
    assert not comeback.due("desk speaker", FIRST_S)
    assert looks == ["desk speaker"]
    comeback.hear("desk speaker", False)
    assert not comeback.due("desk speaker", FIRST_S + 0.1)
    assert not comeback.due("desk speaker", 2 * FIRST_S)
    assert len(looks) == 2
    comeback.hear("desk speaker", True)
    assert comeback.due("desk speaker", 2 * FIRST_S + 0.1)
    assert not comeback.due("desk speaker", 2 * FIRST_S + 0.2), "it is being opened"


def test_nothing_is_looked_for_where_nothing_stands_in() -> None:
    looks: list[str] = []
    comeback = Comeback(looks.append)
    assert not any(comeback.due(None, float(second)) for second in range(100))
    assert not looks


def test_an_answer_about_another_device_does_not_count() -> None:
    comeback = Comeback(lambda name: None)
    comeback.due("desk speaker", 0.0)
    comeback.due("desk speaker", FIRST_S)
    assert not comeback.due("headphones", FIRST_S + 0.1)
    comeback.hear("desk speaker", True)
    assert not comeback.due("headphones", FIRST_S + 0.2)


def test_a_device_that_refuses_again_and_again_interrupts_ever_less_often() -> None:
    changes: list[float] = []
    comeback = Comeback(lambda name: comeback.hear(name, True))
    for tenth in range(6000):
        now_s = tenth / 10.0
        if comeback.due("desk speaker", now_s):
            changes.append(now_s)
            comeback.due(None, now_s)  # while it is tried
    gaps = [round(later - earlier) for earlier, later in itertools.pairwise(changes)]
    assert gaps == sorted(gaps)
    assert gaps[-1] >= LONGEST_S
    comeback.forget()
    comeback.due(None, 601.0)
    assert not comeback.due("desk speaker", 601.0)
    comeback.due("desk speaker", 601.0 + FIRST_S)
    assert comeback.due("desk speaker", 601.1 + FIRST_S), "a person's choice begins anew"


def test_a_device_that_has_played_well_is_looked_for_soon_when_it_goes_again() -> None:
    comeback = Comeback(lambda name: comeback.hear(name, True))
    comeback.due("desk speaker", 0.0)
    comeback.due("desk speaker", FIRST_S)
    assert comeback.due("desk speaker", FIRST_S + 0.1)
    comeback.due(None, 5.0)
    comeback.due("desk speaker", 100.0)
    comeback.due("desk speaker", 100.0 + FIRST_S)
    assert comeback.due("desk speaker", 100.1 + FIRST_S)
