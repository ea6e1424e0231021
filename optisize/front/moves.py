"""From a sizing by hand towards a design of the front that beats it: the fewest single changes that recover most of it.

Each change sets one size to the design's value, or a part of the way there on a logarithmic scale, snapped to what can
be drawn. All sets of one change are tried, then all of two, and so on, as columns of one batch each, until a set does:
it recovers `ENOUGH`, leaves no goal worse than by hand, and misses no limit that the design meets. Its changes are then
put in the order in which each step recovers most. The whole way in every size leads to the design itself, so there
always is such a set.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations, product
from math import comb

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from optisize.front.preference import spans
from optisize.front.table import measured, sizes_of
from optisize.problem.evaluate import TOLERANCE, Assessed, Problem
from optisize.process.law import Array
from optisize.stage.elements import Size

ENOUGH = 0.8  # of the gap
PARTS = (0.25, 0.5, 0.75, 1.0)  # of the way in one size
MOST = 30_000  # designs that are tried at once; only the whole way where there would be more
SAME = 1e-9  # relative; sizes and losses that differ by less are equal


@dataclass(frozen=True)
class Move:
    """One change of one size.

    Attributes:
        size: which.
        before, after: its values [SI].
        part: of the way to the design's value, 1 for all of it.
        measures: after it and those before it, goals and limits, by name [SI]; not a number without operating point.
        recovered: the share of the gap, after it.
        missed: the limits that are missed after it.
    """

    size: Size
    before: float
    after: float
    part: float
    measures: dict[str, float]
    recovered: float
    missed: tuple[str, ...]


@dataclass(frozen=True)
class Target:
    """The nearest of the designs that beat a sizing, and the first moves towards it.

    Attributes:
        design: its number.
        distance: in sizes, each in ranges of the sizing space on a logarithmic scale.
        sizes: for each size its value by hand and in the design [SI].
        measures: those of the sizing by hand, goals and limits, by name.
        moves: in order; the last one's `recovered` is what they recover in all.
    """

    design: int
    distance: float
    sizes: tuple[tuple[Size, float, float], ...]
    measures: dict[str, float]
    moves: tuple[Move, ...]


def size_distances(problem: Problem, own: Mapping[str, Array], theirs: Mapping[str, Array]) -> Array:
    """Return how far the sizes of N designs are from those of one sizing, (N,).

    Each size counts by the logarithm of its ratio, in that of its range in the problem; a size that the problem fixes
    counts in decades.

    Args:
        own: each size (1,).
        theirs: each size (N,).
    """
    shares = [
        np.log(theirs[r.size.name] / own[r.size.name]) / np.log(r.high / r.low if r.free else 10.0)
        for r in problem.space.ranges
    ]
    return np.sqrt((np.array(shares) ** 2).sum(axis=0))


@dataclass(frozen=True)
class Gap:
    """How far a sizing is from a design that beats it.

    Attributes:
        own, theirs: losses of the sizing and of the design, each (M, 1).
        spans: in which each goal counts, the ranges of the front, (M, 1).
        kept: which limits have to be met at the end: those that the design meets, (L,) of bool.
    """

    own: Array
    theirs: Array
    spans: Array
    kept: NDArray[np.bool_]

    def recovered(self, losses: Array) -> Array:
        """Return the share of the gap that N designs recover, (N,): 0 for the sizing, 1 for the design.

        In each goal no more than the design has counts, so that one goal does not make up for another.
        """
        gap = self.own - self.theirs
        gained = np.minimum(self.own - losses, gap)
        return (gained / self.spans).sum(axis=0) / (gap / self.spans).sum()

    def closed(self, assessed: Assessed) -> NDArray[np.bool_]:
        """Tell which of N designs recover enough, lose in no goal, and miss no limit that the front design meets."""
        limits = (assessed.violations[self.kept] <= TOLERANCE).all(axis=0)
        lost = (assessed.losses > self.own + _slack(self.own)).any(axis=0)
        return (self.recovered(assessed.losses) >= ENOUGH) & limits & ~lost & assessed.solved


def _slack(losses: Array) -> Array:
    return SAME * np.maximum(np.abs(losses), 1.0)


def moves_towards_nearest(
    problem: Problem, sizes: Mapping[str, Array], front: pd.DataFrame, better: Sequence[int]
) -> Target | None:
    """Return the nearest of the designs that beat a sizing, and the first moves towards it.

    The designs are measured again in the problem of the sizing, whose limits and conditions may be others than those
    of the run. None where none of them beats the sizing there and keeps the limits that it meets.

    Args:
        problem: of the sizing.
        sizes: of the sizing, each (1,).
        front: of the run.
        better: the numbers of the designs that beat the sizing.
    """
    rows = front[front["design"].isin(better)]
    theirs = sizes_of(problem, rows)
    values = problem.measure(sizes)
    own, found = problem.judge(values), problem.assess(theirs)
    slack = _slack(own.losses)
    beats = (found.losses <= own.losses + slack).all(axis=0) & (found.losses < own.losses - slack).any(axis=0)
    keeps = ((found.violations <= TOLERANCE) | (own.violations > TOLERANCE)).all(axis=0)
    if not (beats & keeps).any():
        return None
    distance = size_distances(problem, sizes, theirs)
    at = int(np.argmin(np.where(beats & keeps, distance, np.inf)))
    target = {name: column[at : at + 1] for name, column in theirs.items()}
    gap = Gap(own.losses, found.losses[:, at, None], _spans(problem, front), found.violations[:, at] <= TOLERANCE)
    return Target(
        design=int(rows["design"].iloc[at]),
        distance=float(distance[at]),
        sizes=tuple((s, float(sizes[s.name][0]), float(target[s.name][0])) for s in problem.topology.sizes),
        measures={name: float(value[0]) for name, value in values.items()},
        moves=first_moves(problem, sizes, target, gap),
    )


def _spans(problem: Problem, front: pd.DataFrame) -> Array:
    """Return the range of each goal's loss over a front, (M, 1); one where there is none."""
    return spans(np.array([g.loss(measured(front, g.measure)) for g in problem.goals]))


def first_moves(
    problem: Problem, sizes: Mapping[str, Array], target: Mapping[str, Array], gap: Gap
) -> tuple[Move, ...]:
    """Return the fewest single changes from a sizing towards a design, each size (1,), that close the gap.

    Of as few changes, those that recover most.
    """
    differing = [s for s in problem.topology.sizes if abs(target[s.name][0] / sizes[s.name][0] - 1.0) > SAME]
    for count in range(1, len(differing) + 1):
        parts = _sets(len(differing), count)
        assessed = problem.assess(_moved(problem, differing, sizes, target, parts))
        closed = gap.closed(assessed)
        if closed.any():
            best = int(np.argmax(np.where(closed, gap.recovered(assessed.losses), -np.inf)))
            return _ordered(problem, differing, sizes, target, parts[:, best], gap)
    return ()


def _sets(sizes: int, count: int) -> Array:
    """Return every set of so many changes: for each size the part of the way, 0 where it stays, (S, K)."""
    ways = PARTS if comb(sizes, count) * len(PARTS) ** count <= MOST else (1.0,)
    steps = np.array(list(product(ways, repeat=count))).T
    found = []
    for chosen in combinations(range(sizes), count):
        parts = np.zeros((sizes, steps.shape[1]))
        parts[list(chosen)] = steps
        found.append(parts)
    return np.concatenate(found, axis=1)


def _moved(
    problem: Problem, differing: Sequence[Size], sizes: Mapping[str, Array], target: Mapping[str, Array], parts: Array
) -> dict[str, Array]:
    """Return the sizings that are parts (S, K) of the way from one sizing to another, each size (K,) and snapped."""
    moved = {name: np.repeat(value, parts.shape[1]) for name, value in sizes.items()}
    for size, part in zip(differing, parts, strict=True):
        own, theirs = sizes[size.name], target[size.name]
        between = problem.space.snap(size, own * (theirs / own) ** part)
        moved[size.name] = np.where(part == 0.0, own, np.where(part == 1.0, theirs, between))
    return moved


def _ordered(
    problem: Problem,
    differing: Sequence[Size],
    sizes: Mapping[str, Array],
    target: Mapping[str, Array],
    parts: Array,
    gap: Gap,
) -> tuple[Move, ...]:
    """Return a set of changes (S,) in the order in which each step recovers most; all its subsets are one batch."""
    which = np.flatnonzero(parts)
    masks = np.arange(2 ** len(which))
    trials = np.zeros((len(parts), len(masks)))
    trials[which] = parts[which, None] * (masks >> np.arange(len(which))[:, None] & 1)
    moved = _moved(problem, differing, sizes, target, trials)
    values = problem.measure(moved)
    assessed = problem.judge(values)
    recovered = gap.recovered(assessed.losses)
    missed = assessed.violations > TOLERANCE
    done, left, moves = 0, list(range(len(which))), []
    while left:
        step = max(left, key=lambda i: np.nan_to_num(recovered[done | 1 << i], nan=-np.inf))
        left.remove(step)
        done |= 1 << step
        size = differing[which[step]]
        moves.append(
            Move(
                size=size,
                before=float(sizes[size.name][0]),
                after=float(moved[size.name][done]),
                part=float(parts[which[step]]),
                measures={name: float(value[done]) for name, value in values.items()},
                recovered=float(recovered[done]),
                missed=tuple(x.measure.name for x, m in zip(problem.limits, missed, strict=True) if m[done]),
            )
        )
    return tuple(moves)
