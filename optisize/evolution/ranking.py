"""Constraint-dominated ranking, crowding and survival of NSGA-II, on arrays.

Source: Deb, Pratap, Agarwal, Meyarivan, A fast and elitist multiobjective genetic algorithm: NSGA-II, IEEE Transactions
on Evolutionary Computation 6(2), 2002, 182-197.
Departure: designs of the non-dominated front are chosen by their hypervolume contribution instead of by crowding.
"""

from __future__ import annotations

from functools import lru_cache

import moocore
import numpy as np
from numpy.typing import NDArray

from optisize.evolution.arrays import Floats, Indices, Mask

_MEASURED_FROM = 1.2  # where hypervolume contributions are measured from, in ranges of the front


def ranks(losses: Floats, violation: Floats) -> Indices:
    """The front each design belongs to, 0 for the best, under constraint domination; (N,).

    Of two designs the feasible one dominates an infeasible one; of two infeasible ones the one with the smaller
    violation; of two feasible ones the one that dominates in losses (Deb et al., 2002, definition 1).

    losses: (M, N), to be minimised; violation: (N,), 0 = feasible.
    """
    feasible = violation <= 0.0
    if feasible.all():
        return _fronts(losses)
    rank = np.empty(violation.size, dtype=np.intp)
    rank[feasible] = _fronts(losses[:, feasible])
    best_infeasible = rank[feasible].max(initial=-1) + 1
    rank[~feasible] = best_infeasible + np.unique(violation[~feasible], return_inverse=True)[1]
    return rank


def _fronts(losses: Floats) -> Indices:
    """The non-dominated front of each column of losses (M, N)."""
    if losses.shape[1] == 0:
        return np.empty(0, dtype=np.intp)
    fronts: NDArray[np.intc] = moocore.pareto_rank(np.ascontiguousarray(losses.T))
    return fronts.astype(np.intp)


def crowding(losses: Floats, rank: Indices) -> Floats:
    """The crowding distance of each design within its front; (N,), infinite at the ends of a front.

    The sum over the goals of the distance between the two neighbours, each goal scaled to the range of the front
    (Deb et al., 2002, section III-B). A goal in which a front does not vary adds nothing.

    losses: (M, N); rank: (N,), as from `ranks`.
    """
    if rank.size == 0:
        return np.empty(0)
    by_loss = np.argsort(losses, axis=1, kind="stable")
    key = rank.astype(np.int16) if rank.size < 2**15 else rank  # short integers sort in linear time
    order = np.take_along_axis(by_loss, np.argsort(key[by_loss], axis=1, kind="stable"), axis=1)
    ordered = np.take_along_axis(losses, order, axis=1)
    counts = np.bincount(rank)
    counts = counts[counts > 0]
    last = np.cumsum(counts) - 1
    first = last - counts + 1
    span = ordered[:, last] - ordered[:, first]
    gaps = np.full_like(ordered, np.inf)
    gaps[:, 1:-1] = ordered[:, 2:] - ordered[:, :-2]
    gaps[:, first] = np.inf
    gaps[:, last] = np.inf
    spans = np.repeat(span, counts, axis=1)
    flat = spans <= 0.0
    scaled = np.where(flat, 0.0, gaps / np.where(flat, 1.0, spans))
    distance = np.empty_like(losses)
    np.put_along_axis(distance, order, scaled, axis=1)
    total: Floats = distance.sum(axis=0)
    return total


def contributions(losses: Floats) -> Floats:
    """The hypervolume that only this design of a non-dominated front adds; (N,), infinite for the best of each goal.

    Losses (M, N) are scaled to the range of the front and measured from 1.2 in every goal. Of designs with equal losses
    the first one counts, the others add nothing (moocore alone would give none of them anything).
    Source: Beume, Naujoks, Emmerich, SMS-EMOA, European Journal of Operational Research 181, 2007, 1653-1669.
    """
    low = losses.min(axis=1, keepdims=True)
    span = losses.max(axis=1, keepdims=True) - low
    rows = np.ascontiguousarray(((losses - low) / np.where(span > 0.0, span, 1.0)).T)
    added = _added(rows)
    if not added.all():
        once = distinct(losses)
        added[once] = _added(rows[once])
    added[rows.argmin(axis=0)] = np.inf
    return added


def _added(rows: Floats) -> Floats:
    """The hypervolume that each of rows (N, M) alone adds to a front; with one goal a front has but equal designs."""
    if rows.shape[1] == 1:
        return np.zeros(len(rows))
    added: Floats = moocore.hv_contributions(rows, ref=np.full(rows.shape[1], _MEASURED_FROM))
    return added


def dominates(losses: Floats, violation: Floats, others: Floats, others_violation: Floats) -> Mask:
    """Which designs, losses (M, N), dominate which others, (M, K), with constraint domination; (N, K)."""
    ahead = (losses[:, :, None] <= others[:, None, :]).all(axis=0) & (losses[:, :, None] < others[:, None, :]).any(
        axis=0
    )
    missed, missed_there = violation[:, None], others_violation[None, :]
    return np.where(np.maximum(missed, missed_there) <= 0.0, ahead, missed < missed_there)


def survivors(losses: Floats, rank: Indices, count: int) -> Indices:
    """Positions of the best `count` designs, best first: whole fronts, and the best of the front that does not fit.

    The non-dominated front is ordered by the hypervolume that each design contributes, all others by crowding. With
    three goals nearly every design is non-dominated, and crowding alone would prefer designs that stand off the front,
    since they are far from all others.

    losses: (M, N); rank: (N,), as from `ranks`.
    """
    best = (rank == 0).nonzero()[0]
    order: Indices = best[np.argsort(-contributions(losses[:, best]), kind="stable")]
    while order.size > count:
        # Of a cluster each design contributes little, but one of it has to stay: not all that is too many goes at once.
        order = order[: max(count, order.size - max(count // 4, (order.size - count) // 2, 1))]
        order = order[np.argsort(-contributions(losses[:, order]), kind="stable")]
    if best.size >= count:
        return order[:count]
    rest = (rank > 0).nonzero()[0]
    crowd = crowding(losses[:, rest], rank[rest])
    return np.concatenate((order, rest[np.lexsort((-crowd, rank[rest]))]))[:count]


def distinct(vectors: Floats) -> Indices:
    """Positions, ascending, of the first occurrence of every different column of vectors (D, N).

    Columns are sorted by a sum of their rows with random weights, added row by row so that equal columns have equal
    sums, and neighbours are then compared exactly: different columns are never taken for equal.
    """
    dimensions, size = vectors.shape
    key = (_weights(dimensions) * vectors).sum(axis=0)
    ordered = np.sort(key)
    if (ordered[1:] != ordered[:-1]).all():
        return np.arange(size)
    order = np.argsort(key, kind="stable")
    same = (key[order[1:]] == key[order[:-1]]).nonzero()[0]
    left, right = order[same], order[same + 1]
    keep = np.ones(size, dtype=bool)
    keep[right[(vectors[:, left] == vectors[:, right]).all(axis=0)]] = False
    return keep.nonzero()[0]


@lru_cache(maxsize=64)
def _weights(dimensions: int) -> Floats:
    """Weights (D, 1) between 1 and 2, always the same, with which different columns hardly ever have equal sums."""
    return 1.0 + np.random.Generator(np.random.PCG64(0)).random((dimensions, 1))
