"""One population of sized stages, solved as far as it is asked: every measure takes what it needs from here.

Each quantity is computed when it is first asked for and kept, so a measure that nobody asks for costs nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable
from functools import cached_property
from typing import Any, TypeVar, cast

import numpy as np
from numpy.typing import NDArray

from optisize.process.card import thermal_voltage
from optisize.process.law import Array, Capacitances, Drain, Saturation
from optisize.stage.bias import OperatingPoint, operating_point, settle
from optisize.stage.circuit import Circuit
from optisize.stage.excursion import Linearised, follow
from optisize.stage.linear import Transfer, crossing, solve
from optisize.stage.network import Equations, Network, Terminals
from optisize.stage.nulling import null
from optisize.stage.wiring import Moving, moving

RANGE_SETTLED = 2e-3  # V; leaves less than 0.1 mV at the ends of the range, where only the headroom is read
Kept = TypeVar("Kept")
# A gain that should not be there is rounding, hence zero, below this part of the terms that it is summed from, or below
# this part of the differential gain of a stage whose outputs stand on gigaohms.
UNLIMITED, UNLIMITED_GAIN = 1e-11, 2e-14


class Analysis:
    """The solved and linearised stages of N designs; arrays end in the designs' axis.

    Attributes:
        matched: whether devices that are drawn alike are alike.
    """

    matched = True

    def __init__(self, circuit: Circuit) -> None:
        """Take the sized designs; nothing is solved yet."""
        self.circuit = circuit
        self.wiring = circuit.wiring
        self.topology = circuit.topology
        self._kept: dict[Hashable, object] = {}

    def once(self, key: Hashable, make: Callable[[], Kept]) -> Kept:
        """Return what `make` makes, made once under a key."""
        if key not in self._kept:
            self._kept[key] = make()
        return cast(Kept, self._kept[key])

    @cached_property
    def point(self) -> OperatingPoint:
        """The operating point in the middle of the common-mode range."""
        middle = np.full(self.circuit.designs, self.circuit.conditions.middle)
        return operating_point(self.circuit, self.circuit.driven(middle, middle))

    @cached_property
    def moving(self) -> tuple[Moving, Network]:
        """The part of the stages that the inputs can move; the rest stays as it is at the operating point."""
        part = moving(self.topology)
        network = self.circuit.network.part(part)
        return part, (network.single if self.coarse is np.float32 else network)

    @property
    def alike(self) -> bool:
        """Whether both sides of each design are alike, so that one tells what the other does."""
        return self.topology.symmetric

    @cached_property
    def coarse(self) -> Any:
        """The precision of what is known to a part in ten thousand only: single, unless supply or gain are high.

        Single precision holds exp(v / 2 ut) up to 88; a node may go half a volt beyond the rails.
        """
        conditions = self.circuit.conditions
        highest = (conditions.supply + 1.0) / (2.0 * float(thermal_voltage(conditions.temperature)))
        return np.float32 if highest < 85.0 and not self.topology.delicate else np.float64

    def take(self, columns: NDArray[np.intp]) -> Analysis:
        """Return the analysis of some of the designs, with their operating points."""
        part = Analysis(self.circuit.take(columns))
        part.point = OperatingPoint(self.point.v[:, columns], self.point.converged[columns])
        return part

    @cached_property
    def converged(self) -> Any:
        """Which designs have an operating point in the middle of the common-mode range that the law knows, (N,)."""
        outside = self.outside
        return self.point.converged if outside is None else self.point.converged & ~outside.any(axis=0)

    @property
    def why_unsolved(self) -> str:
        """Why the first design has no measures."""
        names = [t.name for t in self.wiring.transistors]
        told = self.circuit.law.why_outside(names, *self.terminals.of_law) if self.point.converged[0] else []
        return "; ".join(told) or "has no operating point between the rails under these conditions"

    @cached_property
    def outside(self) -> NDArray[np.bool_] | None:
        """Which transistors are where their law knows nothing of them, (T, N); None of a law that holds everywhere."""
        return self.circuit.law.outside(*self.terminals.of_law)

    @cached_property
    def terminals(self) -> Terminals:
        """The voltages at the terminals."""
        return self.circuit.network.terminals(self.point.v)

    @cached_property
    def _solved(self) -> tuple[Drain, Saturation]:
        return self.circuit.law.drain_and_saturation(*self.terminals.of_law)

    @property
    def drain(self) -> Drain:
        """Currents and derivatives of the transistors, (T, N)."""
        return self._solved[0]

    @property
    def saturation(self) -> Saturation:
        """Saturation voltages and inversion levels, (T, N)."""
        return self._solved[1]

    @cached_property
    def drives(self) -> Array:
        """The differential and the common-mode drive over all nodes, (A, 2): half a volt each way, one volt."""
        differential = self.wiring.drive(positive=0.5, negative=-0.5)
        return np.stack([differential, self.wiring.drive(positive=1.0, negative=1.0)], axis=1)

    @cached_property
    def equations(self) -> Equations:
        """The linearised equations with both drives."""
        whole = self.circuit.network.equations(self.terminals, self.drain, self.drives)
        if self.leak is None:
            return whole
        unknowns = self.wiring.unknowns
        moved = np.tensordot(self.wiring.leak_stamp[:, :unknowns], self.leak, 1)
        pulled = np.tensordot(np.einsum("uae,ak->uke", self.wiring.leak_stamp, self.drives), self.leak, 1)
        return Equations(whole.residual, whole.matrix + moved, whole.pulls + pulled)

    @cached_property
    def leak(self) -> Array | None:
        """The slopes of what flows from drains to the bulk, in the order of the wiring's stamp, (3T, N); None if none.

        It is small beside the current, so that the operating point leaves it in the channel; its slopes are not, where
        common-mode gains are.
        """
        found = self.circuit.law.leak(self.drain, *self.terminals.of_law)
        return None if found is None else np.concatenate([found.gm, found.gds, found.gms])

    @cached_property
    def slopes(self) -> Array:
        """The derivatives of all branches in the order of the wiring's conductance stamp, (3T + L, N)."""
        return np.concatenate([self.drain.gm, self.drain.gds, self.drain.gms, self.circuit.network.conductances])

    @property
    def matrix(self) -> Array:
        """The conductance matrix between the unknown nodes, (U, U, N)."""
        return self.equations.matrix

    @property
    def pulls(self) -> Array:
        """How the residual moves with the two drives, (U, 2, N)."""
        return self.equations.pulls

    @cached_property
    def responses(self) -> Array:
        """How the unknown nodes move with the two drives, (U, 2, N)."""
        return solve(self.matrix, -self.pulls, self.wiring.conductance_pattern)

    @cached_property
    def adm(self) -> Array:
        """Differential gain of the output, signed, (N,)."""
        return self.wiring.output(self.responses[:, 0])

    @cached_property
    def acm(self) -> Array:
        """Common-mode gain, signed, (N,).

        Of a single-ended output: its own change. Of a differential output: that of its common mode, the mean of the
        two sides. Exactly zero where the figure is no more than the rounding of the terms that it is summed from.
        """
        if self.topology.mean_is_held:
            return np.zeros(self.circuit.designs)
        return self.beyond_rounding(self.wiring.mean_weights @ self.responses[:, 1])

    @cached_property
    def common_to_difference(self) -> Array:
        """Gain from the common mode to the difference of the two sides of a differential output, (N,)."""
        return self.beyond_rounding(self.wiring.output(self.responses[:, 1]))

    def beyond_rounding(self, gain: Array) -> Array:
        """Return a gain to the output, exactly zero where it is no more than the rounding of its terms, (N,)."""
        rounding = np.maximum(UNLIMITED * self._rounding_scale, UNLIMITED_GAIN * np.abs(self.adm))
        return np.where(np.abs(gain) < rounding, 0.0, gain)

    @cached_property
    def _rounding_scale(self) -> Array:
        """The size of the terms that cancel in the common-mode gain: gms times the resistance at the output."""
        node = self.wiring.index[self.topology.output[0][0]]
        row = self.wiring.rows["input.n"]
        return np.maximum(self.drain.gms[row] / np.maximum(self.matrix[node, node], 1e-30), 1.0)

    @cached_property
    def capacitances(self) -> Capacitances:
        """Gate capacitances of the transistors, (T, N)."""
        return self.circuit.law.capacitances(*self.terminals.of_law)

    @cached_property
    def capacitance_branches(self) -> Array:
        """All capacitances [F] in the order of the wiring's stamp, (5T + R + 1, N)."""
        gate, drawn, p, law = self.capacitances, self.circuit.drawn, self.circuit.parameters, self.circuit.law
        return np.concatenate(
            [
                gate.cgs,
                gate.cgd,
                gate.cgb,
                law.junctions(p, drawn.drain_area, drawn.drain_edge, self.terminals.drain),
                law.junctions(p, drawn.source_area, drawn.source_edge, self.terminals.source),
                self.circuit.resistor_capacitances,
                np.full((1, self.circuit.designs), self.circuit.conditions.load_capacitance),
            ]
        )

    @cached_property
    def capacitance_matrix(self) -> Array:
        """The capacitance matrix between the unknown nodes, (U, U, N)."""
        w = self.wiring
        stamp = w.capacitance_stamp[:, : w.unknowns].reshape(w.unknowns**2, -1)
        return (stamp @ self.capacitance_branches).reshape(w.unknowns, w.unknowns, -1)

    @cached_property
    def output_capacitance(self) -> Array:
        """All capacitance at one output node [F], (N,)."""
        node = self.wiring.index[self.topology.output[0][0]]
        return self.capacitance_matrix[node, node]

    @cached_property
    def differential_transfer(self) -> Transfer:
        """The output over the differential input as a function of frequency."""
        w = self.wiring
        pull_c = np.tensordot(w.capacitance_stamp, self.drives[:, 0], (1, 0)) @ self.capacitance_branches
        return Transfer(self.matrix, self.capacitance_matrix, self.pulls[:, 0], pull_c, w.output_weights, w.pattern)

    def gain_crossing(self, level: Array) -> Array:
        """Return the frequency [Hz] at which |Adm(0)/Adm(f)|^2 - 1 has risen to `level`, (N,).

        Not a number where it never does, or where the level is not above zero.
        """
        result = np.full(self.circuit.designs, np.nan)
        columns = np.flatnonzero(level > 1e-6)
        if len(columns):
            part = level[columns]
            start = self._first_pole[columns] * np.sqrt(part)
            result[columns] = crossing(self.differential_transfer.take(columns), part, start) / (2.0 * np.pi)
        return result

    @cached_property
    def unity_crossing(self) -> Array:
        """Frequency [Hz] at which the differential gain has fallen to one, (N,); zero where it is no more at DC."""
        excess = self.adm**2 - 1.0
        return np.where(excess > 1e-6, self.gain_crossing(excess), 0.0)

    @cached_property
    def unity_phase(self) -> Array:
        """Phase of the differential gain there against that at DC [degrees], (N,); not a number where there is none."""
        result = np.full(self.circuit.designs, np.nan)
        columns = np.flatnonzero(self.unity_crossing > 0.0)
        if len(columns):
            transfer = self.differential_transfer.take(columns)
            turned = transfer.at(2.0 * np.pi * self.unity_crossing[columns]) / self.adm[columns]
            degrees = np.angle(turned, deg=True)
            result[columns] = np.where(degrees > 90.0, degrees - 360.0, degrees)
        return result

    @cached_property
    def offset(self) -> Array:
        """Differential input [V] that brings one output to where the next stage wants it, (N,); zero without a wish."""
        wanted = self.circuit.conditions.output_common_mode
        if wanted is None or len(self.topology.output) > 1:
            return np.zeros(self.circuit.designs)
        goal = np.full(self.circuit.designs, wanted)
        found = null(self.circuit.network, self.point.v, self.drives[:, 0], self.wiring.output_weights, goal)
        return np.where(found.found, found.input, np.nan)

    @cached_property
    def _first_pole(self) -> Array:
        """First-moment estimate of the dominant pole [rad/s], (N,)."""
        w = self.wiring
        moved = np.einsum("uvn,vn->un", self.capacitance_matrix, self.responses[:, 0])
        moment = w.output(solve(self.matrix, moved[:, None], w.conductance_pattern)[:, 0])
        return np.abs(self.adm) / np.maximum(np.abs(moment), 1e-30)

    @cached_property
    def room(self) -> Array:
        """Smallest vds - vdsat of the transistors that have to be saturated, worst over the range [V], (N,).

        The ends of the common-mode range are the worst. Not a number where one has no operating point.
        """
        low, high = self.circuit.conditions.common_mode
        if low == high:
            return self.room_at_rest
        part, network = self.moving
        every = np.arange(self.circuit.designs)
        twice, common = network.take(np.concatenate([every, every])), np.repeat([low, high], len(every))
        start = np.concatenate([self.point.v, self.point.v], axis=1)
        change = np.concatenate([self.responses[:, 1], self.responses[:, 1]], axis=1)
        start[: self.wiring.unknowns] += change * (common - self.circuit.conditions.middle)
        start = np.minimum(np.maximum(start, 0.0), self.circuit.conditions.supply)[part.nodes]
        for node in ("in+", "in-"):
            start[part.wiring.index[node]] += common - self.circuit.conditions.middle
        ends = settle(twice, start.astype(self.coarse), RANGE_SETTLED)
        terminals = twice.terminals(ends.v)
        room = _room(twice, terminals, twice.law.saturation(*terminals.of_law))
        room = np.where(ends.converged, room, np.nan).reshape(2, -1)
        return np.minimum(np.minimum(room[0], room[1]), self.room_at_rest)

    @cached_property
    def room_at_rest(self) -> Array:
        """Smallest vds - vdsat in the middle of the common-mode range [V], (N,)."""
        return _room(self.circuit.network, self.terminals, self.saturation)

    def moving_at_rest(self, drive: int) -> Linearised:
        """Return the linearised moving part with the differential drive (0) or the common one (1)."""
        part, _ = self.moving
        rows, solved = part.transistors, part.nodes[: part.wiring.unknowns]
        gate, drain, source = (x[rows] for x in self.terminals.of_law)
        residual, matrix, pulls = self.equations
        return Linearised(
            Terminals(gate, drain, source, self.terminals.linear[part.linear]),
            Drain(*(x[rows] for x in self.drain)),
            Saturation(*(x[rows] for x in self.saturation)),
            Equations(residual[solved], matrix[np.ix_(solved, solved)], pulls[solved, drive : drive + 1]),
        )

    @cached_property
    def output_excursions(self) -> tuple[Array, Array]:
        """How far the output can go down and up from its rest [V], each (N,).

        Zero where a transistor is out of saturation at rest; not a number where the end was not found. Where both
        sides of the stage are alike, what one side does under one drive the other does under the opposite one.
        """
        reach = np.zeros((2, self.circuit.designs))
        columns = np.flatnonzero(self.room_at_rest > 0.0)
        if not len(columns):
            return reach[0], reach[1]
        part, network = self.moving
        alike = self.alike
        chosen = columns if alike else np.concatenate([columns, columns])
        sign = np.ones(len(columns)) if alike else np.repeat([-1.0, 1.0], len(columns))
        start: Any = self.point.v[part.nodes].take(chosen, axis=1).astype(self.coarse)
        rest = self.moving_at_rest(0).take(chosen, self.coarse)
        drive, sign = self.drives[part.nodes, 0].astype(self.coarse), sign.astype(self.coarse)
        end = follow(network.take(chosen), start, rest, drive, sign)
        moved = np.where(end.found, end.v - start, np.nan)
        up = np.abs(part.wiring.output(moved))
        if alike:
            reach[0, columns], reach[1, columns] = np.abs(part.wiring.output(moved, mirrored=True)), up
        else:
            reach[:, columns] = up.reshape(2, -1)
        return reach[0], reach[1]


def _room(network: Network, terminals: Terminals, saturation: Saturation) -> Array:
    rows = network.wiring.saturating
    return (terminals.vds.take(rows, axis=0) - saturation.vdsat.take(rows, axis=0)).min(axis=0)
