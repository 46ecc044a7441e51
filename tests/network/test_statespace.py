"""State space against the nodal equations, and its physical states."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from preview.errors import CircuitError
from preview.network.statespace import Topology
from preview.network.transfer import response
from tests.nets import ALL, LADDER, LOW_PASS, SALLEN_KEY, net


@pytest.mark.parametrize("name", ALL)
def test_closed_loop_has_the_exact_response(name: str) -> None:
    circuit = ALL[name]
    topology = Topology(circuit)
    A, B, C, D = (m[0] for m in topology.evaluate(topology.values_of(circuit)[None]).closed())
    f = np.geomspace(0.1, 1e6, 41)
    h = [(C @ np.linalg.solve(2j * np.pi * x * np.eye(len(A)) - A, B) + D)[0, 0] for x in f]
    np.testing.assert_allclose(h, response(circuit, f), rtol=1e-9)


@pytest.mark.parametrize(
    ("name", "states"),
    [
        ("low-pass", 1),
        ("high-pass", 1),
        ("sallen-key", 2),
        ("two-sections", 2),
        ("loaded-low-pass", 2),
        ("ladder", 4),
    ],
)
def test_only_independent_energies_are_states(name: str, states: int) -> None:
    # in the ladder C3 lies across the op-amp's output and C4, C5 make one loop with the source: one state of three
    assert Topology(ALL[name]).states == states


def test_random_values_agree_with_the_nodal_equations_in_one_call() -> None:
    rng = np.random.default_rng(5)
    for circuit in (SALLEN_KEY, LADDER):
        topology = Topology(circuit)
        values = topology.values_of(circuit) * np.exp(rng.normal(0.0, 1.0, (20, len(circuit.branches))))
        A, B, C, D = topology.evaluate(values).closed()
        for g in range(20):
            named = {b.designator: float(v) for b, v in zip(circuit.branches, values[g], strict=True)}
            s = 2j * np.pi * 1234.0
            h = (C[g] @ np.linalg.solve(s * np.eye(A.shape[1]) - A[g], B[g]) + D[g])[0, 0]
            np.testing.assert_allclose(h, response(circuit.with_values(named), [1234.0])[0], rtol=1e-8)


def test_physical_state_of_a_feedback_capacitor_is_its_voltage() -> None:
    # at DC the low-pass's capacitor holds v(sum) - v(out) = 0 - (-10 V) for 1 V in
    topology = Topology(LOW_PASS)
    space = topology.evaluate(topology.values_of(LOW_PASS)[None])
    A, B, _, _ = (m[0] for m in space.closed())
    x = np.linalg.solve(-A, B)[:, 0]
    volts = x - space.kappa[0] @ np.array([1.0, -10.0])
    np.testing.assert_allclose(np.abs(volts), [10.0], rtol=1e-12)


def test_a_passive_network_only_loses_energy() -> None:
    # with the source at rest and the follower's output held at zero, the ladder's stored energy never grows
    topology = Topology(LADDER)
    A = topology.evaluate(topology.values_of(LADDER)[None]).A[0]
    assert np.linalg.eigvals(A).real.max() <= 1e-6
    assert np.abs(expm(A * 1.0)).max() < 10.0


def test_a_node_that_nothing_holds_is_refused_by_name() -> None:
    circuit = net(
        [("R1", "in", "out", 1e3), ("R2", "out", "gnd", 1e3), ("R3", "island", "rock", 1e3)],
        [],
    )
    with pytest.raises(CircuitError, match="node island floats"):
        Topology(circuit)


def test_two_outputs_on_one_node_are_refused() -> None:
    circuit = net(
        [("R1", "in", "s", 1e3), ("R2", "s", "out", 1e3)],
        [("gnd", "s", "out"), ("gnd", "s", "out")],
    )
    with pytest.raises(CircuitError, match="two outputs"):
        Topology(circuit)
