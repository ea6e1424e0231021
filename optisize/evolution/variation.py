"""New vectors from old ones: simulated binary crossover, polynomial mutation, differential-evolution variation.

Sources: Deb, Agrawal, Simulated binary crossover for continuous search space, Complex Systems 9, 1995; Deb, Goyal,
A combined genetic adaptive search (GeneAS) for engineering design, 1996 (polynomial mutation); Storn, Price,
Differential evolution, Journal of Global Optimization 11, 1997; neighbours: see `followed`. Crossover and mutation are
pymoo's array kernels.
"""

from __future__ import annotations

import numpy as np
from numpy.random import Generator
from pymoo.operators.crossover.sbx import cross_sbx
from pymoo.operators.mutation.pm import mut_pm

from optisize.evolution.arrays import Floats, Indices

SBX_ETA = 15.0
SBX_PROBABILITY = 0.9
SBX_SHARE = 0.5  # of the coordinates of a pair that crosses
MUTATION_ETA = 20.0  # each coordinate with probability 1 / D
DE_CROSSOVER = (0.9, 0.2)
LEAST_FACTOR, MOST_FACTOR = 0.05, 0.9
PULLED_SHARE = 0.5
SHARES = (0.4, 0.3, 0.3)  # at the start: crossover and mutation, differences of all, differences of neighbours
SETTLED_SHARES = (0.1, 0.05, 0.85)  # once little improves
LEAST_SHARE = 0.05
LEARNING = 0.2
TELLING = 0.125  # the part of the offspring that improves the population from which on their kinds alone decide
NEIGHBOURS = 12
ANYONE_SHARE = 0.1
FOLLOWED_FACTOR = (0.4, 0.9)


def split(count: int, shares: tuple[float, ...]) -> tuple[int, ...]:
    """How many of `count` offspring each kind of variation makes: its share, rounded, the last one what is left."""
    whole = [int(share * count) for share in shares[:-1]]
    return (*whole, count - sum(whole))


def rewarded(shares: tuple[float, ...], counts: tuple[int, ...], improving: Indices, goals: int) -> tuple[float, ...]:
    """The shares of the kinds of variation, moved towards those whose offspring improve the population.

    Where few improve it the front is reached, and following it finds most of what is left; but no share falls below a
    twentieth, so that none is lost for the time when it is needed. Adaptive choice of operators is common practice, no
    source.

    counts: how many offspring each kind made; improving: positions, among the offspring in the order of the kinds, of
    those that dominate a design of the population before them; goals: with one there is no front to follow, with more
    than three a population is too few to have near neighbours on it.
    """
    made = np.array(counts, dtype=float)
    if not made.size or not made.all():
        return shares
    kinds = np.searchsorted(np.cumsum(made), improving, side="right")
    rate = np.bincount(kinds, minlength=made.size)[: made.size] / made
    known = min(1.0, improving.size / (TELLING * made.sum()))
    wanted = (1.0 - known) * np.array(SETTLED_SHARES if 1 < goals < 4 else SHARES)
    if improving.size:
        wanted = wanted + known * rate / rate.sum()
    moved = np.maximum((1.0 - LEARNING) * np.array(shares) + LEARNING * wanted, LEAST_SHARE)
    return tuple((moved / moved.sum()).tolist())


def offspring(parents: Floats, losses: Floats, counts: tuple[int, ...], *, fresh: int, random: Generator) -> Floats:
    """New vectors (D, sum of counts) from parents (D, N) in [0, 1] with losses (M, N), which are ordered best first.

    The first by crossover and mutation, the second by differential evolution among all, the third among neighbours on
    the front. `fresh` of them get one coordinate drawn anew: as many as the last generation repeated known designs, so
    that a space of a few coarse steps, in which small moves snap back to where they began, is still left for another
    part of it.
    """
    parts = (
        mutated(crossed(parents, counts[0], random), random),
        differed(parents, counts[1], random),
        followed(parents, losses, counts[2], random),
    )
    return redrawn(np.concatenate(parts, axis=1), fresh, random)


def tournament(size: int, shape: tuple[int, ...], random: Generator) -> Indices:
    """Winners of binary tournaments among `size` designs ordered best first: the smaller of two random positions."""
    first, second = random.integers(0, size, (2, *shape))
    winners: Indices = np.minimum(first, second)
    return winners


def crossed(parents: Floats, count: int, random: Generator) -> Floats:
    """Children (D, count) of tournament winners among parents (D, N), by simulated binary crossover."""
    dimensions, size = parents.shape
    matings = (count + 1) // 2
    if matings == 0:
        return np.empty((dimensions, 0))
    chosen = tournament(size, (2, matings), random)
    mates = np.ascontiguousarray(parents.T)[chosen]
    takes_place = random.random((matings, 1)) < SBX_PROBABILITY
    children: Floats = cross_sbx(
        mates,
        np.zeros(dimensions),
        np.ones(dimensions),
        np.full((matings, 1), SBX_ETA),
        np.where(takes_place, SBX_SHARE, 0.0),
        np.full((matings, 1), 0.5),
        random_state=random,
    )
    return children.reshape(2 * matings, dimensions)[:count].T


def differed(parents: Floats, count: int, random: Generator) -> Floats:
    """Children (D, count) of tournament winners among parents (D, N), by adding a random part of a random difference.

    child = base + F (a - b) + K (c - base) in some of the coordinates, at least one; a, b, c random parents, a != b;
    F from 0.05 to 0.9, uniform in its logarithm; K = 0 in half of the children and uniform from 0 to 1 in the others, a
    pull that draws the population together where small differences alone would not. Half of the children change nine
    coordinates in ten, which follows a front in any direction; the others two in ten, which suits separable sizes.
    What leaves [0, 1] is put on the bound, since the best sizings often have sizes at their bounds.
    """
    dimensions, size = parents.shape
    base = parents.take(tournament(size, (count,), random), axis=1)
    first, towards = random.integers(0, size, (2, count))
    second = (first + random.integers(1, max(size, 2), count)) % size
    draw = random.random((dimensions + 4, count))
    factor = LEAST_FACTOR * (MOST_FACTOR / LEAST_FACTOR) ** draw[0]
    pull = np.where(draw[1] < PULLED_SHARE, draw[2], 0.0)
    changed = draw[4:] < np.where(draw[3] < 0.5, *DE_CROSSOVER)
    changed[random.integers(0, dimensions, count), np.arange(count)] = True
    move = factor * (parents.take(first, axis=1) - parents.take(second, axis=1))
    move += pull * (parents.take(towards, axis=1) - base)
    child: Floats = np.clip(base + changed * move, 0.0, 1.0)
    return child


def followed(parents: Floats, losses: Floats, count: int, random: Generator) -> Floats:
    """Children (D, count) of tournament winners, by adding a part of the difference of two of their neighbours.

    Neighbours are the nearest parents in the losses: their differences lie along the front, so that the children of a
    population that has reached it are on it or beyond, where differences between its far ends leave it. Mating among
    neighbours follows Li, Zhang, Multiobjective optimization problems with complicated Pareto sets, MOEA/D and NSGA-II,
    IEEE Transactions on Evolutionary Computation 13, 2009; as there, some mate with anyone.
    """
    size = parents.shape[1]
    if count == 0 or size < 3:
        return differed(parents, count, random)
    base = tournament(size, (count,), random)
    near = neighbours(losses, min(NEIGHBOURS, size - 1))[base]
    mates = np.take_along_axis(near, random.integers(0, near.shape[1], (count, 2)), axis=1).T
    mates = np.where(random.random((2, count)) < ANYONE_SHARE, random.integers(0, size, (2, count)), mates)
    low, high = FOLLOWED_FACTOR
    factor = low * (high / low) ** random.random(count)
    move = factor * (parents.take(mates[0], axis=1) - parents.take(mates[1], axis=1))
    child: Floats = np.clip(parents.take(base, axis=1) + move, 0.0, 1.0)
    return child


def neighbours(losses: Floats, count: int) -> Indices:
    """The designs themselves and their nearest others in the losses (M, N), each goal scaled to its spread; (N, K)."""
    from scipy.spatial import cKDTree

    spread = np.maximum(np.ptp(losses, axis=1, keepdims=True), 1e-12)
    rows = np.ascontiguousarray((losses / spread).T)
    found: Indices = cKDTree(rows).query(rows, k=count + 1)[1]
    return found


def mutated(vectors: Floats, random: Generator) -> Floats:
    """Vectors (D, N) after polynomial mutation of each coordinate with probability 1 / D."""
    dimensions, size = vectors.shape
    rows: Floats = mut_pm(
        np.ascontiguousarray(vectors.T),
        np.zeros(dimensions),
        np.ones(dimensions),
        np.full(size, MUTATION_ETA),
        np.full(size, 1.0 / dimensions),
        False,
        random_state=random,
    )
    return rows.T


def redrawn(vectors: Floats, count: int, random: Generator) -> Floats:
    """Vectors (D, N) in which `count` random designs have one random coordinate drawn anew."""
    dimensions, size = vectors.shape
    count = min(count, size)
    if count == 0:
        return vectors
    vectors = vectors.copy()
    which = random.permutation(size)[:count]
    vectors[random.integers(0, dimensions, count), which] = random.random(count)
    return vectors
