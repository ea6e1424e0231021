"""The differential input at which the output stands at a wanted voltage: operating point and input solved together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array
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
    unknowns = network.wiring.unknowns
    v, applied = start.copy(), np.zeros(network.designs)
    found = np.zeros(network.designs, dtype=bool)
    active: NDArray[np.intp] = np.arange(network.designs)
    part, pv, pa, goal, over = network, v.copy(), applied.copy(), wanted, found.copy()
    for _ in range(ITERATIONS):
        terminals = part.terminals(pv)
        equations = part.equations(terminals, part.law.drain(*terminals.of_law), drive[:, None])
        right = np.stack([-equations.residual, -equations.pulls[:, 0]], axis=1)
        toward = regular_solve(part, equations.matrix, right)
        step = (goal - weights @ pv[:unknowns] - weights @ toward[:, 0]) / (weights @ toward[:, 1])
        change = toward[:, 0] + step * toward[:, 1]
        size = np.abs(change).max(axis=0)
        damping = np.where(np.isfinite(size), STEP_LIMIT / np.maximum(size, STEP_LIMIT), 0.0)
        change, step = (np.where(damping > 0.0, x * damping, 0.0) for x in (change, step))
        pv[:unknowns] += change
        pv[unknowns:] += step * drive[unknowns:, None]
        pa += step
        # Each design is read at its own last step, so that it does not depend on those beside it.
        fresh = np.flatnonzero((size < SETTLED) & ~over)
        done = active[fresh]
        v[:, done], applied[done] = pv.take(fresh, axis=1), pa[fresh]
        found[done] = over[fresh] = True
        if 3 * np.count_nonzero(over) > len(over):
            left = np.flatnonzero(~over)
            active = active[left]
            if not len(active):
                break
            part, pv, pa, goal, over = part.take(left), pv.take(left, axis=1), pa[left], goal[left], over[left]
    return Null(v, applied, found)
