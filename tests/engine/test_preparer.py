"""What the preparer does with wishes: in which order, which are put together, what waits for what."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator, Mapping

import pytest

from preview.circuit.netlist import Netlist
from preview.engine.preparer import Preparer
from preview.values.quality import Quality
from tests.nets import HIGH_PASS, LOW_PASS

WAIT_S = 10.0


class Workshop:
    """Takes note of what it is asked for; builds wait until they are let go."""

    def __init__(self) -> None:
        self.done: list[object] = []
        self.go = threading.Event()
        self.go.set()
        self.began = threading.Event()
        self.changed = threading.Condition()
        self.fail: Exception | None = None

    def build(self, letter: str, netlist: Netlist, quality: Quality) -> Callable[[], None]:
        self.began.set()
        assert self.go.wait(WAIT_S)
        if self.fail is not None:
            raise self.fail
        return lambda: self.note("build", letter, netlist.values.get("R1"), quality)

    def plan(self, letter: str, values: Mapping[str, float]) -> Callable[[], None]:
        kept = dict(values)
        return lambda: self.note("glide", letter, kept)

    def drop(self, letter: str) -> Callable[[], None]:
        return lambda: self.note("drop", letter)

    def settled(self, letter: str) -> bool:
        return True

    def hand_over(self, start: Callable[[], None]) -> None:
        start()

    def note(self, *what: object) -> None:
        with self.changed:
            self.done.append(what if len(what) > 1 else what[0])
            self.changed.notify_all()

    def wait(self, count: int) -> list[object]:
        with self.changed:
            assert self.changed.wait_for(lambda: len(self.done) >= count, WAIT_S), self.done
            return list(self.done)


@pytest.fixture
def make() -> Iterator[Callable[..., tuple[Preparer, Workshop, list[str]]]]:
    made: list[Preparer] = []

    def build(**netlists: Netlist) -> tuple[Preparer, Workshop, list[str]]:
        shop, told = Workshop(), []
        preparer = Preparer(
            shop,
            netlists=netlists or {"A": LOW_PASS},
            letter="A",
            quality=Quality.DRAFT,
            complain=told.append,
        )
        made.append(preparer)
        return preparer, shop, told

    yield build
    for one in made:
        one.end()


R1 = LOW_PASS.values["R1"]


def test_the_candidate_that_is_heard_is_built_first(make):
    preparer, shop, _ = make(B=HIGH_PASS, A=LOW_PASS)
    preparer.start()
    assert [row[1] for row in shop.wait(2)] == ["A", "B"]


def test_of_several_values_the_last_counts(make):
    preparer, shop, _ = make()
    preparer.start()
    shop.wait(1)
    shop.go.clear()
    shop.began.clear()
    preparer.set_quality(Quality.FINE)
    assert shop.began.wait(WAIT_S)
    for value in (1e3, 2e3, 3e3):
        preparer.set_part("R1", value)
    preparer.set_part("C1", 2e-9)
    shop.go.set()
    assert shop.wait(3)[1:] == [("build", "A", R1, Quality.FINE), ("glide", "A", {"R1": 3e3, "C1": 2e-9})]
    assert preparer.netlists["A"].values["R1"] == 3e3


def test_a_candidate_that_is_chosen_while_it_is_built_is_heard_when_it_is_there(make):
    preparer, shop, _ = make()
    preparer.start()
    shop.wait(1)
    shop.go.clear()
    shop.began.clear()
    preparer.keep("B", HIGH_PASS)
    assert shop.began.wait(WAIT_S)
    assert preparer.choose(("B",), lambda: shop.note("hear B"))
    assert preparer.unbuilt == {"B"}
    assert len(shop.done) == 1
    shop.go.set()
    assert shop.wait(3)[1:] == [("build", "B", HIGH_PASS.values["R1"], Quality.DRAFT), "hear B"]
    assert preparer.unbuilt == frozenset()


def test_a_candidate_that_is_there_is_heard_without_waiting_for_other_work(make):
    preparer, shop, _ = make(A=LOW_PASS, B=HIGH_PASS)
    preparer.start()
    shop.wait(2)
    shop.go.clear()
    shop.began.clear()
    preparer.keep("C", LOW_PASS)
    assert shop.began.wait(WAIT_S)
    preparer.choose(("B",), lambda: shop.note("hear B"))
    assert shop.done[-1] == "hear B"
    shop.go.set()


def test_parts_are_those_of_the_candidate_chosen_last(make):
    preparer, shop, _ = make(A=LOW_PASS, B=HIGH_PASS)
    preparer.start()
    shop.wait(2)
    preparer.choose(("B",), lambda: shop.note("hear B"))
    preparer.set_part("R1", 5e3)
    assert shop.wait(4)[2:] == ["hear B", ("glide", "B", {"R1": 5e3})]
    assert preparer.netlists["A"] == LOW_PASS
    assert preparer.netlists["B"].values["R1"] == 5e3


def test_a_part_that_was_to_glide_when_another_was_chosen_is_built_in(make):
    preparer, shop, _ = make(A=LOW_PASS, B=HIGH_PASS)
    preparer.set_part("R1", 7e3)  # nothing runs yet
    preparer.choose(("B",), lambda: shop.note("hear B"))
    preparer.start()
    rows = shop.wait(3)
    assert rows[0][:2] == ("build", "B")
    assert ("build", "A", 7e3, Quality.DRAFT) in rows


def test_what_is_not_there_is_told(make):
    preparer, shop, told = make()
    preparer.start()
    shop.wait(1)
    preparer.set_part("R99", 1.0)
    assert not preparer.choose(("X",), lambda: None)
    assert told == ["the running circuit has no part R99", "there is no candidate X"]


def test_work_that_fails_is_told_and_the_next_is_done(make):
    preparer, shop, told = make()
    preparer.start()
    shop.wait(1)
    shop.fail = ValueError("no such thing")
    shop.began.clear()
    preparer.set_quality(Quality.FINE)
    assert shop.began.wait(WAIT_S)
    while not told:
        shop.go.wait(0.001)
    shop.fail = None
    preparer.set_part("R1", 4e3)
    assert shop.wait(2)[1] == ("glide", "A", {"R1": 4e3})
    assert told == ["the change could not be computed (ValueError: no such thing)"]


def test_the_candidate_chosen_last_is_not_dropped(make):
    preparer, shop, _ = make(A=LOW_PASS, B=HIGH_PASS)
    preparer.start()
    shop.wait(2)
    preparer.drop("A")
    preparer.drop("X")
    preparer.drop("B")
    assert shop.wait(3)[2] == ("drop", "B")
    assert list(preparer.netlists) == ["A"]
