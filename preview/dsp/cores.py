"""The two ways of running a circuit, behind one face: ideal op-amps, and op-amps as they are."""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.dsp import kernels, macro_kernels
from preview.dsp.bilinear import running_step
from preview.dsp.macromodel import MacroEquations, macro_equations, resting_state
from preview.errors import CircuitError
from preview.network.expansion import expanded, expanded_topology, has_real_opamps
from preview.network.statespace import Topology

__all__ = ["Core", "Matrices", "core_for"]

Real = NDArray[np.float64]
Matrices = tuple[Real, ...]
"""Matrices of one or more sets of values, first axis the sets; what they are is the core's own."""

MOST_OPAMPS = 8
"""Op-amps with limits of their own in one circuit."""


class Core(Protocol):
    """The running circuit between the oversampling filters."""

    stats: Real
    """(channels, op-amps, ``kernels.STATS``): running statistics, rates per step."""

    def values_of(self, netlist: Netlist) -> Real:
        """Values in this core's order, shape (branches,)."""

    def matrices(self, values: Real) -> Matrices:
        """Matrices for sets of values, shape (g, branches); allocates."""

    def run(self, matrices: Matrices, u: Real, mean: Real, steps: int, at: int, leg_steps: int) -> None:
        """Fill ``mean`` (channels, steps) from ``u`` (channels, steps + 3); see the kernels."""

    def outputs(self) -> Real:
        """Present voltage of each op-amp's output stage, shape (channels, op-amps) [V]."""

    def reset(self, matrices: Matrices) -> None:
        """Back to rest."""


def core_for(netlist: Netlist, channels: int, step_s: float) -> Core:
    """The core that computes this circuit.

    Raises
    ------
    CircuitError
        It cannot be computed.
    """
    core: Core = (IdealCore if not has_real_opamps(netlist) else MacroCore)(netlist, channels, step_s)
    return core


class IdealCore:
    """Op-amps without limits, or with none but the rails: the bilinear step of ``bilinear.running_step``."""

    def __init__(self, netlist: Netlist, channels: int, step_s: float) -> None:
        self._topology = Topology(netlist)
        self._step_s = step_s
        n, k, c = self._topology.states, len(netlist.opamps), channels
        rows = n + 3 * k + 1
        self._n, self._k = n, k
        self._low = np.array([o.low_v for o in netlist.opamps])
        self._high = np.array([o.high_v for o in netlist.opamps])
        self.stats = np.zeros((c, k, kernels.STATS))
        self._state = np.zeros((c, n + 3 * k + 3))
        self._asked, self._limited = np.zeros((c, k)), np.zeros((c, k), dtype=np.bool_)
        self._room = (
            np.zeros((rows, n + k + 3)),
            np.zeros((rows, n + 3 * k + 3)),
            np.zeros((5, 2 * k)),
            np.zeros((2 * k, 2 * k)),
            np.zeros(2 * k),
            np.zeros(rows),
            np.zeros((n + k, kernels.CHUNK + 1)),
            np.zeros((rows, kernels.CHUNK)),
        )

    def values_of(self, netlist: Netlist) -> Real:
        """Values in this core's order, shape (branches,)."""
        return self._topology.values_of(netlist)

    def matrices(self, values: Real) -> Matrices:
        """Free and bound matrices, see ``bilinear.RunningStep``."""
        step = running_step(self._topology.evaluate(values), self._step_s)
        return step.free, step.bound

    def run(self, matrices: Matrices, u: Real, mean: Real, steps: int, at: int, leg_steps: int) -> None:
        """See ``kernels.run_steps``."""
        free, bound = matrices
        kernels.run_steps(
            free,
            bound,
            u,
            mean,
            steps,
            self._state,
            self._asked,
            self._limited,
            self._low,
            self._high,
            self.stats,
            at,
            leg_steps,
            *self._room,
        )

    def outputs(self) -> Real:
        """Present output voltages, shape (channels, op-amps) [V]."""
        return self._state[:, self._n : self._n + self._k]

    def reset(self, matrices: Matrices) -> None:  # noqa: ARG002 - nothing in it rests elsewhere than at zero
        """No charge, no current."""
        self._state[...] = 0.0
        self._asked[...] = 0.0
        self._limited[...] = False


class MacroCore:
    """Op-amps with gain-bandwidth, slew rate, output resistance, offset and bias: ``macromodel``."""

    def __init__(self, netlist: Netlist, channels: int, step_s: float) -> None:
        k, c = len(netlist.opamps), channels
        if k > MOST_OPAMPS:
            raise CircuitError(
                f"{k} op-amps with limits of their own in one circuit: at most {MOST_OPAMPS} can be computed",
                "take ideal op-amps, or divide the circuit",
            )
        self._topology = expanded_topology(netlist)
        self._models = [o.model for o in netlist.opamps]
        self._step_s = step_s
        n = self._topology.states
        d, rows, masks = n + 2 * k + 5, n + 3 * k + 1, 1 << k
        self._n = n
        self._low = np.array([o.low_v for o in netlist.opamps])
        self._high = np.array([o.high_v for o in netlist.opamps])
        self._up = np.array([m.slew_up_v_per_s for m in self._models]) * step_s
        self._down = np.array([m.slew_down_v_per_s for m in self._models]) * step_s
        self.stats = np.zeros((c, k, kernels.STATS))
        self._state, self._regimes = np.zeros((c, n + k)), np.zeros((c, k), dtype=np.int64)
        self._known = np.zeros((masks + 1, 2), dtype=np.int64)
        self._met = (
            np.zeros((masks, rows, n + k + 3)),
            np.zeros((masks, rows)),
            np.zeros((masks, rows, k)),
            np.zeros((masks, macro_kernels.LEVELS + 1, d, d)),
        )
        self._room = (
            np.zeros((rows, n + k + 3)),
            np.zeros(rows),
            np.zeros(d),
            np.zeros(d),
            np.zeros((4, d, d)),
            np.zeros((n + k, kernels.CHUNK + 1)),
            np.zeros((rows, kernels.CHUNK)),
        )
        self._last: Matrices | None = None

    def values_of(self, netlist: Netlist) -> Real:
        """Values in this core's order, shape (branches,)."""
        return self._topology.values_of(expanded(netlist))

    def matrices(self, values: Real) -> Matrices:
        """Step while every op-amp follows, its constant, and the continuous equations behind it."""
        e = macro_equations(self._topology, values, self._models, self._step_s)
        sets, n, d = e.base.shape
        k = len(self._models)
        rows = n + 3 * k + 1
        free, constant, unused = (
            np.zeros((sets, rows, n + k + 3)),
            np.zeros((sets, rows)),
            np.zeros((rows, k)),
        )
        work = np.zeros((4, d, d))
        for g in range(sets):
            macro_kernels.step_matrix(
                e.base[g],
                e.turn[g],
                e.rate[g],
                e.out[g],
                e.current[g],
                (1 << k) - 1,
                work,
                free[g],
                constant[g],
                unused,
            )
        return free, constant, e.base, e.turn, e.rate, e.out, e.current

    def run(self, matrices: Matrices, u: Real, mean: Real, steps: int, at: int, leg_steps: int) -> None:
        """See ``macro_kernels.run_macro``."""
        if matrices is not self._last:
            self._known[...] = 0
            self._last = matrices
        macro_kernels.run_macro(
            *matrices,
            u,
            mean,
            steps,
            self._state,
            self._regimes,
            self._low,
            self._high,
            self._up,
            self._down,
            self.stats,
            at,
            leg_steps,
            *self._met,
            self._known,
            *self._room,
        )

    def outputs(self) -> Real:
        """Present voltages behind the output resistances, shape (channels, op-amps) [V]."""
        return self._state[:, self._n :]

    def reset(self, matrices: Matrices) -> None:
        """The DC operating point without a signal."""
        _, _, base, turn, rate, out, current = matrices
        self._state[...] = resting_state(
            MacroEquations(base, turn, rate, out, current), self._low, self._high
        )
        self._regimes[...] = macro_kernels.FOLLOWS
