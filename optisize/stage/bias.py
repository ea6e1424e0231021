"""The operating point of a whole population by damped Newton iteration."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array, Law
from optisize.stage.active import Active
from optisize.stage.circuit import Circuit
from optisize.stage.linear import solve
from optisize.stage.network import Network
from optisize.stage.topology import INPUTS

ITERATIONS = 40
BEYOND = 0.5  # V; how far beyond the rails a node may be sought
PINNED = 5  # steps against that bound after which a design is given up: it has no operating point inside
STEP_LIMIT = 0.25  # V; a step of any node beyond it shortens the whole step
SETTLED = 3e-8  # V; the step after which the next one would be at rounding (convergence is quadratic)
LEAK = 1e-15  # S; keeps the matrix regular where every device at a node is off; not in the residual


@dataclass(frozen=True)
class OperatingPoint:
    """Node voltages (A, N), the unknown nodes first, and which designs converged (N,) of bool."""

    v: Array
    converged: NDArray[np.bool_]


class _Start:
    """What the first guesses of a topology ask for; see `topology.Start`."""

    def __init__(self, circuit: Circuit, driven: Array) -> None:
        self._circuit = circuit
        self._driven = dict(zip(circuit.topology.driven, driven, strict=True))

    def rail(self, node: str) -> Array:
        return self._driven[self._circuit.topology.rail(node)]

    def size(self, name: str) -> Array:
        return self._circuit.sizes[name]

    def tail_current(self) -> Array:
        return self._circuit.topology.tail_current(self)

    def half(self) -> Array:
        tail, leg = self.tail_current(), self._circuit.topology.leg
        return 0.5 * np.maximum(tail - self.size(leg), 0.05 * tail) if leg else 0.5 * tail

    def height(self) -> Array:
        return self.distance(0.5 * (self._driven["in+"] + self._driven["in-"]))

    def toward_load(self, voltage: Array, by: Array) -> Array:
        return voltage + self._circuit.topology.polarity * by

    def away(self, node: str, voltage: Array) -> Array:
        rail = self.rail(node)
        supply = self._driven["supply"]
        return np.where(rail > 0.5 * supply, rail - voltage, rail + voltage)

    def distance(self, voltage: Array) -> Array:
        return np.abs(voltage - self.rail("tail_rail"))

    def gate_drive(self, transistor: str, current: Array, source: Array | float = 0.0) -> Array:
        return self._law(transistor).gate_voltage(current[None], np.atleast_2d(source))[0]

    def under(self, transistor: str, current: Array, gate: Array) -> Array:
        return self._law(transistor).source_voltage(current[None], gate[None])[0]

    def follow(self, transistor: str, current: Array) -> Array:
        topology, supply = self._circuit.topology, self._driven["supply"]
        common = 0.5 * (self._driven["in+"] + self._driven["in-"])
        if topology.bulk == "source":
            return common - topology.polarity * self.gate_drive(transistor, current)
        if INPUTS[topology.input] == "n":
            return self.under(transistor, current, common)
        return supply - self.under(transistor, current, supply - common)

    def _law(self, transistor: str) -> Law:
        row = self._circuit.wiring.rows[transistor]
        return self._circuit.law.take(slice(row, row + 1), slice(None))


def first_guess(circuit: Circuit, driven: Array) -> Array:
    """Return node voltages (A, N) to start Newton from, each inside the rails."""
    start = _Start(circuit, driven)
    unknown = np.array([guess(start) for _, guess in circuit.topology.guesses])
    supply = circuit.conditions.supply
    return np.concatenate([np.clip(unknown, 0.02 * supply, 0.98 * supply), driven])


def operating_point(circuit: Circuit, driven: Array) -> OperatingPoint:
    """Solve the operating point of every design from the topology's own first guess.

    Args:
        circuit: N sized designs.
        driven: voltages of the driven nodes, (K, N).

    Returns:
        Node voltages, always finite, and a flag for each design. A design that has not converged keeps its guess.
    """
    return settle(circuit.network, first_guess(circuit, driven))


@np.errstate(all="ignore")
def settle(network: Network, start: Array, settled: float = SETTLED, iterations: int = ITERATIONS) -> OperatingPoint:
    """Solve the unknown node voltages of every design.

    Args:
        network: N designs.
        start: node voltages (A, N) to start from, with those of the driven nodes.
        settled: the step [V] after which a design is done; convergence is quadratic, so what is left is about its
            square over 50 mV.
        iterations: at the most; fewer where the start is near.

    Returns:
        As `operating_point`.
    """
    v = start.copy()
    converged = np.zeros(network.designs, dtype=bool)
    active, part, moving = Active(network.designs), network, v.copy()
    pinned = np.zeros(network.designs, dtype=int)
    for _ in range(iterations):
        fresh = active.fresh(newton_step(part, moving) < settled)
        done = active.designs(fresh)
        v[:, done] = moving.take(fresh, axis=1)
        converged[done] = True
        pinned = np.where(_at_bound(part, moving), pinned + 1, 0)
        active.give_up(pinned >= PINNED)
        left = active.thinned()
        if left is not None:
            if not len(left):
                break
            part, moving, pinned = part.take(left), moving.take(left, axis=1), pinned[left]
    return OperatingPoint(v, converged)


def newton_step(network: Network, v: Array) -> Array:
    """Move the unknown node voltages `v` in place by one damped step; return the size of the full step, (N,) [V]."""
    terminals = network.terminals(v)
    equations = network.equations(terminals, network.law.drain(*terminals.of_law))
    step = regular_solve(network, equations.matrix, -equations.residual[:, None])[:, 0]
    size = np.abs(step).max(axis=0)
    if not size.max() < STEP_LIMIT:
        step = np.where(np.isfinite(step), step, 0.0)
        size = np.where(np.isfinite(size), size, np.inf)
        step = step * (STEP_LIMIT / np.maximum(size, STEP_LIMIT))
    nodes = v[: network.wiring.unknowns]
    nodes += step
    np.maximum(nodes, -BEYOND, out=nodes)
    np.minimum(nodes, network.supply + BEYOND, out=nodes)
    return size


def regular_solve(network: Network, matrix: Array, right: Array) -> Array:
    """Solve the nodal equations; where every device at a node is off, a leak to ground keeps them regular."""
    pattern = network.wiring.conductance_pattern
    solution = solve(matrix, right, pattern)
    if np.isfinite(solution.sum()):
        return solution
    bad = np.flatnonzero(~np.isfinite(solution.sum(axis=(0, 1))))
    leaky, unknowns = matrix[..., bad], np.arange(len(matrix))
    leaky[unknowns, unknowns] += LEAK
    solution[..., bad] = solve(leaky, right[..., bad], pattern)
    return solution


def _at_bound(network: Network, v: Array) -> NDArray[np.bool_]:
    """Tell which designs have a node at the bound of the search, (N,)."""
    nodes = v[: network.wiring.unknowns]
    return (nodes.min(axis=0) <= -BEYOND) | (nodes.max(axis=0) >= network.supply + BEYOND)
