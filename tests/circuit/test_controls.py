"""Potentiometers and switches: what a setting makes of their resistances."""

from __future__ import annotations

from itertools import pairwise

import pytest

from preview.circuit.controls import CLOSED_OHM, OPEN_OHM, Contact, Track, track_share


@pytest.mark.parametrize("taper", ["linear", "log", "reverse-log"])
def test_a_track_runs_from_end_to_end_and_always_forward(taper):
    shares = [track_share(n / 100, taper) for n in range(101)]
    assert shares[0] == pytest.approx(0.0, abs=1e-15)
    assert shares[-1] == pytest.approx(1.0, rel=1e-15)
    assert all(b > a for a, b in pairwise(shares))


def test_half_a_turn_of_each_taper():
    """Audio tracks have 10 % to 15 % at half a turn (common practice); (b^x - 1)/(b - 1) at 1/2 is 1/(sqrt(b) + 1)."""
    assert track_share(0.5, "linear") == 0.5
    assert track_share(0.5, "log") == pytest.approx(1 / 8, rel=1e-14)
    assert track_share(0.5, "reverse-log") == pytest.approx(7 / 8, rel=1e-14)


def test_equal_turns_of_a_log_track_are_nearly_equal_steps_of_level():
    """What the taper is for: from half a turn up, a divider gives 9.3 and 8.5 dB a quarter (closed form)."""
    assert track_share(0.75, "log") == pytest.approx((49**0.75 - 1) / 48, rel=1e-14)
    assert track_share(0.75, "log") / track_share(0.5, "log") == pytest.approx(2.92, abs=0.005)
    assert 1.0 / track_share(0.75, "log") == pytest.approx(2.74, abs=0.005)


def test_the_halves_are_the_whole_track_and_never_nothing():
    for position in (0.0, 1e-6, 0.3, 0.5, 1.0):
        a, b = Track("P1", 100e3, "linear", position).branch_values().values()
        assert a + b == pytest.approx(100e3, rel=1e-12)
        assert min(a, b) >= 10.0 * (1 - 1e-9)  # a ten-thousandth stays at the end
    assert Track("P1", 100e3, "linear", 0.3).branch_values() == pytest.approx({"P1.a": 30e3, "P1.b": 70e3})


def test_a_track_cannot_be_turned_beyond_its_ends():
    track = Track("P1", 1e4, "linear", 0.5)
    assert track.at(1.5).position == 1.0
    assert track.at(-1.0).setting == 0.0


def test_a_switch_is_closed_or_open():
    assert Contact("S1", closed=True).branch_values() == {"S1": CLOSED_OHM}
    assert Contact("S1", closed=True).at(0.0) == Contact("S1", closed=False)
    assert Contact("S1", closed=False).branch_values() == {"S1": OPEN_OHM}
    assert (Contact("S1", closed=True).setting, Contact("S1", closed=False).setting) == (1.0, 0.0)
