"""Which candidates are measured, and at which gain each is heard."""

from __future__ import annotations

import math

import pytest

from preview.engine.matching import SETTLE_S, Matcher
from tests.nets import HIGH_PASS, LOW_PASS

CHANGED = LOW_PASS.with_values({"R1": 12_345.0})


def test_all_are_heard_as_loud_as_the_quietest():
    matcher = Matcher()
    matcher.on = True
    assert matcher.due({"A": LOW_PASS, "B": HIGH_PASS}, now_s=0.0) == ["A", "B"]
    matcher.note("A", LOW_PASS, -20.0)
    matcher.note("B", HIGH_PASS, -26.0)
    assert matcher.gains_db() == {"A": -6.0, "B": 0.0}
    assert matcher.gains()["A"] == pytest.approx(10 ** (-6 / 20))
    assert matcher.gains()["B"] == 1.0


def test_nothing_is_measured_or_changed_while_it_is_off_or_there_is_one():
    matcher = Matcher()
    assert matcher.due({"A": LOW_PASS, "B": HIGH_PASS}) == []
    assert matcher.gains() == {}
    matcher.on = True
    assert matcher.due({"A": LOW_PASS}) == []


def test_a_changed_candidate_is_measured_once_it_has_been_left_alone():
    matcher = Matcher()
    matcher.on = True
    before = {"A": LOW_PASS, "B": HIGH_PASS}
    matcher.due(before, now_s=0.0)
    matcher.note("A", LOW_PASS, -20.0)
    matcher.note("B", HIGH_PASS, -20.0)
    assert matcher.due(before, now_s=5.0) == []
    after = before | {"A": CHANGED}
    assert matcher.due(after, now_s=6.0) == []
    assert matcher.due(after, now_s=6.0 + 0.5 * SETTLE_S) == []
    assert matcher.due(after, now_s=6.0 + SETTLE_S) == ["A"]
    assert matcher.due(after, now_s=7.0 + SETTLE_S) == [], "asked for already"
    matcher.note("A", LOW_PASS, -99.0)
    assert matcher.gains_db() == {"A": 0.0, "B": 0.0}, "of the circuit before"
    matcher.note("A", CHANGED, -23.0)
    assert matcher.gains_db() == {"A": 0.0, "B": -3.0}


def test_a_silent_candidate_makes_no_other_silent():
    matcher = Matcher()
    matcher.on = True
    matcher.due({"A": LOW_PASS, "B": HIGH_PASS}, now_s=0.0)
    matcher.note("A", LOW_PASS, -math.inf)
    matcher.note("B", HIGH_PASS, -20.0)
    assert matcher.gains() == {"B": 1.0}
    assert matcher.loudness("A") == -math.inf


def test_a_dropped_candidate_counts_no_more_and_another_recording_makes_all_unknown():
    matcher = Matcher()
    matcher.on = True
    matcher.due({"A": LOW_PASS, "B": HIGH_PASS}, now_s=0.0)
    matcher.note("A", LOW_PASS, -20.0)
    matcher.note("B", HIGH_PASS, -30.0)
    matcher.due({"A": LOW_PASS}, now_s=1.0)
    assert matcher.gains_db() == {"A": 0.0}
    matcher.forget()
    assert matcher.loudness("A") is None
    assert matcher.due({"A": LOW_PASS, "B": HIGH_PASS}, now_s=2.0) == ["A", "B"]
