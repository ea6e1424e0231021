"""A topology as constant arrays: indices of terminals, and incidence of branches on nodes.

Node voltages have the shape (A, N), the unknown nodes first, then the driven ones. Every assembly is one product of a
constant incidence array with the branch quantities of all elements.
"""

from __future__ import annotations

from collections.abc import Sequence
from copy import copy
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
from optisize.stage.assembly import Topology
from optisize.stage.linear import Pattern

Indices = NDArray[np.intp]
PAIR_GROUP = "input"  # the group of the input transistors


class Wiring:
    """The constant arrays of a topology: indices of terminals and incidence of branches on the unknown nodes."""

    def __init__(self, topology: Topology, frozen: frozenset[str] = frozenset()) -> None:
        """Number the nodes and lay out the incidence arrays.

        Args:
            topology: the stage.
            frozen: unknown nodes that are held where they are, with the elements that stand at no other unknown node
                left out: what a drive cannot move need not be solved again.
        """
        self.topology = topology
        solved = tuple(node for node in topology.unknown if node not in frozen)
        self.nodes = (*solved, *topology.driven, *(node for node in topology.unknown if node in frozen))
        self.index = {name: i for i, name in enumerate(self.nodes)}
        self.unknowns = len(solved)
        alive = set(solved)
        self.transistors = tuple(x for x in topology.transistors if {x.drain, x.source} & alive)
        self.resistors = tuple(x for x in topology.resistors if {x.a, x.b} & alive)
        self.sources = tuple(x for x in topology.sources if {x.a, x.b} & alive)
        self.controls = tuple(x for x in topology.controls if x.node in solved)
        t = self.transistors
        self.gate = self._at([x.gate for x in t])
        self.drain = self._at([x.drain for x in t])
        self.source = self._at([x.source for x in t])
        self.bulk = self._at([topology.bulk_node(x) for x in t])
        self.polarity = np.array([[1.0 if topology.channel(x) == "n" else -1.0] for x in t])
        self.rows = {x.name: i for i, x in enumerate(t)}
        self.resistor_ends = (self._at([r.a for r in self.resistors]), self._at([r.b for r in self.resistors]))
        self.sensed, self.fed = self._linear_branches()
        self._equation_stamps: dict[bytes, Array] = {}
        self.current_stamp = self._current_stamp()
        self.all_conductances = self._all_conductances()
        self.conductance_stamp = self.all_conductances[: self.unknowns]
        self.all_capacitances = self._all_capacitances()
        self.capacitance_stamp = self.all_capacitances[: self.unknowns].copy()
        # What flows into a controlled node is the control's business: its equation is that of the control alone.
        self.capacitance_stamp[[self.index[c.node] for c in self.controls]] = 0.0

    def _at(self, names: Sequence[str]) -> Indices:
        return np.array([self.index[name] for name in names], dtype=np.intp)

    def _linear_branches(self) -> tuple[Array, Array]:
        """Return the voltage that each linear branch has, and the nodes that its current leaves, each (A, R + C).

        A resistor has the voltage between its ends, and its current leaves one and enters the other. A control has
        the mean of what it senses less the reference, and a current of one ampere a volt that leaves its own node:
        with nothing else there, the node goes to where that voltage is zero.
        """
        sensed = np.zeros((len(self.nodes), len(self.resistors) + len(self.controls)))
        fed = np.zeros_like(sensed)
        for column, r in enumerate(self.resistors):
            sensed[self.index[r.a], column] += 1.0
            sensed[self.index[r.b], column] -= 1.0
            fed[:, column] = sensed[:, column]
        for column, c in enumerate(self.controls, start=len(self.resistors)):
            for node in c.senses:
                sensed[self.index[node], column] += 1.0 / len(c.senses)
            sensed[self.index[c.reference], column] -= 1.0
            fed[self.index[c.node], column] = 1.0
        return sensed, fed

    def _current_stamp(self) -> Array:
        """Return (A, T + L + S): the current that leaves each node, from drain, linear and source currents."""
        unit = np.eye(len(self.nodes))
        channels = [unit[self.index[x.drain]] - unit[self.index[x.source]] for x in self.transistors]
        sources = [unit[self.index[x.a]] - unit[self.index[x.b]] for x in self.sources]
        return np.array([*channels, *self.fed.T, *sources]).T

    def _all_conductances(self) -> Array:
        """Return (A, A, 3T + L): how gm, gds, gms of the transistors and the linear branches enter the matrix.

        The bulk takes what the other terminals leave: moving all four together changes nothing.
        """
        t, linear = len(self.transistors), self.sensed.shape[1]
        full = np.zeros((len(self.nodes), len(self.nodes), 3 * t + linear))
        for k in range(t):
            for node, sign in ((self.drain[k], 1.0), (self.source[k], -1.0)):
                for kind, terminal, value in ((0, self.gate, 1.0), (1, self.drain, 1.0), (2, self.source, -1.0)):
                    full[node, terminal[k], kind * t + k] += sign * value
                    full[node, self.bulk[k], kind * t + k] -= sign * value
        full[:, :, 3 * t :] = self.fed[:, None] * self.sensed[None]
        return full

    @cached_property
    def leak_stamp(self) -> Array:
        """(U, A, 3T): how what flows from drains to the bulk, not to the source, enters the matrix by its slopes."""
        t = len(self.transistors)
        full = np.zeros((len(self.nodes), len(self.nodes), 3 * t))
        for k in range(t):
            for node, sign in ((self.source[k], 1.0), (self.bulk[k], -1.0)):
                for kind, terminal, value in ((0, self.gate, 1.0), (1, self.drain, 1.0), (2, self.source, -1.0)):
                    full[node, terminal[k], kind * t + k] += sign * value
                    full[node, self.bulk[k], kind * t + k] -= sign * value
        return full[: self.unknowns]

    def _all_capacitances(self) -> Array:
        """Return (A, A, 5T + R + 1): gate to source, drain, bulk; drain and source junctions; resistors; load.

        Half of a resistor's capacitance stands at each end; a rail's end carries nothing.
        """
        t, r = len(self.transistors), len(self.resistors)
        full = np.zeros((len(self.nodes), len(self.nodes), 5 * t + r + 1))
        pairs = [(self.gate, self.source), (self.gate, self.drain), (self.gate, self.bulk)]
        pairs += [(self.drain, self.bulk), (self.source, self.bulk)]
        for kind, (a, b) in enumerate(pairs):
            for k in range(t):
                _stamp_two_terminal(full[:, :, kind * t + k], a[k], b[k])
        ground = self.index["ground"]
        for k in range(r):
            for end in self.resistor_ends:
                _stamp_two_terminal(full[:, :, 5 * t + k], int(end[k]), ground, 0.5)
        for node, _ in self.topology.output:
            _stamp_two_terminal(full[:, :, -1], self.index[node], ground)
        return full

    def equation_stamp(self, drives: Array | None) -> Array:
        """Return the constant array that turns the branches of `Network.equations` into residual, matrix and pulls.

        Args:
            drives: K patterns over all nodes, (A, K).

        Returns:
            (U + U U + U K, 4T + 2L + S): the rows of the residual, of the matrix and of the pulls.
        """
        key = b"" if drives is None else drives.tobytes()
        if key not in self._equation_stamps:
            self._equation_stamps[key] = self._equations(drives)
        return self._equation_stamps[key]

    def _equations(self, drives: Array | None) -> Array:
        u, t, r, s = self.unknowns, len(self.transistors), self.sensed.shape[1], len(self.sources)
        slopes = [self.conductance_stamp[:, :u].reshape(u * u, -1)]
        if drives is not None:
            slopes.append(np.einsum("uae,ak->uke", self.conductance_stamp, drives).reshape(u * drives.shape[1], -1))
        rows = np.concatenate(slopes)
        stamp = np.zeros((u + len(rows), 4 * t + 2 * r + s), dtype=rows.dtype)
        current = self.current_stamp[:u].copy()
        current[:, :t] *= self.polarity[:, 0]
        stamp[:u, :t] = current[:, :t]
        stamp[:u, 4 * t : 4 * t + r] = current[:, t : t + r]
        stamp[:u, 4 * t + 2 * r :] = current[:, t + r :]
        stamp[u:, t : 4 * t] = rows[:, : 3 * t]
        stamp[u:, 4 * t + r : 4 * t + 2 * r] = rows[:, 3 * t :]
        return stamp

    @cached_property
    def conductance_pattern(self) -> Pattern:
        """Which elements of the conductance matrix between unknown nodes may differ from zero."""
        return _pattern(self.conductance_stamp[:, : self.unknowns])

    @cached_property
    def pattern(self) -> Pattern:
        """Which elements of the conductance or the capacitance matrix may differ from zero."""
        both = np.concatenate([self.conductance_stamp, self.capacitance_stamp], axis=2)
        return _pattern(both[:, : self.unknowns])

    @cached_property
    def terminal_stamp(self) -> Array:
        """(3T + L, A): gate, drain, source voltages against the bulk in n-channel sense; those of linear branches."""
        unit = np.eye(len(self.nodes))
        ends = [(unit[x] - unit[self.bulk]) * self.polarity for x in (self.gate, self.drain, self.source)]
        return np.concatenate([*ends, self.sensed.T])

    @cached_property
    def saturating(self) -> Indices:
        """The rows of the transistors that have to be saturated."""
        return np.array([i for i, x in enumerate(self.transistors) if x.saturates], dtype=np.intp)

    @cached_property
    def pair(self) -> slice:
        """The rows of the two input transistors, which stand side by side."""
        return slice(self.rows["input.p"], self.rows["input.n"] + 1)

    @cached_property
    def single(self) -> Wiring:
        """The same with arrays of single precision."""
        other = copy(self)
        for name, value in vars(self).items():
            if isinstance(value, np.ndarray) and value.dtype == np.float64:
                setattr(other, name, value.astype(np.float32))
        other._equation_stamps = {}
        other.terminal_stamp = self.terminal_stamp.astype(np.float32)
        return other

    def drive(self, **voltages: float) -> Array:
        """Return (A,) with small-signal voltages on driven nodes: ``drive(positive=0.5, negative=-0.5)``."""
        names = {"positive": "in+", "negative": "in-", "supply": "supply", "ground": "ground"}
        vector = np.zeros(len(self.nodes))
        for key, value in voltages.items():
            vector[self.index[names[key]]] = value
        return vector

    @cached_property
    def output_weights(self) -> Array:
        """(U,): the output as a combination of the unknown nodes."""
        weights = np.zeros(self.unknowns)
        for node, sign in self.topology.output:
            weights[self.index[node]] = sign
        return weights

    @cached_property
    def mean_weights(self) -> Array:
        """(U,): the mean of the sides of the output."""
        return np.abs(self.output_weights) / len(self.topology.output)

    def output(self, voltages: Array, *, mirrored: bool = False) -> Array:
        """Return the output of node voltages (A, ...) as a combination of its nodes; mirrored: with sides exchanged."""
        other = {"left": "right", "right": "left"} if mirrored else {}
        parts = [sign * voltages[self.index[other.get(node, node)]] for node, sign in self.topology.output]
        return parts[0] if len(parts) == 1 else parts[0] + parts[1]


def _pattern(stamp: Array) -> Pattern:
    return tuple(tuple(bool(x) for x in row) for row in np.any(stamp != 0.0, axis=2))


def _stamp_two_terminal(matrix: Array, a: int, b: int, value: float = 1.0) -> None:
    matrix[a, a] += value
    matrix[b, b] += value
    matrix[a, b] -= value
    matrix[b, a] -= value


@lru_cache(maxsize=64)
def wiring(topology: Topology) -> Wiring:
    """Return the constant arrays of a topology, made once."""
    return Wiring(topology)


@dataclass(frozen=True)
class Moving:
    """A part of a stage that the inputs can move, and where its elements stand in the whole.

    Attributes:
        wiring: of the part; the nodes that the inputs cannot move are driven ones.
        nodes, transistors, linear, sources: positions in the whole wiring.
    """

    wiring: Wiring
    nodes: Indices
    transistors: Indices
    linear: Indices
    sources: Indices


@lru_cache(maxsize=256)
def moving(topology: Topology) -> Moving:
    """Return the part of a stage whose node voltages depend on the input voltages."""
    return _part(topology, _still(topology))


@lru_cache(maxsize=256)
def held(topology: Topology) -> Moving:
    """Return the part that the inputs can move, and that steers the pair, while the drains of the pair are held."""
    whole = wiring(topology)
    depends = np.any(whole.conductance_stamp != 0.0, axis=2)
    drains = {t.drain for t in topology.transistors if t.group == PAIR_GROUP}
    free = [node for node in topology.unknown if node not in drains | _still(topology)]
    steering = {t.source for t in topology.transistors if t.group == PAIR_GROUP}
    for _ in free:
        rows = depends[[whole.index[node] for node in steering]].any(axis=0)
        steering |= {node for node in free if rows[whole.index[node]]}
    return _part(topology, frozenset(topology.unknown) - steering)


def _still(topology: Topology) -> frozenset[str]:
    """Return the unknown nodes whose voltage does not depend on the input voltages."""
    whole = wiring(topology)
    depends = np.any(whole.conductance_stamp != 0.0, axis=2)
    moved = np.isin(np.arange(len(whole.nodes)), [whole.index["in+"], whole.index["in-"]])
    for _ in range(whole.unknowns):
        moved[: whole.unknowns] |= (depends & moved).any(axis=1)
    return frozenset(whole.nodes[i] for i in range(whole.unknowns) if not moved[i])


def _part(topology: Topology, frozen: frozenset[str]) -> Moving:
    """Return a part of a stage, and where its elements stand in the whole."""
    whole, part = wiring(topology), Wiring(topology, frozen)

    def positions(all_of: tuple[Any, ...], some: tuple[Any, ...]) -> Indices:
        return np.array([all_of.index(x) for x in some], dtype=np.intp)

    return Moving(
        part,
        positions(whole.nodes, part.nodes),
        positions(whole.transistors, part.transistors),
        positions((*whole.resistors, *whole.controls), (*part.resistors, *part.controls)),
        positions(whole.sources, part.sources),
    )
