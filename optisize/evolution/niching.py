"""Survival of NSGA-III for more than three goals: niches around reference directions, on arrays.

Source: Deb, Jain, An evolutionary many-objective optimization algorithm using reference-point-based nondominated
sorting approach, part I, IEEE Transactions on Evolutionary Computation 18(4), 2014, 577-601. Directions, extreme
designs, nadir and association are pymoo's array functions.
"""

from __future__ import annotations

import warnings
from functools import lru_cache

import numpy as np
from numpy.random import Generator
from pymoo.algorithms.moo.nsga3 import associate_to_niches, get_extreme_points_c, get_nadir_point
from pymoo.util.reference_direction import UniformReferenceDirectionFactory, get_partition_closest_to_points

from optisize.evolution.arrays import Floats, Indices, Mask
from optisize.evolution.state import Normalisation


@lru_cache(maxsize=8)
def directions(goals: int, population: int) -> Floats:
    """Reference directions (R, M), at most as many as the population, on one or two layers (Deb, Jain, 2014, V-A).

    Das and Dennis' points on the unit simplex with as many partitions as fit; what room is left for a second layer,
    half as wide, fills the inside when the first layer lies on the border only.
    """
    outer = _layer(goals, population, 1.0)
    rest = population - len(outer)
    if (outer > 0.0).all(axis=1).any() or rest < goals:
        return outer
    return np.concatenate((outer, _layer(goals, rest, 0.5)))


def _layer(goals: int, room: int, width: float) -> Floats:
    """Evenly spaced points (R, M) of the unit simplex, shrunk to a width about its centre; R <= room if room >= M."""
    partitions = max(1, get_partition_closest_to_points(room, goals))
    points: Floats = UniformReferenceDirectionFactory(goals, n_partitions=partitions, scaling=width).do()
    return points


def normalised(losses: Floats, best: Mask, known: Normalisation | None) -> tuple[Normalisation, Floats, Floats]:
    """What is now known of the losses (M, N), and the ideal and nadir (M,) of the front `best` (a mask)."""
    rows = np.ascontiguousarray(losses.T)
    low, high = rows.min(axis=0), rows.max(axis=0)
    ideal = low if known is None else np.minimum(low, known.ideal)
    worst = high if known is None else np.maximum(high, known.worst)
    extremes = get_extreme_points_c(rows[best], ideal, extreme_points=None if known is None else known.extremes)
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        nadir = get_nadir_point(extremes.copy(), ideal, worst, rows[best].max(axis=0), high)
    return Normalisation(ideal, worst, extremes), ideal, nadir


def filled(niche: Indices, distance: Floats, taken: Indices, count: int, random: Generator) -> Indices:
    """Positions of `count` designs that fill the emptiest niches first (Deb, Jain, 2014, algorithm 4).

    A niche that is still empty takes its closest design, then any. Taking one design after the other from the emptiest
    niches is the same as sorting all by the number of designs their niche would hold before them.

    niche: (N,) of each design; distance: (N,) to its direction; taken: (R,) designs that each niche holds already.
    """
    lottery = random.random(niche.size)
    closest_first = np.lexsort((distance, niche))
    lead = closest_first[np.unique(niche[closest_first], return_index=True)[1]]
    turn = lottery.copy()
    turn[lead[taken[niche[lead]] == 0]] = -1.0
    by_niche = np.lexsort((turn, niche))
    counts = np.bincount(niche, minlength=taken.size)
    place = np.arange(niche.size) - np.repeat(np.cumsum(counts) - counts, counts)
    level = np.empty(niche.size, dtype=np.intp)
    level[by_niche] = place + taken[niche[by_niche]]
    return np.lexsort((lottery, level))[:count]


def survivors(
    losses: Floats, feasible: Mask, rank: Indices, count: int, known: Normalisation | None, random: Generator
) -> tuple[Indices, Normalisation | None]:
    """Positions of the best `count` designs, best first, and what is now known of the losses.

    Whole fronts survive; of the feasible front that does not fit, the designs that fill the emptiest niches. Infeasible
    designs survive by their rank alone. Losses (M, N) should be scaled to about 1; feasible, rank: (N,).
    """
    order = np.lexsort((random.random(rank.size), rank))
    if not feasible.any():
        return order[:count], known
    known, ideal, nadir = normalised(losses[:, feasible], rank[feasible] == 0, known)
    if rank.size <= count or not feasible[order[count - 1]]:
        return order[:count], known
    split = rank[order[count - 1]]
    certain = order[rank[order] < split]
    front = order[rank[order] == split]
    considered = np.concatenate((certain, front))
    towards = directions(losses.shape[0], count)
    niche, distance, _ = associate_to_niches(losses[:, considered].T, towards, ideal, nadir)
    taken = np.bincount(niche[: certain.size], minlength=len(towards))
    picked = filled(niche[certain.size :], distance[certain.size :], taken, count - certain.size, random)
    return np.concatenate((certain, front[picked])), known
