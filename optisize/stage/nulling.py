"""The differential input at which the output stands at a wanted voltage: operating point and input solved together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
from optisize.stage.active import Active
from optisize.stage.bias import SETTLED, STEP_LIMIT, regular_solve
from optisize.stage.network import Network

ITERATIONS = 30


@dataclass(frozen=True)
class Null:
    """Where the output stands as wanted.

    Attributes:
        v: node voltages, (A, N), the inputs' with them.
        input: differential input voltage [V], (N,).
        found: whether it was found, (N,) of bool.
    """

    v: Array
    input: Array
    found: NDArray[np.bool_]


@np.errstate(all="ignore")
def null(network: Network, start: Array, drive: Array, weights: Array, wanted: Array) -> Null:
    """Solve node voltages and differential input so that the output is as wanted.

    Args:
        network: N designs.
        start: node voltages (A, N) to start from.
        drive: how one volt at the differential input moves the driven nodes, (A,).
        weights: of the unknown nodes in the output, (U,).
        wanted: output voltage, (N,).
    """
    v, applied = start.copy(), np.zeros(network.designs)
    found = np.zeros(network.designs, dtype=bool)
    active, part = Active(network.designs), network
    pv, pa, goal = v.copy(), applied.copy(), wanted
    for _ in range(ITERATIONS):
        fresh = active.fresh(_step(part, pv, pa, drive, weights, goal) < SETTLED)
        done = active.designs(fresh)
        v[:, done], applied[done], found[done] = pv.take(fresh, axis=1), pa[fresh], True
        left = active.thinned()
        if left is not None:
            if not len(left):
                break
            part, pv, pa, goal = part.take(left), pv.take(left, axis=1), pa[left], goal[left]
    return Null(v, applied, found)


def _step(network: Network, v: Array, applied: Array, drive: Array, weights: Array, wanted: Array) -> Array:
    """Move node voltages and input in place by one damped step; return the size of the full step, (N,) [V]."""
    unknowns = network.wiring.unknowns
    terminals = network.terminals(v)
    equations = network.equations(terminals, network.law.drain(*terminals.of_law), drive[:, None])
    right = np.stack([-equations.residual, -equations.pulls[:, 0]], axis=1)
    toward = regular_solve(network, equations.matrix, right)
    step = (wanted - weights @ v[:unknowns] - weights @ toward[:, 0]) / (weights @ toward[:, 1])
    change = toward[:, 0] + step * toward[:, 1]
    size = np.abs(change).max(axis=0)
    damping = np.where(np.isfinite(size), STEP_LIMIT / np.maximum(size, STEP_LIMIT), 0.0)
    change, step = (np.where(damping > 0.0, x * damping, 0.0) for x in (change, step))
    v[:unknowns] += change
    v[unknowns:] += step * drive[unknowns:, None]
    applied += step
    return size
