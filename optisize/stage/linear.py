"""Linear algebra and small-signal transfer over whole populations: matrices (U, U, N), the last axis is the designs."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array, Pick
from optisize.stage.active import Active

Pattern = tuple[tuple[bool, ...], ...]


@dataclass(frozen=True)
class Elimination:
    """The order and the steps of eliminating matrices of one sparsity: worked out once, followed for every batch.

    Attributes:
        order: the unknowns in the order of their elimination, fewest neighbours first; one whose own equation does not
            contain it (a controlled node) only after others have brought it in.
        steps: for each of them, the later rows it enters and the later columns it has, fill-in included.
    """

    order: tuple[int, ...]
    steps: tuple[tuple[tuple[int, ...], tuple[int, ...]], ...]


@lru_cache(maxsize=256)
def elimination(pattern: Pattern) -> Elimination:
    """Plan the elimination of matrices whose nonzero elements are known.

    Args:
        pattern: (U, U), which elements may differ from zero.
    """
    filled = np.array(pattern, dtype=bool)
    left = list(range(len(pattern)))
    order, steps = [], []
    while left:
        ready = [i for i in left if filled[i, i]] or left
        k = min(ready, key=lambda i: (filled[left, i].sum() - 1) * (filled[i, left].sum() - 1))
        left.remove(k)
        rows = tuple(i for i in left if filled[i, k])
        columns = tuple(j for j in left if filled[k, j])
        filled[np.ix_(rows, columns)] = True
        order.append(k)
        steps.append((rows, columns))
    return Elimination(tuple(order), tuple(steps))


def solve(matrix: NDArray[Any], right: NDArray[Any], pattern: Pattern | None = None) -> NDArray[Any]:
    """Solve N small systems at once by elimination without exchange of rows.

    Nodal matrices of transistor stages need none: each diagonal is the sum of the conductances at its node, or, of a
    controlled node, what the elimination of those that it acts on leaves there. A design
    whose pivot vanishes comes out as not finite; the caller silences the warning and flags it.

    Args:
        matrix: (U, U, N), real or complex; not changed.
        right: (U, K, N); not changed.
        pattern: which elements of the matrix may differ from zero; all where None, which a controlled node's zero
            on the diagonal does not allow.

    Returns:
        The solutions, (U, K, N).
    """
    size = matrix.shape[0]
    plan = elimination(pattern if pattern is not None else ((True,) * size,) * size)
    row = [list(part) for part in matrix]
    known = list(right)
    inverse = row[0][:]
    for k, (rows, columns) in zip(plan.order, plan.steps, strict=True):
        inverse[k] = 1.0 / row[k][k]
        for i in rows:
            factor = row[i][k] * inverse[k]
            for j in columns:
                row[i][j] = row[i][j] - factor * row[k][j]
            known[i] = known[i] - factor * known[k]
    solution = np.empty_like(right)
    for k, (_, columns) in zip(reversed(plan.order), reversed(plan.steps), strict=True):
        for j in columns:
            known[k] = known[k] - row[k][j] * solution[j]
        np.multiply(known[k], inverse[k], out=solution[k])
    return solution


@dataclass(frozen=True)
class Transfer:
    """A transfer function H(jw) of N designs: matrices, drive and output.

    Attributes:
        conductance, capacitance: matrices between the unknown nodes, (U, U, N).
        pull_g, pull_c: how the drive enters the residual through conductances and capacitances, (U, N).
        output: weights of the nodes in the output, (U,).
        pattern: which elements of the matrices may differ from zero; all where None.
    """

    conductance: Array
    capacitance: Array
    pull_g: Array
    pull_c: Array
    output: Array
    pattern: Pattern | None = None

    def take(self, columns: Pick) -> Transfer:
        """Return the transfer functions of some of the designs."""
        return Transfer(
            self.conductance[..., columns],
            self.capacitance[..., columns],
            self.pull_g[:, columns],
            self.pull_c[:, columns],
            self.output,
            self.pattern,
        )

    def at(self, w: Array) -> NDArray[np.complex128]:
        """Return H at angular frequencies [rad/s] of shape (N,)."""
        matrix = self.conductance + (1j * w) * self.capacitance
        response = solve(matrix, -(self.pull_g + (1j * w) * self.pull_c)[:, None], self.pattern)[:, 0]
        return self.output @ response

    @cached_property
    def rest(self) -> Array:
        """|H(0)|^2, (N,)."""
        response = solve(self.conductance, -self.pull_g[:, None], self.pattern)[:, 0]
        return (self.output @ response) ** 2

    def fall(self, log_w: Array) -> Array:
        """Return ln(|H(0)/H(w)|^2 - 1) at a logarithmic frequency: 2 ln(w/wp) exactly for a single pole."""
        h = self.at(np.exp(log_w))
        return np.log(np.maximum(self.rest / (h.real**2 + h.imag**2) - 1.0, 1e-12))


CROSSING_STEPS = 5
SEARCHED_POINTS = (32, 24, 24, 24)  # of the grids of a search, each between two points of the one before
CROSSING_DONE = 1e-4  # of the logarithmic frequency; the secant method leaves about its square


@np.errstate(all="ignore")
def crossing(transfer: Transfer, level: Array, start: Array) -> Array:
    """Return the angular frequency at which a transfer has fallen to a given level.

    The secant method on the logarithm of the frequency, where the fall is close to a straight line of slope two; the
    few designs where that does not settle are searched on a grid of frequencies.

    Args:
        transfer: of N designs.
        level: |H(0)/H|^2 - 1 at the crossing, (N,): 1 for -3 dB, |H(0)|^2 - 1 for unity gain; must be positive.
        start: first estimate of the angular frequency, (N,).

    Returns:
        Angular frequency [rad/s], (N,); not a number where there is no crossing.
    """
    target = np.log(level)
    result = np.full(len(level), np.nan)
    active, part, x0 = Active(len(level)), transfer, np.log(start)
    f0 = part.fall(x0) - target
    x1 = x0 - np.clip(0.5 * f0, -3.0, 3.0)
    every: Pick = slice(None)
    for _ in range(CROSSING_STEPS):
        f1 = part.fall(x1) - target[active.designs(every)]
        slope = (f1 - f0) / (x1 - x0)
        # A slope far from that of one to four poles says that the points are too near or not on the fall.
        slope = np.where((slope > 0.3) & (slope < 12.0), slope, 2.0)
        step = np.clip(-f1 / slope, -2.0, 2.0)
        x0, f0, x1 = x1, f1, x1 + step
        fresh = active.fresh(np.abs(step) < CROSSING_DONE)
        result[active.designs(fresh)] = np.exp(x1[fresh])
        left = active.thinned()
        if left is not None:
            if not len(left):
                return result
            part, x0, x1, f0 = part.take(left), x0[left], x1[left], f0[left]
    part = part.take(active.rest())
    missing = active.designs(every)
    if len(missing):
        result[missing] = _searched_crossing(part, target[missing], np.log(start[missing]))
    return result


def _searched_crossing(transfer: Transfer, target: Array, middle: Array) -> Array:
    """Return the first crossing on a grid of frequencies around the estimate, refined thrice; else NaN."""
    low, span = middle - 7.0, np.full(len(target), 19.0)
    result = np.full(len(target), np.nan)
    left: NDArray[np.intp] = np.arange(len(target))
    for points in SEARCHED_POINTS:
        grid = low + span * np.linspace(0.0, 1.0, points)[:, None]
        every = transfer.take(np.tile(left, points))
        above = every.fall(grid.ravel()).reshape(grid.shape) > target[left]
        first = above.argmax(axis=0)
        there = np.flatnonzero(above.any(axis=0) & (first > 0))
        left, span = left[there], span[there] / (points - 1)
        low = grid[first[there] - 1, there]
    result[left] = np.exp(low + 0.5 * span)
    return result
