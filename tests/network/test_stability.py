"""Circuits that run away are refused, others are not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from preview.circuit.netlist import Netlist
from preview.errors import CircuitError
from preview.network.stability import check_stable, closed_loop_poles
from tests.nets import ALL, SALLEN_KEY, net


@pytest.mark.parametrize("name", ALL)
def test_sound_circuits_pass(name: str) -> None:
    check_stable(ALL[name])


def swapped(circuit: Netlist) -> Netlist:
    return replace(circuit, opamps=tuple(replace(o, plus=o.minus, minus=o.plus) for o in circuit.opamps))


@pytest.mark.parametrize("name", ALL)
def test_swapped_inputs_are_positive_feedback(name: str) -> None:
    with pytest.raises(CircuitError, match="positive feedback"):
        check_stable(swapped(ALL[name]))


def equal_sallen_key(gain: float) -> Netlist:
    return net(
        [
            ("R1", "in", "a", 10e3),
            ("R2", "a", "b", 10e3),
            ("C1", "a", "out", 1e-9),
            ("C2", "b", "gnd", 1e-9),
            ("R3", "m", "gnd", 10e3),
            ("R4", "m", "out", 10e3 * (gain - 1.0)),
        ],
        [("b", "m", "out")],
    )


def test_equal_component_sallen_key_is_stable_up_to_a_gain_of_three() -> None:
    # Q = 1 / (3 - K): Sallen and Key 1955, handbook practice
    check_stable(equal_sallen_key(2.98))
    with pytest.raises(CircuitError, match="unstable"):
        check_stable(equal_sallen_key(3.02))


def test_poles_of_the_butterworth_sallen_key_lie_at_45_degrees() -> None:
    poles = closed_loop_poles(SALLEN_KEY)
    np.testing.assert_allclose(np.abs(poles), 1.0 / np.sqrt(1e8 * 2e-18), rtol=1e-9)
    np.testing.assert_allclose(poles.real / np.abs(poles), -np.sqrt(0.5), rtol=1e-9)


def test_a_bare_differentiator_is_not_refused() -> None:
    check_stable(net([("C1", "in", "s", 10e-9), ("R1", "s", "out", 10e3)], [("gnd", "s", "out")]))


def test_the_frequency_named_is_the_one_it_rings_at() -> None:
    # equal-component Sallen-Key at K = 3.2: poles (0.1 +- j sqrt(0.99)) / RC, so it rings at 0.995 of 1 / (2 pi RC)
    with pytest.raises(CircuitError, match=r"oscillates at 1\.584e\+04 Hz"):
        check_stable(equal_sallen_key(3.2))
