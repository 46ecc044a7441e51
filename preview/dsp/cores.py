"""The two ways of running a circuit, behind one face: ideal op-amps, and op-amps as they are."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import Netlist
from preview.dsp import kernels, macro_kernels, regime_kernels, visit_kernels, walk_kernels
from preview.dsp.bilinear import running_step
from preview.dsp.macromodel import Limits, MacroEquations, MacroModel
from preview.dsp.rest import resting_state
from preview.errors import CircuitError
from preview.network.expansion import runs_as_they_are
from preview.network.statespace import Topology
from preview.values.noise import NoiseSetting

if TYPE_CHECKING:
    from preview.dsp.noise import NoiseSource

__all__ = ["Core", "Matrices", "core_for"]

Real = NDArray[np.float64]
Matrices = tuple[Real, ...]
"""Matrices of one or more sets of values, first axis the sets; what they are is the core's own."""

MOST_OPAMPS = 8
"""Op-amps with limits of their own in one circuit."""
BEYOND_BELIEF = 1e7
"""A voltage or current of this size is a fault of the computation [V, A]."""
REGIMES = 48
"""Regimes whose matrices are kept."""


class VisitLog:
    """When op-amps came to their limits and left them, as the running kernels note it, once there is room for it."""

    def __init__(self) -> None:
        self.rows: Real = np.zeros((0, visit_kernels.LOG))
        self.written: NDArray[np.int64] = np.zeros(2, dtype=np.int64)

    def begin(self, rows: int) -> None:
        """Note visits from now on; ``rows`` is a row for each step, channel and op-amp between two ``take``."""
        self.rows = np.zeros((rows, visit_kernels.LOG))
        self.written[...] = 0

    def take(self) -> list[list[float]]:
        """What was noted since the last time; see ``visit_kernels`` for the columns."""
        count = int(self.written[0])
        self.written[...] = 0
        return self.rows[:count].tolist() if count else []


class Core(Protocol):
    """The running circuit between the oversampling filters."""

    log: VisitLog
    """Visits to limits."""

    def statistics(self) -> Real:
        """Running statistics since ``clear``, shape (channels, op-amps, ``visit_kernels.STATS``), rates per step."""

    def values_of(self, netlist: Netlist) -> Real:
        """Values in this core's order, shape (branches,)."""

    def matrices(self, values: Real) -> Matrices:
        """Matrices for sets of values, shape (g, branches); allocates."""

    def run(self, matrices: Matrices, u: Real, mean: Real, steps: int, at: int, leg_steps: int) -> None:
        """Fill ``mean`` (channels, steps) from ``u`` (channels, steps + 3); see the kernels."""

    def headroom_db(self, opamp: int) -> float:
        """How much more signal an op-amp takes before a voltage limit, from what it did since ``clear`` [dB]."""

    def rest_v(self, opamp: int) -> float:
        """Output of an op-amp at rest [V]."""

    def clear(self) -> None:
        """Start the statistics anew."""

    def trouble(self) -> str | None:
        """The node or part whose state is no number or beyond belief; None while all is well."""

    def unsolved(self) -> float:
        """Steps without a solution since ``clear``."""

    def first_name(self) -> str:
        """The first op-amp, or diode where there is none, to name when no solution is found."""

    def limited(self) -> NDArray[np.bool_]:
        """Whether each op-amp is at a voltage limit, at its largest current, outside its input range now, (c, k, 3)."""

    def moving(self) -> tuple[NDArray[Any], ...]:
        """Every array that changes as it runs and on which the next step depends, the statistics among them."""

    def reset(self, matrices: Matrices) -> None:
        """Back to rest."""


def core_for(
    netlist: Netlist, channels: int, step_s: float, *, noise: NoiseSetting | None = None, factor: int = 1
) -> Core:
    """The core that computes this circuit; ``factor`` is the steps in a frame.

    Raises
    ------
    CircuitError
        It cannot be computed.
    """
    if noise is None and not runs_as_they_are(netlist):
        return IdealCore(netlist, channels, step_s)
    return MacroCore(netlist, channels, step_s, noise=noise, factor=factor)


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
        self.stats = np.zeros((c, k, visit_kernels.STATS))
        self.log = VisitLog()
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
            self.log.rows,
            self.log.written,
        )

    def statistics(self) -> Real:
        """See ``Core``."""
        return self.stats

    def headroom_db(self, opamp: int) -> float:
        """See ``Core``."""
        s = self.stats[:, opamp]
        return _headroom_db(
            [
                (float(s[:, visit_kernels.HIGH].max()), float(self._high[opamp])),
                (-float(s[:, visit_kernels.LOW].min()), -float(self._low[opamp])),
            ]
        )

    def rest_v(self, opamp: int) -> float:  # noqa: ARG002 - it rests at zero
        """See ``Core``."""
        return 0.0

    def clear(self) -> None:
        """See ``Core``."""
        self.stats[...] = 0.0
        y = self._state[:, self._n : self._n + self._k]
        self.stats[:, :, visit_kernels.HIGH] = self.stats[:, :, visit_kernels.LOW] = y

    def unsolved(self) -> float:
        """See ``Core``."""
        return float(self.stats[:, :, visit_kernels.UNSOLVED].sum())

    def first_name(self) -> str:
        """See ``Core``."""
        return self._topology.netlist.opamps[0].designator

    def trouble(self) -> str | None:
        """See ``Core``."""
        worst = _beyond_belief(self._state[:, : self._n + self._k])
        return None if worst is None else self._topology.state_name(worst)

    def limited(self) -> NDArray[np.bool_]:
        """See ``Core``."""
        never = np.zeros_like(self._limited)
        return np.stack([self._limited, never, never], axis=2)

    def moving(self) -> tuple[NDArray[Any], ...]:
        """See ``Core``."""
        return self._state, self._asked, self._limited, self.stats

    def reset(self, matrices: Matrices) -> None:  # noqa: ARG002 - nothing in it rests elsewhere than at zero
        """No charge, no current."""
        self._state[...] = 0.0
        self._asked[...] = 0.0
        self._limited[...] = False


class MacroCore:
    """Op-amps as they are, ideal ones beside them, diodes and fixed voltages: see ``macromodel``."""

    def __init__(
        self,
        netlist: Netlist,
        channels: int,
        step_s: float,
        *,
        noise: NoiseSetting | None = None,
        factor: int = 1,
    ) -> None:
        k, c = len(netlist.opamps), channels
        if k > MOST_OPAMPS:
            raise CircuitError(
                f"{k} op-amps with limits of their own in one circuit: at most {MOST_OPAMPS} can be computed",
                "take ideal op-amps, or divide the circuit",
            )
        self._model = model = MacroModel(netlist, step_s)
        self._step_s = step_s
        n, size, columns, ports = model.n, model.size, model.columns, len(model.ports)
        walls = len(model.owner)
        inputs = k if model.watches_inputs else 0
        count = k + walls + inputs
        rows = size + count + 1 + 2 * ports
        self._n, self._k, self._walls = n, k, walls
        self._fixed = model.fixed_limits()
        self.stats = np.zeros((c, max(k, 1), visit_kernels.STATS))
        self.log = VisitLog()
        self._state = np.zeros((c, size))
        self._kinds, self._ranges = np.zeros((c, k), dtype=np.int64), np.zeros((c, k), dtype=np.int64)
        self._extremes = np.zeros((c, k + walls, 3))
        self._junctions = np.zeros((c, 4, ports))
        self._heights = np.zeros(k + walls)
        self._book = np.zeros((REGIMES, walk_kernels.BOOK), dtype=np.int64)
        self._last_place = np.zeros(2, dtype=np.int64)
        self._store = (
            np.zeros((REGIMES + 1, regime_kernels.LEVELS + 1, columns, rows)),
            np.zeros((REGIMES + 1, rows, columns)),
        )
        d = columns + 1
        self._room = (
            np.zeros((9, d, d)),
            np.zeros((count, columns)),
            np.zeros((2 + 2 * k, columns)),
            np.zeros((k, k)),
            np.zeros(k),
            np.zeros(rows),
            np.zeros((2 * ports + 3, 2 * ports)),
            np.zeros(2 * ports),
            np.zeros(3),
        )
        self._tracks = (
            np.zeros((size, kernels.CHUNK + 1)),
            np.zeros((rows, kernels.CHUNK)),
            np.zeros((2 * k + walls + 1, 2)),
            np.zeros(2 * k + walls + 1, dtype=np.int64),
            np.zeros((size, size)),
        )
        self._setting, self._factor = noise, factor
        self._noise: NoiseSource | None = None
        self._noise_memory: Real = np.zeros(0)
        self._noise_at: NDArray[np.int64] = np.zeros(1, dtype=np.int64)  # steps since the beginning
        self._added = np.zeros((c, 0, 0))
        self._matrices: Matrices | None = None

    def values_of(self, netlist: Netlist) -> Real:
        """Values in this core's order, shape (branches,)."""
        return self._model.values_of(netlist)

    def matrices(self, values: Real) -> Matrices:
        """Whole step while every op-amp follows, the continuous equations behind it, and the limits."""
        if self._setting is not None:  # the noise of the values that are gone to
            from preview.dsp.noise import NoiseSource  # loads scipy.linalg, which nothing else here needs

            self._noise = NoiseSource(self._model, values[-1], self._setting, self._factor)
            if not self._noise_memory.size:
                self._noise_memory = self._noise.take_over(None, len(self._state))
        return self._prepared(self._model.equations(values), values)

    def power_on(self, values: Real, shares: Real, steps: int) -> Matrices:
        """Matrices while the supply comes up through ``shares``, equally spaced over ``steps`` steps."""
        along = np.repeat(values[None], len(shares), axis=0)
        per_step = float(shares[-1] - shares[0]) / steps
        return self._prepared(
            self._model.equations(along, supply=shares, supply_per_step=per_step), along, shares
        )

    def switch_off(self) -> None:
        """No charge, no current, no supply: where a circuit is before it is switched on."""
        self._state[...] = 0.0
        self._junctions[...] = 0.0
        self._kinds[...] = regime_kernels.FOLLOWS
        self._ranges[...] = regime_kernels.IN_RANGE

    def unsolved(self) -> float:
        """See ``Core``."""
        return float(self.stats[:, :, visit_kernels.UNSOLVED].sum())

    def first_name(self) -> str:
        """See ``Core``."""
        ports, opamps = self._model.netlist.ports, self._model.netlist.opamps
        return str((ports[0] if ports else opamps[0]).designator)

    def trouble(self) -> str | None:
        """See ``Core``."""
        worst = _beyond_belief(self._state)
        if worst is not None:
            return self._model.where(worst)
        within = self._extremes[:, : 3 * self._k]
        if np.vdot(within, within) < BEYOND_BELIEF**2:
            return None
        worst = _beyond_belief(np.abs(within).max(axis=2, initial=0.0))
        return None if worst is None else self._model.where(self._n + worst % self._k)  # within a block

    def _prepared(self, e: MacroEquations, values: Real, supply: Real | None = None) -> Matrices:
        model = self._model
        limits = model.limits(values, e, supply=supply)
        sets = len(values)
        rows = self._store[1].shape[1]
        whole = np.zeros((sets, model.columns, rows))
        room = tuple(np.zeros_like(r) for r in self._room[:5])
        follow = np.zeros(self._k, dtype=np.int64)
        for g in range(sets):
            regime_kernels.fill_parts(
                *(a[g] for a in e.all()),
                limits.walls[g],
                follow,
                follow,
                self._fixed[0],
                self._fixed[1],
                model.collocates,
                True,
                whole[g : g + 1],
                *room,
            )
        return whole, *e.all(), limits.laws, limits.rails, limits.walls, limits.gains

    def run(self, matrices: Matrices, u: Real, mean: Real, steps: int, at: int, leg_steps: int) -> None:
        """See ``macro_kernels.run_macro``."""
        if matrices is not self._matrices:
            self._book[...] = 0
            self._matrices = matrices
        added = self._noise_of(steps)
        whole, *equations = matrices[:8]
        macro_kernels.run_macro(
            whole,
            tuple(equations),
            *matrices[8:],
            self._model.owner,
            self._fixed,
            self._model.collocates,
            self._step_s,
            u,
            mean,
            steps,
            self._state,
            self._kinds,
            self._ranges,
            self.stats,
            self._extremes,
            self._junctions,
            added,
            at,
            leg_steps,
            self._book,
            self._last_place,
            self._store,
            self._room,
            self._tracks,
            self.log.rows,
            self.log.written,
        )

    def _noise_of(self, steps: int) -> Real:
        """What noise adds in the next steps; nothing without a setting."""
        if self._noise is None:
            return self._added
        channels = len(self._state)
        if self._added.shape[2] < steps:
            self._added = np.zeros((channels, self._model.size + 1, steps))
        self._noise_memory = self._noise.take_over(self._noise_memory, channels)
        for c in range(channels):
            self._noise.fill(c, int(self._noise_at[0]), steps, self._noise_memory[c], self._added[c])
        self._noise_at += steps
        return self._added

    def headroom_db(self, opamp: int) -> float:
        """See ``Core``."""
        limits = [(opamp, self._rails[0, opamp], self._rails[1, opamp])]
        limits += [
            (self._k + m, *self._wall_limits[:, m])
            for m in range(self._k, self._walls)  # the currents are no voltages
            if self._model.owner[m] == opamp
        ]
        room = []
        for row, low, high in limits:
            rest, extremes = self._heights[row], self._extremes[:, row]
            room += [(extremes[:, 0].max() - rest, high - rest), (rest - extremes[:, 1].min(), rest - low)]
        return _headroom_db(room)

    def rest_v(self, opamp: int) -> float:
        """See ``Core``."""
        return float(self._heights[2 * self._k + opamp])

    def limited(self) -> NDArray[np.bool_]:
        """See ``Core``."""
        wall = (self._kinds - regime_kernels.AT_WALL) // 2
        current = (wall >= 0) & (wall < self._k)
        voltage = (self._kinds >= regime_kernels.AT_HIGH) & ~current
        return np.stack([voltage, current, self._ranges != regime_kernels.IN_RANGE], axis=2)

    def moving(self) -> tuple[NDArray[Any], ...]:
        """See ``Core``."""
        noise = (self._noise_at, self._noise_memory)
        return self._state, self._kinds, self._ranges, self.stats, self._extremes, self._junctions, *noise

    def reset(self, matrices: Matrices) -> None:
        """The DC operating point without a signal."""
        rest = resting_state(
            MacroEquations(*matrices[1:8]),
            Limits(laws=matrices[8], rails=matrices[9], walls=matrices[10], gains=matrices[11]),
            self._model.owner,
            self._fixed[2:],
        )
        self._state[...] = rest.states
        self._kinds[...], self._ranges[...] = rest.kinds, rest.ranges
        self._junctions[...] = 0.0
        self._junctions[:, 0] = rest.junctions
        self._noise_at[...], self._noise_memory[...] = 0, 0.0
        self._heights[...] = rest.heights
        self._rails, self._wall_limits = matrices[9][-1], matrices[10][-1]
        self._extremes[...] = self._heights[:, None]
        self.clear()

    def clear(self) -> None:
        """See ``Core``."""
        self.stats[...] = 0.0
        self._extremes[:, :, :2] = self._extremes[:, :, 2:]

    def statistics(self) -> Real:
        """See ``Core``."""
        k = self._k
        currents, pins = self._extremes[:, k : 2 * k], self._extremes[:, 2 * k : 3 * k]
        self.stats[:, :k, visit_kernels.HIGH] = pins[:, :, 0]
        self.stats[:, :k, visit_kernels.LOW] = pins[:, :, 1]
        self.stats[:, :k, visit_kernels.CURRENT] = np.maximum(currents[:, :, 0], -currents[:, :, 1])
        return self.stats


def _beyond_belief(states: Real) -> int | None:
    """The state, of (channels, states), that is no number or too large to be one; None where there is none."""
    if np.vdot(states, states) < BEYOND_BELIEF**2:  # of no number this is not true
        return None
    worst = np.abs(states).max(axis=0, initial=0.0)
    if np.all(worst < BEYOND_BELIEF):
        return None
    return int(np.argmax(np.where(np.isfinite(worst), worst, np.inf)))


def _headroom_db(room: list[tuple[float, float]]) -> float:
    """Least of the ratios of what is there to what was taken [dB]; inf without a limit or a signal."""
    least = math.inf
    for taken, there in room:
        if math.isfinite(there) and math.isfinite(taken) and taken > 0.0:
            least = min(least, 20.0 * math.log10(there / taken) if there > 0.0 else 0.0)
    return max(least, 0.0)
