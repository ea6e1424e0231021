"""The equations of a stage: all that Newton reads, for a whole population at once."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np

from optisize.process.law import Array, Drain, Law, Pick, picked
from optisize.stage.wiring import Moving, Wiring


class Terminals(NamedTuple):
    """Voltages for node voltages (A, ...).

    Attributes:
        gate, drain, source: of the transistors, relative to the bulk and in n-channel sense, each (T, ...).
        linear: of the linear branches: across the resistors, and what the controls leave, (L, ...).
    """

    gate: Array
    drain: Array
    source: Array
    linear: Array

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
class Network:
    """Elements between nodes, for N designs.

    Attributes:
        wiring: the constant arrays of the topology.
        supply: supply voltage [V].
        law: the transistor law of the T transistors.
        conductances: of the linear branches, (L, N): of resistors, and one siemens for a control.
        currents: of the sources, (S, N), signed from a to b.
    """

    wiring: Wiring
    supply: float
    law: Law
    conductances: Array
    currents: Array
    designs: int

    def take(self, columns: Pick) -> Network:
        """Return the same network for some of the designs."""
        count = len(range(self.designs)[columns]) if isinstance(columns, slice) else len(columns)
        return Network(
            self.wiring,
            self.supply,
            self.law.take(slice(None), columns),
            picked(self.conductances, columns),
            picked(self.currents, columns),
            count,
        )

    @property
    def single(self) -> Network:
        """The same in single precision, for what need not be known to more than a part in ten thousand."""
        conductances: Any = self.conductances.astype(np.float32)
        currents: Any = self.currents.astype(np.float32)
        return Network(self.wiring.single, self.supply, self.law.single(), conductances, currents, self.designs)

    def part(self, moving: Moving) -> Network:
        """Return the part of the network that the inputs can move."""
        return Network(
            moving.wiring,
            self.supply,
            self.law.take(moving.transistors, slice(None)),
            self.conductances[moving.linear],
            self.currents[moving.sources],
            self.designs,
        )

    def terminals(self, v: Array) -> Terminals:
        """Return the voltages at the terminals for node voltages (A, ...)."""
        t = len(self.wiring.transistors)
        stacked = self.wiring.terminal_stamp @ v.reshape(v.shape[0], -1)
        stacked = stacked.reshape(-1, *v.shape[1:])
        return Terminals(stacked[:t], stacked[t : 2 * t], stacked[2 * t : 3 * t], stacked[3 * t :])

    def branch_currents(self, terminals: Terminals, drain: Drain) -> Array:
        """Return the currents of all branches (T + L + S, N), from drain to source and from a to b."""
        through = terminals.linear * self.conductances
        return np.concatenate([drain.id * self.wiring.polarity, through, self.currents])

    def equations(self, terminals: Terminals, drain: Drain, drives: Array | None = None) -> Equations:
        """Return the linearised equations at node voltages.

        Args:
            terminals: the voltages at the terminals.
            drain: current and derivatives of the transistors there.
            drives: K patterns over all nodes, (A, K).
        """
        u = self.wiring.unknowns
        through = terminals.linear * self.conductances
        branches = np.concatenate([drain.id, drain.gm, drain.gds, drain.gms, through, self.conductances, self.currents])
        rows = self.wiring.equation_stamp(drives) @ branches
        end = u + u * u
        return Equations(rows[:u], rows[u:end].reshape(u, u, -1), rows[end:].reshape(u, -1, rows.shape[1]))
