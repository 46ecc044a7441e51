"""State space of a circuit whose op-amp outputs are taken as given voltages.

Between its op-amps a stage is a network of R, L and C. The signal and the op-amp outputs are voltages to gnd,
so they are its inputs ``s = [u, y]``; what the op-amps must watch, ``e = v(plus) - v(minus)``, is an output::

    x' = A x + B s          x: capacitor and inductor states
    out = C_out x + D_out s
    e   = C_e x + D_e s

The states come from the nodal charges, so no capacitor loop (a capacitor straight across the source or an
op-amp's output, two capacitors in parallel) and no node joined by inductors alone is an exception. The
*physical* states are ``p = x - kappa s``: voltages along a tree of capacitors and inductor currents. They do
not jump when a part's value does, so a part can change while it plays.

All arrays have a leading axis of sets of values, so that one call prepares a whole glide.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from preview.circuit.netlist import GND, Branch, Netlist
from preview.circuit.parts import PartKind
from preview.errors import CircuitError

__all__ = ["StateSpace", "Topology"]

Real = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class StateSpace:
    """Matrices of one or more sets of values; g sets, n states, k op-amps, m inputs: the signal, the op-amp outputs,
    the fixed voltages, the drawn currents."""

    A: Real
    """(g, n, n) [1/s]."""
    B: Real
    """(g, n, m)."""
    kappa: Real
    """(g, n, m): physical states are ``x - kappa s``."""
    C_out: Real
    """(g, 1, n): the output node."""
    D_out: Real
    """(g, 1, m)."""
    C_e: Real
    """(g, k, n): input difference of each op-amp."""
    D_e: Real
    """(g, k, m)."""
    C_i: Real
    """(g, k, n): output current of each op-amp through resistors and inductors [A]."""
    D_i: Real
    """(g, k, m)."""
    C_q: Real
    """(g, k, n): charge that each op-amp's output has put into capacitors [C]."""
    D_q: Real
    """(g, k, m)."""
    C_v: Real
    """(g, w, n): voltages that are watched."""
    D_v: Real
    """(g, w, m)."""

    def closed(self) -> tuple[Real, Real, Real, Real]:
        """(A, B, C, D) from the signal to the output while no op-amp limits: ``e = 0`` solved for ``y``.

        Raises CircuitError where an op-amp's output does not reach its own inputs at once.
        """
        outputs = slice(1, 1 + self.C_e.shape[1])
        y = invert_feedback(self.D_e[:, :, outputs])
        y_x = -y @ self.C_e
        y_u = -y @ self.D_e[:, :, :1]
        return (
            self.A + self.B[:, :, outputs] @ y_x,
            self.B[:, :, :1] + self.B[:, :, outputs] @ y_u,
            self.C_out + self.D_out[:, :, outputs] @ y_x,
            self.D_out[:, :, :1] + self.D_out[:, :, outputs] @ y_u,
        )


def invert_feedback(feedback: Real) -> Real:
    """Inverse of the immediate feedback matrix, shape (g, k, k); CircuitError where there is none."""
    if feedback.shape[-1] == 0:
        return feedback
    scale = np.abs(feedback).max(axis=-1, keepdims=True)
    if np.any(scale < 1e-9) or np.any(np.abs(np.linalg.det(feedback / np.maximum(scale, 1e-300))) < 1e-9):
        raise CircuitError(
            "an op-amp's output does not reach its own inputs at once: its only way back is blocked by a "
            "capacitor to a voltage that is held",
            "put a resistor in series with that capacitor, or give the source some resistance",
        )
    return np.asarray(np.linalg.inv(feedback), dtype=np.float64)


class Topology:
    """What of the state space does not depend on values: incidences and the bases of the capacitor network.

    Parameters
    ----------
    netlist : Netlist
        Checked circuit.
    drawn : sequence of str
        Nodes that a current is drawn from; each current is a further input after the fixed voltages [A].
    watched : sequence of (str, str)
        Pairs of nodes whose voltage, first less second, is an output.

    Raises
    ------
    CircuitError
        A node that nothing holds.
    """

    def __init__(
        self, netlist: Netlist, *, drawn: Sequence[str] = (), watched: Sequence[tuple[str, str]] = ()
    ) -> None:
        self.netlist = netlist
        self.known = (netlist.input_node, *(o.out for o in netlist.opamps), *(f.node for f in netlist.fixed))
        if len(set(self.known)) != len(self.known):
            raise CircuitError("two outputs drive one node", "give each its own node")
        self.free = tuple(n for n in netlist.nodes if n not in self.known)
        kinds = (PartKind.RESISTOR, PartKind.CAPACITOR, PartKind.INDUCTOR)
        self._positions = {k: [i for i, b in enumerate(netlist.branches) if b.kind is k] for k in kinds}
        self._incidence = {k: self._rows([netlist.branches[i] for i in self._positions[k]]) for k in kinds}
        self._range, self._root, self._null, groups = self._bases()
        self._loose = self._loose_groups(groups)
        self.states = self._range.shape[1] + len(self._positions[PartKind.INDUCTOR])
        self.inputs = len(self.known) + len(drawn)
        self._drawn = np.zeros((len(self.free), len(drawn)))
        for i, node in enumerate(drawn):
            if node in self.free:
                self._drawn[self.free.index(node), i] = 1.0
        self._e_free, self._e_known = self._rows_of([(o.plus, o.minus) for o in netlist.opamps])
        self._out_free, self._out_known = self._rows_of([(netlist.output_node, GND)])
        self._v_free, self._v_known = self._rows_of(watched)

    def _rows_of(self, pairs: Sequence[tuple[str, str]]) -> tuple[Real, Real]:
        free = np.zeros((len(pairs), len(self.free)))
        known = np.zeros((len(pairs), len(self.known)))
        for i, pair in enumerate(pairs):
            for sign, node in zip((1.0, -1.0), pair, strict=True):
                if node in self.known:
                    known[i, self.known.index(node)] += sign
                elif node != GND:
                    free[i, self.free.index(node)] += sign
        return free, known

    def _rows(self, branches: list[Branch]) -> tuple[Real, Real]:
        return self._rows_of([(b.a, b.b) for b in branches])

    def _components(self, kind: PartKind, groups: list[list[str]]) -> list[tuple[list[list[str]], bool]]:
        """Groups of nodes that parts of a kind join; the flag tells whether gnd or a known node is among them."""
        parent = list(range(len(groups) + 1))  # 0 stands for gnd and every known node
        of_node = {n: i + 1 for i, g in enumerate(groups) for n in g}

        def find(key: int) -> int:
            while parent[key] != key:
                key = parent[key]
            return key

        for i in self._positions[kind]:
            branch = self.netlist.branches[i]
            parent[find(of_node.get(branch.a, 0))] = find(of_node.get(branch.b, 0))
        found: dict[int, list[list[str]]] = {}
        for i, g in enumerate(groups):
            found.setdefault(find(i + 1), []).append(g)
        return [(members, root == find(0)) for root, members in found.items()]

    def _bases(self) -> tuple[Real, Real, Real, list[list[str]]]:
        """How free nodes hang on capacitors: ``v = range t + root s + null eta``.

        ``t`` are the voltages along a tree of capacitors, ``root s`` the held voltage at the foot of each tree,
        ``eta`` the potentials of groups that no capacitor holds, which are returned by name as well.
        """
        width = len(self.free)
        where = {n: i for i, n in enumerate(self.free)}
        found = self._components(PartKind.CAPACITOR, [[n] for n in self.free])
        floating = [[n for m in members for n in m] for members, held in found if not held]
        whole = np.zeros((width, len(floating)))
        for g, nodes in enumerate(floating):
            whole[[where[n] for n in nodes], g] = 1.0
        root = np.zeros((width, len(self.known)))
        along = np.zeros((width, width - len(floating)))
        placed = {nodes[0] for nodes in floating}
        self._tree: list[str] = []
        edge = 0
        grown = True
        while grown:
            grown = False
            for i in self._positions[PartKind.CAPACITOR]:
                ends = (self.netlist.branches[i].a, self.netlist.branches[i].b)
                for near, far in (ends, ends[::-1]):
                    if far not in where or far in placed or (near in where and near not in placed):
                        continue
                    if near in where:
                        along[where[far]] = along[where[near]]
                        root[where[far]] = root[where[near]]
                    elif near in self.known:
                        root[where[far], self.known.index(near)] = 1.0
                    along[where[far], edge] = 1.0
                    edge += 1
                    placed.add(far)
                    self._tree.append(far)
                    grown = True
        return along, root, whole, floating

    def _loose_groups(self, groups: list[list[str]]) -> Real:
        """Indicator of groups that neither capacitor nor resistor holds, shape (groups, loose): only inductors do."""
        loose = []
        for members, held in self._components(PartKind.RESISTOR, groups):
            if held:
                continue
            nodes = {n for m in members for n in m}
            inductors = [self.netlist.branches[i] for i in self._positions[PartKind.INDUCTOR]]
            if not any((b.a in nodes) != (b.b in nodes) for b in inductors):
                raise CircuitError(
                    f"node {min(nodes)} floats: no part leads from it to gnd, the input or an op-amp's output",
                    "give it a path for direct current",
                )
            loose.append([1.0 if set(g) <= nodes else 0.0 for g in groups])
        return np.array(loose).reshape(len(loose), len(groups)).T

    def evaluate(self, values: Real) -> StateSpace:
        """State space for each set of values.

        Parameters
        ----------
        values : ndarray, shape (g, branches)
            Ohm, farad and henry in the order of the netlist's branches.
        """
        sets = values.shape[0]
        Rf, Rs = self._incidence[PartKind.RESISTOR]
        Cf, Cs = self._incidence[PartKind.CAPACITOR]
        Lf, Ls = self._incidence[PartKind.INDUCTOR]
        g = 1.0 / values[:, self._positions[PartKind.RESISTOR]]
        c = values[:, self._positions[PartKind.CAPACITOR]]
        per_l = 1.0 / values[:, self._positions[PartKind.INDUCTOR]]

        def weigh(left: Real, weight: Real, right: Real) -> Real:
            return np.asarray(np.einsum("ba,gb,bc->gac", left, weight, right), dtype=np.float64)

        sources = len(self.known)
        drawn = np.broadcast_to(self._drawn, (sets, *self._drawn.shape))

        def widen(over_known: Real) -> Real:
            """Rows over the known nodes, written over every input."""
            return np.concatenate([over_known, np.zeros((*over_known.shape[:-1], drawn.shape[2]))], axis=-1)

        G, G_s = weigh(Rf, g, Rf), np.concatenate([weigh(Rf, g, Rs), drawn], axis=2)
        M, R, N = self._range, widen(self._root), self._null
        xi, coils, m = M.shape[1], Lf.shape[0], self.inputs
        # whole groups: N' (G v + G_s s + Lf' i) = 0 gives eta in v = M xi + R s + N eta
        hold = N.T @ G @ N
        right_xi, right_s = -N.T @ G @ M, -N.T @ (G_s + G @ R)
        right_i = np.broadcast_to(-N.T @ Lf.T, (sets, N.shape[1], coils)).copy()
        if self._loose.shape[1]:
            # a group that only inductors hold: the rate of its summed currents is zero as well
            W = self._loose
            project = W @ np.linalg.inv(W.T @ W) @ W.T
            weight = per_l * (g.mean(axis=1, keepdims=True) if g.shape[1] else 1.0)
            weight = weight / per_l.mean(axis=1, keepdims=True)
            hold = hold + project @ N.T @ weigh(Lf, weight, Lf) @ N
            right_xi = right_xi - project @ N.T @ weigh(Lf, weight, Lf) @ M
            right_s = right_s - project @ N.T @ (widen(weigh(Lf, weight, Ls)) + weigh(Lf, weight, Lf) @ R)
        eta = np.linalg.solve(hold, np.concatenate([right_xi, right_s, right_i], axis=2))
        v = N @ eta
        v[:, :, :xi] += M
        v[:, :, xi : xi + m] += R
        v_xi, v_s, v_i = v[:, :, :xi], v[:, :, xi : xi + m], v[:, :, xi + m :]
        # charges along capacitors: M' (C (M xi + R s)' + C_s s') = -M' (G v + G_s s + Lf' i)
        stored = M.T @ weigh(Cf, c, Cf) @ M
        kappa = np.linalg.solve(stored, M.T @ (widen(weigh(Cf, c, Cs)) + weigh(Cf, c, Cf) @ R))
        leak = -np.linalg.solve(
            stored, M.T @ np.concatenate([G @ v_xi, G @ v_s + G_s, G @ v_i + Lf.T], axis=2)
        )
        wind = per_l[:, :, None] * np.concatenate([Lf @ v_xi, Lf @ v_s + widen(Ls), Lf @ v_i], axis=2)
        rates = np.concatenate([leak, wind], axis=1)
        to_x = np.zeros((sets, xi + coils, m))
        to_x[:, :xi] = kappa

        def in_x(rows: Real) -> tuple[Real, Real]:
            """Rows over [xi, s, i] written over [x, s], with xi = x - kappa s."""
            over_x = np.concatenate([rows[:, :, :xi], rows[:, :, xi + m :]], axis=2)
            return over_x, rows[:, :, xi : xi + m] - rows[:, :, :xi] @ kappa

        def known(rows: Real, direct: Real) -> Real:
            """Rows over the free nodes, and directly over s, written over [xi, s, i]."""
            full = rows @ v
            full[:, :, xi : xi + sources] += direct
            return full

        A, B = in_x(rates)
        C_out, D_out = in_x(known(self._out_free, self._out_known))
        C_e, D_e = in_x(known(self._e_free, self._e_known))
        pick = np.eye(sources)[1 : 1 + len(self.netlist.opamps)]
        current = known(pick @ np.swapaxes(G_s[:, :, :sources], 1, 2), pick @ weigh(Rs, g, Rs))
        current[:, :, xi + m :] += pick @ Ls.T
        C_i, D_i = in_x(current)
        C_q, D_q = in_x(known(pick @ weigh(Cs, c, Cf), pick @ weigh(Cs, c, Cs)))
        C_v, D_v = in_x(known(self._v_free, self._v_known))
        return StateSpace(A, B, to_x, C_out, D_out, C_e, D_e, C_i, D_i, C_q, D_q, C_v, D_v)

    def state_name(self, state: int) -> str:
        """Node at the end of a capacitor, or designator of an inductor, that a state belongs to; then the outputs."""
        coils = [self.netlist.branches[i].designator for i in self._positions[PartKind.INDUCTOR]]
        names = [*self._tree, *coils, *(o.out for o in self.netlist.opamps)]
        return str(names[state])

    def values_of(self, netlist: Netlist) -> Real:
        """Values of a netlist of this topology in the order of its branches, shape (branches,)."""
        return np.array([b.value for b in netlist.branches], dtype=np.float64)
