"""The stage as a network: its equations assembled from the topology for a whole population at once.

Node voltages have the shape (A, N), the unknown nodes first, then the driven ones. Every assembly is one product of a
constant incidence array with the branch quantities of all elements.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from optisize.process.card import Process
from optisize.process.law import Array, Drain, Law, Pick, picked, taken
from optisize.stage.layout import Drawn, draw_transistors, resistor_area, resistor_length
from optisize.stage.linear import Pattern
from optisize.stage.topology import DRIVEN, Topology

Indices = NDArray[np.intp]


class Wiring:
    """The constant arrays of a topology: indices of terminals and incidence of branches on the unknown nodes."""

    def __init__(self, topology: Topology) -> None:
        """Number the nodes and lay out the incidence arrays."""
        self.topology = topology
        self.nodes = (*topology.unknown, *DRIVEN)
        self.index = {name: i for i, name in enumerate(self.nodes)}
        self.unknowns = len(topology.unknown)
        t = topology.transistors
        self.gate = self._at([x.gate for x in t])
        self.drain = self._at([x.drain for x in t])
        self.source = self._at([x.source for x in t])
        self.bulk = self._at([topology.bulk_node(x) for x in t])
        self.polarity = np.array([[1.0 if topology.channel(x) == "n" else -1.0] for x in t])
        self.rows = {x.name: i for i, x in enumerate(t)}
        self.resistor_ends = (self._at([r.a for r in topology.resistors]), self._at([r.b for r in topology.resistors]))
        self._equation_stamps: dict[bytes, Array] = {}
        self.current_stamp = self._current_stamp()
        self.conductance_stamp = self._conductance_stamp()
        self.capacitance_stamp = self._capacitance_stamp()

    def _at(self, names: Sequence[str]) -> Indices:
        return np.array([self.index[name] for name in names], dtype=np.intp)

    def _current_stamp(self) -> Array:
        """Return (A, T + R + S): the current that leaves each node, from drain, resistor and source currents."""
        top = self.topology
        ends = [(x.drain, x.source) for x in top.transistors]
        ends += [(r.a, r.b) for r in top.resistors] + [(s.a, s.b) for s in top.sources]
        stamp = np.zeros((len(self.nodes), len(ends)))
        for column, (a, b) in enumerate(ends):
            stamp[self.index[a], column] += 1.0
            stamp[self.index[b], column] -= 1.0
        return stamp

    def _conductance_stamp(self) -> Array:
        """Return (U, A, 3T + R): how gm, gds, gms of the transistors and the conductances enter the matrix.

        The bulk takes what the other terminals leave: moving all four together changes nothing.
        """
        t, r = len(self.topology.transistors), len(self.topology.resistors)
        full = np.zeros((len(self.nodes), len(self.nodes), 3 * t + r))
        for k in range(t):
            for node, sign in ((self.drain[k], 1.0), (self.source[k], -1.0)):
                for kind, terminal, value in ((0, self.gate, 1.0), (1, self.drain, 1.0), (2, self.source, -1.0)):
                    full[node, terminal[k], kind * t + k] += sign * value
                    full[node, self.bulk[k], kind * t + k] -= sign * value
        for k in range(r):
            _stamp_two_terminal(full[:, :, 3 * t + k], self.resistor_ends[0][k], self.resistor_ends[1][k])
        return full[: self.unknowns]

    def _capacitance_stamp(self) -> Array:
        """Return (U, A, 5T + R + 1): gate to source, drain, bulk; drain and source junctions; resistors; load.

        Half of a resistor's capacitance stands at each end; a rail's end carries nothing.
        """
        t, r = len(self.topology.transistors), len(self.topology.resistors)
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
        return full[: self.unknowns]

    def equation_stamp(self, drives: Array | None) -> Array:
        """Return the constant array that turns `Circuit.branches` into residual, matrix and pulls of the drives.

        Args:
            drives: K patterns over all nodes, (A, K).

        Returns:
            (U + U U + U K, 4T + 2R + S): the rows of the residual, of the matrix and of the pulls.
        """
        key = b"" if drives is None else drives.tobytes()
        if key not in self._equation_stamps:
            self._equation_stamps[key] = self._equations(drives)
        return self._equation_stamps[key]

    def _equations(self, drives: Array | None) -> Array:
        top, u = self.topology, self.unknowns
        t, r, s = len(top.transistors), len(top.resistors), len(top.sources)
        slopes = [self.conductance_stamp[:, :u].reshape(u * u, -1)]
        if drives is not None:
            slopes.append(np.einsum("uae,ak->uke", self.conductance_stamp, drives).reshape(u * drives.shape[1], -1))
        rows = np.concatenate(slopes)
        stamp = np.zeros((u + len(rows), 4 * t + 2 * r + s))
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
        """(3T + R, A): gate, drain and source voltages relative to the bulk in n-channel sense; resistor voltages."""
        unit = np.eye(len(self.nodes))
        ends = [(unit[x] - unit[self.bulk]) * self.polarity for x in (self.gate, self.drain, self.source)]
        a, b = self.resistor_ends
        return np.concatenate([*ends, unit[a] - unit[b]])

    @cached_property
    def saturating(self) -> Indices:
        """The rows of the transistors that have to be saturated."""
        return np.array([i for i, x in enumerate(self.topology.transistors) if x.saturates], dtype=np.intp)

    @cached_property
    def pair(self) -> Indices:
        """The rows of the two input transistors."""
        return np.array([self.rows["input.p"], self.rows["input.n"]], dtype=np.intp)

    def drive(self, **voltages: float) -> Array:
        """Return (A,) with small-signal voltages on driven nodes: ``drive(positive=0.5, negative=-0.5)``."""
        names = {"positive": "in+", "negative": "in-", "supply": "supply", "ground": "ground"}
        vector = np.zeros(len(self.nodes))
        for key, value in voltages.items():
            vector[self.index[names[key]]] = value
        return vector

    def output(self, voltages: Array) -> Array:
        """Return the output of node voltages (A, ...) as a combination of its nodes."""
        parts = [sign * voltages[self.index[node]] for node, sign in self.topology.output]
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
class Conditions:
    """What the stage is exposed to: SI values, the same for every design.

    Attributes:
        supply: supply voltage [V].
        common_mode: lowest and highest common-mode input voltage [V].
        load_capacitance: from each output to ground [F].
        temperature: absolute temperature [K].
        corner: name of the process corner.
    """

    supply: float
    common_mode: tuple[float, float]
    load_capacitance: float
    temperature: float = 300.15
    corner: str = "typical"

    @property
    def middle(self) -> float:
        """The middle of the common-mode range, where all but the range itself is measured."""
        return 0.5 * (self.common_mode[0] + self.common_mode[1])


class Terminals(NamedTuple):
    """Voltages for node voltages (A, ...).

    Attributes:
        gate, drain, source: of the transistors, relative to the bulk and in n-channel sense, each (T, ...).
        resistors: across the resistors, (R, ...).
    """

    gate: Array
    drain: Array
    source: Array
    resistors: Array

    @property
    def vds(self) -> Array:
        """Drain-source voltages in n-channel sense, (T, ...)."""
        return self.drain - self.source

    @property
    def of_law(self) -> tuple[Array, Array, Array]:
        """What a law takes: gate, drain and source voltages."""
        return self.gate, self.drain, self.source


class Equations(NamedTuple):
    """The linearised equations of N designs.

    Attributes:
        residual: current that leaves each unknown node, (U, N); zero at the operating point.
        matrix: its derivatives with respect to the unknown nodes, (U, U, N).
        pulls: its derivatives with respect to the drives, (U, K, N).
    """

    residual: Array
    matrix: Array
    pulls: Array


@dataclass(frozen=True)
class Circuit:
    """A topology with sizes, in a process, under conditions: everything the equations need, for N designs.

    Attributes:
        wiring: the constant arrays of the topology.
        law: the transistor law of the T transistors.
        parameters: transistor parameters, each (T, 1) or (T, N).
        sizes: every size by name, each (N,).
        units, width, length: of the transistors, each (T, N); `width` is that of one unit.
        conductances: of the resistors, (R, N).
        currents: of the sources, (S, N), signed from a to b.
    """

    wiring: Wiring
    process: Process
    conditions: Conditions
    law: Law
    parameters: Mapping[str, Array]
    sizes: Mapping[str, Array]
    units: Array
    width: Array
    length: Array
    conductances: Array
    currents: Array

    @property
    def topology(self) -> Topology:
        """The topology."""
        return self.wiring.topology

    @property
    def designs(self) -> int:
        """The number of designs."""
        return self.width.shape[1]

    def take(self, columns: Pick) -> Circuit:
        """Return the same circuit for some of the designs."""
        every = slice(None)
        chosen = {
            name: picked(getattr(self, name), columns)
            for name in ("units", "width", "length", "conductances", "currents")
        }
        return Circuit(
            wiring=self.wiring,
            process=self.process,
            conditions=self.conditions,
            law=self.law.take(every, columns),
            parameters={k: taken(v, every, columns) for k, v in self.parameters.items()},
            sizes={k: v[columns] for k, v in self.sizes.items()},
            **chosen,
        )

    def repeated(self, times: int) -> Circuit:
        """Return the designs several times over, side by side."""
        return self.take(np.tile(np.arange(self.designs), times))

    def driven(self, positive: Array, negative: Array) -> Array:
        """Return the voltages of the driven nodes (4, N) for input voltages (N,)."""
        voltages = np.empty((len(DRIVEN), self.designs))
        voltages[0], voltages[1] = positive, negative
        voltages[2], voltages[3] = self.conditions.supply, 0.0
        return voltages

    def terminals(self, v: Array) -> Terminals:
        """Return the voltages at the terminals for node voltages (A, ...)."""
        t = len(self.topology.transistors)
        stacked = self.wiring.terminal_stamp @ v.reshape(v.shape[0], -1)
        stacked = stacked.reshape(-1, *v.shape[1:])
        return Terminals(stacked[:t], stacked[t : 2 * t], stacked[2 * t : 3 * t], stacked[3 * t :])

    def branch_currents(self, terminals: Terminals, drain: Drain) -> Array:
        """Return the currents of all branches (T + R + S, N), from drain to source and from a to b."""
        through = terminals.resistors * self.conductances
        return np.concatenate([drain.id * self.wiring.polarity, through, self.currents])

    def equations(self, terminals: Terminals, drain: Drain, drives: Array | None = None) -> Equations:
        """Return the linearised equations at node voltages.

        Args:
            terminals: the voltages at the terminals.
            drain: current and derivatives of the transistors there.
            drives: K patterns over all nodes, (A, K).
        """
        u = self.wiring.unknowns
        through = terminals.resistors * self.conductances
        branches = np.concatenate([drain.id, drain.gm, drain.gds, drain.gms, through, self.conductances, self.currents])
        rows = self.wiring.equation_stamp(drives) @ branches
        end = u + u * u
        return Equations(rows[:u], rows[u:end].reshape(u, u, -1), rows[end:].reshape(u, -1, rows.shape[1]))

    @cached_property
    def drawn(self) -> Drawn:
        """The drawn shapes of the transistors."""
        even = np.array([[x.even_fingers] for x in self.topology.transistors])
        return draw_transistors(self.width, self.length, self.units, even, self.process.grid)

    @cached_property
    def resistances(self) -> Array:
        """The drawn resistances (R, N), at nominal conditions."""
        shape = (0, self.designs)
        return (
            np.array([self.sizes[r.size] for r in self.topology.resistors]).reshape(-1, self.designs)
            if len(self.topology.resistors)
            else np.zeros(shape)
        )

    @cached_property
    def resistor_areas(self) -> Array:
        """The drawn areas of the resistors (R, N) [m^2]."""
        return resistor_area(self.resistances, self.process.resistor)

    @cached_property
    def resistor_capacitances(self) -> Array:
        """The capacitance of each resistor to the substrate (R, N) [F]."""
        r = self.process.resistor
        return r.capacitance * resistor_length(self.resistances, r) * r.width


def size_circuit(topology: Topology, process: Process, conditions: Conditions, sizes: Mapping[str, Array]) -> Circuit:
    """Put sizes into a topology.

    Args:
        topology: the stage.
        process: the process.
        conditions: what the stage is exposed to.
        sizes: every size of the topology in SI units, each (N,).
    """
    wires = wiring(topology)
    t = topology.transistors
    count = len(next(iter(sizes.values())))
    one = np.ones(count)
    width = np.array([sizes[f"{x.group}.width"] for x in t])
    length = np.array([sizes[f"{x.group}.length"] for x in t])
    units = np.array([sizes[x.units] if x.units else one for x in t])
    channels = [topology.channel(x) for x in t]
    law, parameters = process.bind_law(channels, width * units, length, conditions.temperature, conditions.corner)
    ratio = process.resistance_ratio(conditions.temperature, conditions.corner)
    conductances = [1.0 / (sizes[r.size] * ratio) for r in topology.resistors]
    currents = [topology.polarity * sizes[s.size] for s in topology.sources]
    return Circuit(
        wiring=wires,
        process=process,
        conditions=conditions,
        law=law,
        parameters=parameters,
        sizes=dict(sizes),
        units=units,
        width=width,
        length=length,
        conductances=np.array(conductances).reshape(len(conductances), count),
        currents=np.array(currents).reshape(len(currents), count),
    )
