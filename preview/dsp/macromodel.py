"""Circuits with op-amps as they are, with diodes and with fixed voltages: their equations, limits and rest.

An op-amp is an integrator ``w`` behind its input difference ``e`` and in front of its output stage::

    w' = clip(wt (e + offset) - wp w, -slew down, slew up)
    wt = 2 pi gain-bandwidth, wp = wt / open-loop gain

A second pole puts a lag ``q' = w2 (e - q)`` in the place of ``e``. The network sees ``w`` as a voltage behind the
output stage, its input currents as currents drawn from its nodes, and a diode as a current between two nodes. What
limits an op-amp besides its rails is a *wall*: a row over the state that must stay between two values, such as the
output current, or the voltage of the pin less the drop that its load current causes.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import GND, Charge, Junction, Netlist, Port
from preview.circuit.parts import PartKind
from preview.dsp import laws as columns_of
from preview.network.expansion import expanded, gain_bandwidth_hz, inner_node, output_ohm
from preview.network.opamps import second_pole_hz
from preview.network.statespace import Topology

__all__ = ["Limits", "MacroEquations", "MacroModel", "NoiseColumns", "collocates"]

Real = NDArray[np.float64]

LEAST_WALL_GAIN = 0.02
"""Share of an op-amp's move that its pin must feel at once to be held itself; else the inner voltage is."""
AHEAD_STEPS = 1.0 / 16.0
"""How far ahead of an inductor's current an op-amp that reaches its largest current looks [steps]."""
REVERSED_V_PER_S = 1e9
"""Rate at which an output without a slew limit runs off when its input reverses [V/s]."""


@dataclass(frozen=True, slots=True)
class MacroEquations:
    """Continuous equations per step, for g sets of values; rows over an instant, columns as in ``regime_kernels``."""

    base: Real
    """(g, n, c): rate of the network's states, without what they take from the op-amps' rates."""
    turn: Real
    """(g, n, k): that share."""
    rate: Real
    """(g, 3, k, c): rate of each op-amp while it follows, with its + input in, above and below its range."""
    out: Real
    """(g, c): the output node."""
    walls: Real
    """(g, G, c): output currents [A], output pins [V], and what else limits; in the order of ``Limits.owner``."""
    plus: Real
    """(g, k or 0, c): + inputs [V], where any op-amp limits them."""
    port: Real
    """(g, np, c): voltage across each port [V]."""

    def all(self) -> tuple[Real, ...]:
        """The arrays in the order the kernels take them."""
        return self.base, self.turn, self.rate, self.out, self.walls, self.plus, self.port


@dataclass(frozen=True, slots=True)
class Limits:
    """Where the op-amps limit, for g sets of values."""

    rails: Real
    """(g, 2, k): lowest and highest inner voltage [V]."""
    walls: Real
    """(g, 2, G): least and greatest value of each wall's row."""
    gains: Real
    """(g, G): how far a wall's row moves with its op-amp while no port conducts."""
    laws: Real
    """(g, np, LAW): the ports, see ``port_kernels``."""


@dataclass(frozen=True, slots=True)
class NoiseColumns:
    """Rates of the states, and the output, by one unit of noise; last row the output."""

    nodes: tuple[str, ...]
    """The circuit's nodes."""
    by_node: Real
    """(N + 1, nodes): by one ampere drawn from each."""
    by_input: Real
    """(N + 1, k): by one volt at each op-amp's input difference."""

    def drawn(self, node: str) -> Real:
        """By a current drawn from a node."""
        if node not in self.nodes:
            return np.zeros(len(self.by_node))
        return np.asarray(self.by_node[:, self.nodes.index(node)])

    def between(self, a: str, b: str) -> Real:
        """By a current from one node through a part to another."""
        return self.drawn(a) - self.drawn(b)

    def at_input(self, opamp: int) -> Real:
        """By a voltage at an op-amp's input difference."""
        return np.asarray(self.by_input[:, opamp])


@dataclass(frozen=True, slots=True)
class _Slope:
    """A swing that hangs on the load: ``pin + ohm * current`` stays below (above) a value."""

    opamp: int
    ohm: float
    low_v: float
    high_v: float


def collocates(netlist: Netlist) -> bool:
    """Whether its equations are taken by collocation in place of the exponential.

    Between currents given over a step an inductor forgets its own current, where nothing but a diode lets it flow.
    """
    return bool(expanded(netlist).ports) and any(b.kind is PartKind.INDUCTOR for b in netlist.branches)


class MacroModel:
    """A circuit's equations, ready for sets of values.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    step_s : float
        Length of a step [s].
    """

    def __init__(self, netlist: Netlist, step_s: float) -> None:
        self.netlist = netlist
        self.step_s = step_s
        inner = expanded(netlist)
        self.inner = inner
        self.sites = netlist.opamps
        self.ports, self._opposite = _paired(inner.ports)
        k = len(self.sites)
        watched = [(p.a, p.b) for p in self.ports]
        watched += [(o.plus, GND) for o in netlist.opamps] + [(o.out, GND) for o in netlist.opamps]
        self._nodes = inner.nodes
        self.topology = Topology(inner, drawn=inner.nodes, watched=watched)
        self._lags = [i for i, o in enumerate(self.sites) if math.isfinite(second_pole_hz(o.model))]
        self.n = self.topology.states + len(self._lags)
        self.k = k
        self.size = self.n + k
        self.columns = self.size + 4 + 2 * len(self.ports)
        self.collocates = collocates(netlist)
        self.watches_inputs = any(
            math.isfinite(o.input_high_v) or math.isfinite(o.input_low_v) for o in self.sites
        )
        self._slopes = self._swing_slopes()
        self.owner = np.array([*range(k), *range(k), *(s.opamp for s in self._slopes)], dtype=np.int64)
        self.charged = [
            next(i for i, b in enumerate(inner.branches) if b.designator == p.designator)
            if isinstance(p.law, Charge)
            else -1
            for p in self.ports
        ]

    def values_of(self, netlist: Netlist) -> Real:
        """Values of a netlist of this topology, in the model's order, shape (branches,)."""
        return self.topology.values_of(expanded(netlist))

    def where(self, state: int) -> str:
        """Node or part of a state."""
        if state >= self.n:
            return str(self.sites[state - self.n].out)
        if state >= self.topology.states:
            return str(self.sites[self._lags[state - self.topology.states]].designator)
        return self.topology.state_name(state)

    def fixed_limits(self) -> tuple[Real, Real, Real, Real]:
        """Fastest changes up and down [V/step]; least and greatest voltage of the + inputs [V]; each (k,)."""
        return (
            np.array([o.model.slew_up_v_per_s for o in self.sites]) * self.step_s,
            np.array([o.model.slew_down_v_per_s for o in self.sites]) * self.step_s,
            np.array([o.input_low_v for o in self.sites]),
            np.array([o.input_high_v for o in self.sites]),
        )

    def _swing_slopes(self) -> list[_Slope]:
        """Swings that hang on the load; of one slope both ways together."""
        found: dict[tuple[int, float], list[float]] = {}
        for i, site in enumerate(self.sites):
            model = site.model
            for sign, points, rail_v in (
                (1.0, model.swing_high_points, site.high_v + model.swing_high_v),
                (-1.0, model.swing_low_points, site.low_v - model.swing_low_v),
            ):
                for ohm, drop_v in _pieces(points):
                    limit = found.setdefault((i, ohm), [-math.inf, math.inf])
                    # sign (pin + ohm current) <= sign rail - drop at no current
                    limit[1 if sign > 0 else 0] = rail_v - sign * drop_v
        slopes = [_Slope(i, ohm, low, high) for (i, ohm), (low, high) in found.items() if ohm > 0.0]
        self._flat = {i: (low, high) for (i, ohm), (low, high) in found.items() if ohm == 0.0}
        return slopes

    def equations(
        self, values: Real, *, supply: Real | None = None, supply_per_step: float = 0.0
    ) -> MacroEquations:
        """Equations for sets of values.

        Parameters
        ----------
        values : ndarray, shape (g, branches)
            Ohm, farad and henry.
        supply : ndarray, shape (g,), optional
            Share of the supply that is there; all of it if not given.
        supply_per_step : float
            How that share grows.
        """
        space = self.topology.evaluate(values)
        sets, n0 = space.A.shape[:2]
        n, k, size, T = self.n, self.k, self.size, self.step_s
        ports = len(self.ports)
        at_u, at_1, at_i = size, size + 3, size + 4
        drawn_at = 1 + k + len(self.netlist.fixed)
        share = np.ones(sets) if supply is None else supply
        fixed_v = np.array([f.volts for f in self.netlist.fixed])
        drawn_a = np.zeros(len(self._nodes))
        flows = np.zeros((len(self._nodes), ports))
        where = {node: i for i, node in enumerate(self._nodes)}

        def draw(node: str, amps: float) -> None:
            if node != GND:
                drawn_a[where[node]] += amps

        for o in self.sites:
            m = o.model
            draw(o.plus, m.bias_a + m.offset_current_a / 2)
            draw(o.minus, m.bias_a - m.offset_current_a / 2)
            if m.crossover_v > 0.0:
                draw(o.out, m.crossover_a)
        for p, port in enumerate(self.ports):
            for node, sign in ((port.a, 1.0), (port.b, -1.0)):
                if node != GND:
                    flows[where[node], p] += sign

        def lay(over_x: Real, over_s: Real) -> Real:
            """Rows over x and s, written over an instant; x = p + kappa s."""
            s_part = over_s + over_x @ space.kappa
            rows = np.zeros((sets, over_x.shape[1], self.columns))
            rows[:, :, :n0] = over_x
            rows[:, :, n : n + k] = s_part[:, :, 1 : 1 + k]
            rows[:, :, at_u] = s_part[:, :, 0]
            rows[:, :, at_1] = share[:, None] * (s_part[:, :, 1 + k : drawn_at] @ fixed_v)
            rows[:, :, at_1] += s_part[:, :, drawn_at:] @ drawn_a
            rows[:, :, at_i : at_i + ports] = s_part[:, :, drawn_at:] @ flows
            return rows

        base = np.zeros((sets, n, self.columns))
        base[:, :n0] = T * lay(space.A, space.B)
        base[:, :n0, at_u + 1] -= space.kappa[:, :, 0]
        base[:, :n0, at_1] -= supply_per_step * (space.kappa[:, :, 1 + k : drawn_at] @ fixed_v)
        e = lay(space.C_e, space.D_e)
        watched = lay(space.C_v, space.D_v)
        port_v, plus_v, pin_v = watched[:, :ports], watched[:, ports : ports + k], watched[:, ports + k :]
        rate = self._rates(base, e, plus_v, n0)
        turn = np.zeros((sets, n, k))
        turn[:, :n0] = space.kappa[:, :, 1 : 1 + k]
        current = lay(space.C_i, space.D_i)
        for i, o in enumerate(self.sites):
            w = inner_node(o)
            for p, port in enumerate(self.ports):
                current[:, i, at_i + p] += (port.a == w) * 1.0 - (port.b == w) * 1.0
        return MacroEquations(
            base=base,
            turn=turn,
            rate=rate,
            out=np.ascontiguousarray(lay(space.C_out, space.D_out)[:, 0]),
            walls=self._wall_rows(current, pin_v, base, turn),
            plus=np.ascontiguousarray(plus_v if self.watches_inputs else plus_v[:, :0]),
            port=np.ascontiguousarray(port_v),
        )

    def following(self, equations: MacroEquations) -> Real:
        """Rates of the states while every op-amp follows, and last the output, for the first set, shape (N + 1, c)."""
        moves = equations.rate[0, 0]
        return np.concatenate([equations.base[0] - equations.turn[0] @ moves, moves, equations.out[:1]])

    def noise_inputs(self, values: Real) -> tuple[Real, NoiseColumns]:
        """Generator of the states and of the output's integral, (N + 1, N + 1) per step, and how noise enters it."""
        e = self.equations(values[None])
        space = self.topology.evaluate(values[None])
        n, size, T = self.n, self.size, self.step_s
        n0 = space.A.shape[1]
        turn = e.turn[0]
        A = np.zeros((size + 1, size + 1))
        A[:, :size] = self.following(e)[:, :size]
        drawn = slice(1 + self.k + len(self.netlist.fixed), None)
        wt = T * 2.0 * np.pi * np.array([gain_bandwidth_hz(o.model) for o in self.sites])
        by_input = np.zeros((size + 1, self.k))  # what one volt at each input difference does
        for i, site in enumerate(self.sites):
            if i in self._lags:
                by_input[n0 + self._lags.index(i), i] = T * 2.0 * np.pi * second_pole_hz(site.model)
            else:
                by_input[n + i, i] = wt[i]
        by_node = np.zeros((size + 1, len(self._nodes)))
        by_node[:n0] = T * space.B[0, :, drawn]
        by_node += by_input @ space.D_e[0, :, drawn]
        by_node[size] = space.D_out[0, 0, drawn]
        for columns in (by_input, by_node):
            columns[:n] -= turn @ columns[n:size]
        return A, NoiseColumns(self._nodes, by_node, by_input)

    def _rates(self, base: Real, e: Real, plus_v: Real, n0: int) -> Real:
        """Rates of the op-amps; those of the lags are put into ``base``."""
        sets = e.shape[0]
        n, at_1 = self.n, self.size + 3
        rate = np.zeros((sets, 3, self.k, self.columns))
        for i, site in enumerate(self.sites):
            model = site.model
            wt = 2.0 * math.pi * gain_bandwidth_hz(model)
            drive = e[:, i].copy()
            if i in self._lags:
                q = n0 + self._lags.index(i)
                w2 = 2.0 * math.pi * second_pole_hz(model)
                base[:, q] = self.step_s * w2 * e[:, i]
                base[:, q, q] -= self.step_s * w2
                drive[...] = 0.0
                drive[:, q] = 1.0
            drive[:, at_1] += model.offset_v
            for case, bound, slew in (
                (0, math.nan, 0.0),
                (1, site.input_high_v, -model.slew_down_v_per_s),
                (2, site.input_low_v, model.slew_up_v_per_s),
            ):
                if case and not math.isfinite(bound):
                    continue
                if case and model.input_overdrive == "reverses":
                    fastest = min(abs(slew), REVERSED_V_PER_S) * self.step_s
                    rate[:, case, i, at_1] = math.copysign(fastest, slew)
                    continue
                row = drive.copy()
                if case:  # the input stage sees its + input no further than the range
                    row -= plus_v[:, i]
                    row[:, at_1] += bound
                rate[:, case, i] = self.step_s * wt * row
                rate[:, case, i, n + i] -= self.step_s * wt / model.open_loop_gain
        return rate

    def _ahead(self, current: Real, base: Real, turn: Real) -> Real:
        """Output currents; one that only an inductor carries, a little later, when its op-amp can have moved it."""
        size, n, ports = self.size, self.n, len(self.ports)
        for i in range(self.k):
            row = current[:, i]
            own = row[:, n + i] - np.einsum("gi,gi->g", row[:, :n], turn[:, :, i])
            if np.abs(own).max() > columns_of.LEAST_GAIN:
                continue
            then = np.einsum("gi,gij->gj", row[:, :n], base)
            then[:, size + 1 : size + 3] += row[:, size : size + 2]
            then[:, size + 4 + ports :] += row[:, size + 4 : size + 4 + ports]
            row += AHEAD_STEPS * then
        return current

    def _wall_rows(self, current: Real, pin_v: Real, base: Real, turn: Real) -> Real:
        rows = [self._ahead(current, base, turn), pin_v]
        for s in self._slopes:
            rows.append((pin_v[:, s.opamp] + s.ohm * current[:, s.opamp])[:, None])
        return np.ascontiguousarray(np.concatenate(rows, axis=1))

    def wall_gains(self, equations: MacroEquations) -> Real:
        """How far each wall's row moves with its op-amp while no port conducts, shape (g, G)."""
        n = self.n
        rows = equations.walls
        own = rows[:, np.arange(len(self.owner)), n + self.owner]
        own = own - np.einsum("gmi,gim->gm", rows[:, :, :n], equations.turn[:, :, self.owner])
        return np.asarray(own)

    def limits(self, values: Real, equations: MacroEquations, *, supply: Real | None = None) -> Limits:
        """Limits for the same sets of values."""
        sets, k = len(values), self.k
        share = np.ones((sets, 1)) if supply is None else supply[:, None]
        gains = self.wall_gains(equations)
        rails = np.zeros((sets, 2, k))
        walls = np.full((sets, 2, len(self.owner)), math.inf)
        walls[:, 0] = -math.inf
        for i, site in enumerate(self.sites):
            model = site.model
            low, high = site.low_v, site.high_v
            if i in self._flat and np.abs(gains[:, k + i]).min() >= LEAST_WALL_GAIN:
                # the pin is what stops; the inner voltage itself may go further
                room = model.current_source_a if math.isfinite(model.current_source_a) else 0.1
                reach = room * output_ohm(model)
                walls[:, 0, k + i], walls[:, 1, k + i] = self._flat[i]
                low, high = low - model.swing_low_v - reach, high + model.swing_high_v + reach
            if model.crossover_v > 0.0:
                low, high = low - model.crossover_v, high + model.crossover_v
            else:
                walls[:, 0, i], walls[:, 1, i] = -model.current_sink_a, model.current_source_a
            rails[:, :, i] = low, high
        for j, s in enumerate(self._slopes):
            if np.abs(gains[:, 2 * k + j]).min() >= LEAST_WALL_GAIN:
                walls[:, 0, 2 * k + j], walls[:, 1, 2 * k + j] = s.low_v, s.high_v
        with np.errstate(invalid="ignore"):
            rails = rails * share[:, :, None]
            walls[:, :, k:] = walls[:, :, k:] * share[:, :, None]
        laws = np.zeros((sets, len(self.ports), columns_of.LAW))
        for p, (port, back) in enumerate(zip(self.ports, self._opposite, strict=True)):
            laws[:, p] = _law(port.law, back)
            for o in self.sites:
                if port.designator == f"{o.designator}.source":
                    laws[:, p, columns_of.MOST] = o.model.current_source_a
                    laws[:, p, columns_of.BACK_MOST] = o.model.current_sink_a
            if self.charged[p] >= 0:
                laws[:, p, columns_of.FARAD] = values[:, self.charged[p]]
        return Limits(rails, walls, gains, laws)


def _pieces(points: tuple[tuple[float, float], ...]) -> list[tuple[float, float]]:
    """Resistance and drop at no current of each piece of a swing by its load current; flat before the first point."""
    if not points:
        return []
    pieces = [(0.0, points[0][1])]
    for (i0, d0), (i1, d1) in pairwise(points):
        ohm = (d1 - d0) / (i1 - i0)
        if ohm > 0.0:
            pieces.append((ohm, d0 - ohm * i0))
    return pieces


def _paired(ports: tuple[Port, ...]) -> tuple[tuple[Port, ...], tuple[Junction | None, ...]]:
    """Ports, each with the diode that stands against it between the same nodes, where there is one.

    Where both have one series resistance it can be shared: the one that blocks carries its saturation current only.
    """
    rest, found = list(ports), []
    while rest:
        port = rest.pop(0)
        back = None
        if isinstance(port.law, Junction) and not np.isfinite(port.law.breakdown_v):
            for other in rest:
                law = other.law
                if (
                    isinstance(law, Junction)
                    and (other.a, other.b) == (port.b, port.a)
                    and law.series_ohm == port.law.series_ohm
                    and not np.isfinite(law.breakdown_v)
                ):
                    back = law
                    rest.remove(other)
                    break
        found.append((port, back))
    return tuple(port for port, _ in found), tuple(back for _, back in found)


def _critical_v(slope_v: float, saturation_a: float) -> float:
    """Junction voltage from which Newton's steps are shortened [Nagel1975]."""
    return slope_v * math.log(slope_v / (math.sqrt(2.0) * saturation_a))


def _law(law: Junction | Charge, opposite: Junction | None) -> Real:
    """A port's law as the kernels take it."""
    row = np.zeros(columns_of.LAW)
    row[columns_of.MOST] = row[columns_of.BACK_MOST] = math.inf
    if isinstance(law, Charge):
        row[columns_of.HALF], row[columns_of.FARAD] = law.half_v, law.farad
        return row
    row[columns_of.SATURATION], row[columns_of.SLOPE] = law.saturation_a, law.slope_v
    row[columns_of.SERIES] = law.series_ohm
    row[columns_of.CRITICAL] = _critical_v(law.slope_v, law.saturation_a)
    if opposite is not None:
        row[columns_of.BACK_CURRENT], row[columns_of.BACK_SLOPE] = opposite.saturation_a, opposite.slope_v
        row[columns_of.BACK_CRITICAL] = _critical_v(opposite.slope_v, opposite.saturation_a)
    elif math.isfinite(law.breakdown_v):
        row[columns_of.BACK] = law.breakdown_v - law.breakdown_a * law.series_ohm
        row[columns_of.BACK_CURRENT] = law.breakdown_a
        row[columns_of.BACK_SLOPE] = row[columns_of.BACK_CRITICAL] = law.breakdown_slope_v
    return row
