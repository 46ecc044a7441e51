"""The DC operating point with everything that bends: diodes, and op-amps that rest at a limit.

Newton's method on the nodal equations at 0 Hz. A diode's step is taken by the current that its tangent foretold
(``junctions.volts_along``); each op-amp is either within its limits, where its own equation holds, or at one of
them, and changes between the two as the solution asks. Where that does not come to rest, op-amps are held back
(as if they moved in time) and the voltages and currents of the circuit are brought up in steps.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import GND, Branch, Junction, Netlist, OpAmpSite, Port
from preview.circuit.parts import PartKind
from preview.errors import CircuitError
from preview.network.expansion import output_ohm
from preview.network.junctions import bias, volts_along
from preview.network.mna import NodalEquations, nodal_equations

__all__ = ["Bound", "OperatingPoint", "operating_point", "small_signal"]

Real = NDArray[np.float64]

Bound = Literal["high", "low", "source", "sink"]
"""What holds an op-amp: its highest or lowest output voltage, the largest current out of or into its output."""

LEAST_CONDUCTANCE_S = 1e-15
"""What a diode that does not conduct still conducts for a small signal, so that no node floats [S]."""

_UNDECIDED = 1e-9
"""Share of its own output by which an op-amp is held back at each turn; without it one that nothing decides, such as
an integrator at rest, has no solution."""
_AT_ONCE = 30
"""Turns in which op-amps may change between free and limited all at once; later one at a time."""


@dataclass(frozen=True, slots=True)
class OperatingPoint:
    """The circuit at rest."""

    volts: Mapping[str, float]
    """Voltage of every node, gnd included [V]."""
    port_a: Mapping[str, float]
    """Current through each diode, anode to cathode [A]."""
    opamp_a: Mapping[str, float]
    """Current out of each op-amp's output [A]."""
    limiting: Mapping[str, Bound]
    """Op-amps that rest at a limit, and at which."""
    iterations: int
    """Newton steps that it took."""


@dataclass(frozen=True, slots=True)
class _Limit:
    """``sign (row z - bound) <= 0`` while its op-amp has it to keep."""

    name: Bound
    row: Real
    bound: float

    @property
    def sign(self) -> float:
        return 1.0 if self.name in ("high", "source") else -1.0

    def excess(self, z: Real) -> float:
        """How far the solution is beyond it."""
        return self.sign * (float(self.row @ z) - self.bound)


@dataclass(slots=True)
class _State:
    """Where the iteration is."""

    z: Real
    """Unknowns of the nodal equations."""
    port_v: list[float]
    """Voltage at which each diode was looked at last."""
    held: list[_Limit | None]
    """The limit at which each op-amp is."""
    iterations: int = 0


def operating_point(netlist: Netlist, input_v: float = 0.0) -> OperatingPoint:
    """Where a circuit comes to rest with a steady input.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    input_v : float
        Voltage of the signal's source [V].

    Raises
    ------
    CircuitError
        Nothing holds some node, or no point of rest was found.
    """
    circuit = _Circuit(netlist, input_v)
    iterations = 0
    for shares, held_back in (((1.0,), 0.0), ((1.0,), 10.0), (np.linspace(0.05, 1.0, 20), 1.0)):
        state = circuit.at_zero()
        found = [circuit.settle(state, share=float(share), held_back=held_back) for share in shares]
        iterations += state.iterations
        if found[-1]:
            return circuit.point(state, iterations)
    raise CircuitError(
        "no DC operating point was found: the circuit does not come to rest",
        "look for an op-amp or a diode without a path for direct current, or for positive feedback",
    )


def small_signal(netlist: Netlist, point: OperatingPoint | None = None) -> Netlist:
    """The linear circuit that a small signal sees around an operating point.

    Every diode becomes a resistance, every nonlinear charge a capacitance (which may be negative: it stands beside
    the linear capacitor) and every fixed node is gnd. An op-amp that rests at a limit is taken as if it did not.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit; one without ports and fixed nodes is returned as it is.
    point : OperatingPoint, optional
        Where it rests; that without a signal, if not given.
    """
    if not (netlist.ports or netlist.fixed):
        return netlist
    at = (point or operating_point(netlist)).volts if netlist.ports else {}
    fixed = {f.node for f in netlist.fixed}

    def seen(node: str) -> str:
        return GND if node in fixed else node

    branches = (*netlist.branches, *(_branch(port, at[port.a] - at[port.b]) for port in netlist.ports))
    moved = (replace(b, a=seen(b.a), b=seen(b.b)) for b in branches)
    return replace(
        netlist,
        branches=tuple(b for b in moved if b.a != b.b),
        opamps=tuple(replace(o, plus=seen(o.plus), minus=seen(o.minus)) for o in netlist.opamps),
        ports=(),
        fixed=(),
    )


def _branch(port: Port, volts: float) -> Branch:
    """What a port is to a small signal at a voltage across it."""
    if isinstance(port.law, Junction):
        slope_s = max(bias(port.law, volts).conductance_s, LEAST_CONDUCTANCE_S)
        return Branch(port.designator, PartKind.RESISTOR, port.a, port.b, 1.0 / slope_s)
    lost_farad = port.law.farad / (1.0 + (port.law.half_v / volts) ** 2) if volts else 0.0
    return Branch(f"{port.designator}.bias", PartKind.CAPACITOR, port.a, port.b, -lost_farad)


class _Circuit:
    """The equations of a circuit at 0 Hz, and Newton's method on them."""

    def __init__(self, netlist: Netlist, input_v: float) -> None:
        self.netlist = netlist
        self.equations = nodal_equations(netlist)
        self.diodes = [(p, p.law) for p in netlist.ports if isinstance(p.law, Junction)]
        self.across = [self.equations.incidence(p.a, p.b) for p, _ in self.diodes]
        self.right = self.equations.drive * input_v + self.equations.constant
        rows = self.equations.opamp_currents
        self.gains = [rows[o.designator] for o in netlist.opamps]
        for opamp, row in zip(netlist.opamps, self.gains, strict=True):
            model = opamp.model
            self.right[row] -= model.offset_v
            half_a = model.offset_current_a / 2
            for node, current_a in (
                (opamp.plus, model.bias_a + half_a),
                (opamp.minus, model.bias_a - half_a),
            ):
                self.right -= current_a * self.equations.incidence(node, GND)
        self.inner = [_inner(self.equations, o) for o in netlist.opamps]

    def at_zero(self) -> _State:
        """Every voltage zero, every op-amp free."""
        size = self.equations.static.shape[0]
        return _State(np.zeros(size), [0.0] * len(self.diodes), [None] * len(self.gains))

    def settle(self, state: _State, *, share: float, held_back: float) -> bool:
        """Iterate from a state until it rests; whether it did.

        Parameters
        ----------
        share : float
            Share of the signal, fixed voltages, offsets and input currents that is there.
        held_back : float
            How strongly op-amps are held to where they are at first; this fades.
        """
        quiet = 0
        for turn in range(100 if held_back == 0.0 else 200):
            state.iterations += 1
            hold = max(held_back * 0.8**turn, _UNDECIDED)
            try:
                z = self._solve(state, share, hold)
            except np.linalg.LinAlgError:
                raise CircuitError(
                    "the circuit has no DC operating point: its nodal equations at 0 Hz are singular",
                    "look for a node that nothing but capacitors hold, or a loop of inductors",
                ) from None
            if not np.all(np.isfinite(z)):
                return False
            same = self._limit_diodes(state, z)
            same &= self._change_limits(state, z, share, at_once=turn < _AT_ONCE)
            volts = len(self.equations.nodes)
            step = np.abs(z - state.z)[:volts]
            state.z = z
            same &= bool(np.all(step <= 1e-7 + 1e-9 * np.abs(z[:volts]))) and hold == _UNDECIDED
            quiet = quiet + 1 if same else 0
            if quiet == 2:  # the second turn squares what error the first left
                return True
        return False

    def _solve(self, state: _State, share: float, hold: float) -> Real:
        """The unknowns with every diode as its tangent and every op-amp free or at its limit."""
        matrix, right = self.equations.static.copy(), share * self.right
        for (_, law), across, volts in zip(self.diodes, self.across, state.port_v, strict=True):
            at = bias(law, volts)
            slope_s = max(at.conductance_s, 1e-3 * law.saturation_a / law.slope_v)
            matrix += slope_s * np.outer(across, across)
            right -= (at.current_a - slope_s * volts) * across
        for row, inner, limit in zip(self.gains, self.inner, state.held, strict=True):
            if limit is None:
                matrix[row] -= hold * inner
                right[row] -= hold * float(inner @ state.z)
            else:
                matrix[row], right[row] = limit.row, limit.bound
        return np.asarray(np.linalg.solve(matrix, right), dtype=np.float64)

    def _limit_diodes(self, state: _State, z: Real) -> bool:
        """Move every diode towards the solution; whether all have arrived."""
        arrived = True
        for i, ((_, law), across) in enumerate(zip(self.diodes, self.across, strict=True)):
            wanted_v = float(across @ z)
            state.port_v[i] = volts_along(law, state.port_v[i], wanted_v)
            arrived &= abs(state.port_v[i] - wanted_v) <= 1e-9 * (1.0 + abs(wanted_v))
        return arrived

    def _change_limits(self, state: _State, z: Real, share: float, *, at_once: bool) -> bool:
        """Put op-amps at limits that they have passed and free those that come back; whether all stay."""
        stay = True
        for i, opamp in enumerate(self.netlist.opamps):
            row, now = self.gains[i], state.held[i]
            limits = _limits(self.equations, opamp, self.inner[i], z)
            name = None if now is None else now.name
            wants = float(self.equations.static[row] @ z - share * self.right[row])  # above zero: higher
            if now is not None and now.sign * wants < -1e-13:
                name = None
            else:
                kept = [x for x in limits.values() if now is None or x.sign == now.sign]
                beyond = [x for x in kept if x.excess(z) > 1e-9 * (1.0 + abs(x.bound))]
                if beyond:
                    name = max(beyond, key=lambda limit: limit.excess(z)).name
            state.held[i] = None if name is None else limits[name]
            if name != (None if now is None else now.name):
                stay = False
                if not at_once:
                    break
        return stay

    def point(self, state: _State, iterations: int) -> OperatingPoint:
        """The solution by name."""
        volts = {name: float(state.z[i]) for name, i in self.equations.nodes.items()}
        held = zip(self.netlist.opamps, state.held, strict=True)
        return OperatingPoint(
            volts={**volts, GND: 0.0},
            port_a={
                port.designator: bias(law, float(across @ state.z)).current_a
                for (port, law), across in zip(self.diodes, self.across, strict=True)
            },
            opamp_a={name: -float(state.z[row]) for name, row in self.equations.opamp_currents.items()},
            limiting={o.designator: limit.name for o, limit in held if limit is not None},
            iterations=iterations,
        )


def _inner(equations: NodalEquations, opamp: OpAmpSite) -> Real:
    """Row that gives an op-amp's voltage before its output resistance, shape (n,)."""
    row = equations.incidence(opamp.out, GND)
    if opamp.model.real:
        row[equations.opamp_currents[opamp.designator]] = -output_ohm(opamp.model)
    return row


def _limits(equations: NodalEquations, opamp: OpAmpSite, inner: Real, z: Real) -> dict[Bound, _Limit]:
    """What an op-amp has to keep to, by name.

    Where its swing depends on the load, the voltage at the output pin is bounded by the straight line between the
    data sheet's points on which the present current lies; else the voltage before the output resistance is.
    """
    model = opamp.model
    outward = np.zeros_like(z)
    outward[equations.opamp_currents[opamp.designator]] = -1.0
    found: list[_Limit] = []
    sides: tuple[tuple[Bound, float, float, tuple[tuple[float, float], ...]], ...] = (
        ("high", opamp.high_v, model.swing_high_v, model.swing_high_points),
        ("low", opamp.low_v, model.swing_low_v, model.swing_low_points),
    )
    for name, edge_v, lightest_v, points in sides:
        sign = 1.0 if name == "high" else -1.0
        if not math.isfinite(edge_v):
            continue
        if not points:
            found.append(_Limit(name, inner, edge_v))
            continue
        loss_v, ohm = _loss(points, sign * float(outward @ z))
        row = equations.incidence(opamp.out, GND) + ohm * outward
        found.append(_Limit(name, row, edge_v + sign * (lightest_v - loss_v)))
    if math.isfinite(model.current_source_a):
        found.append(_Limit("source", outward, model.current_source_a))
    if math.isfinite(model.current_sink_a):
        found.append(_Limit("sink", outward, -model.current_sink_a))
    return {limit.name: limit for limit in found}


def _loss(points: tuple[tuple[float, float], ...], current_a: float) -> tuple[float, float]:
    """Distance from the rail at no current [V] and its slope [ohm] on the line on which a current lies."""
    last = len(points) - 1
    i = next((k for k in range(last) if current_a < points[k + 1][0]), last - 1)
    if i < 0 or current_a < points[0][0]:
        return points[0][1], 0.0
    (low_a, low_v), (high_a, high_v) = points[i : i + 2]
    ohm = (high_v - low_v) / (high_a - low_a)
    return low_v - ohm * low_a, ohm
