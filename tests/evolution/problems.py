"""Published test problems with known fronts, as evaluators on arrays, and the exact hypervolumes of their fronts."""

from __future__ import annotations

import math

import numpy as np

from optisize.evolution.archive import Front
from optisize.evolution.state import Evaluate, Evaluated, Settings, State


def unconstrained(losses_of) -> Evaluate:
    """An evaluator without limits; it hands back the vectors it got."""
    return lambda vectors: Evaluated(vectors, losses_of(vectors), np.zeros(vectors.shape[1]))


def zdt(number: int) -> Evaluate:
    """ZDT1 to 3: Zitzler, Deb, Thiele, Comparison of multiobjective evolutionary algorithms, Evol. Comput. 8, 2000."""

    def losses(x):
        g = 1.0 + 9.0 * x[1:].mean(axis=0)
        return np.stack((x[0], g * zdt_front(number, x[0], x[0] / g)))

    return unconstrained(losses)


def zdt_front(number: int, f1, ratio):
    """The second loss over g: on the front, where g = 1, the second loss itself."""
    if number == 1:
        return 1.0 - np.sqrt(ratio)
    if number == 2:
        return 1.0 - ratio**2
    return 1.0 - np.sqrt(ratio) - ratio * np.sin(10.0 * np.pi * f1)


def dtlz1(goals: int) -> Evaluate:
    """DTLZ1: Deb, Thiele, Laumanns, Zitzler, Scalable test problems for evolutionary multiobjective optim., 2005."""

    def losses(x):
        tail = x[goals - 1 :] - 0.5
        g = 100.0 * (len(tail) + (tail**2 - np.cos(20.0 * np.pi * tail)).sum(axis=0))
        return 0.5 * (1.0 + g) * _shape(x[: goals - 1], 1.0 - x[: goals - 1])

    return unconstrained(losses)


def dtlz2(goals: int) -> Evaluate:
    """DTLZ2, same source as DTLZ1."""

    def losses(x):
        g = ((x[goals - 1 :] - 0.5) ** 2).sum(axis=0)
        angle = 0.5 * np.pi * x[: goals - 1]
        return (1.0 + g) * _shape(np.cos(angle), np.sin(angle))

    return unconstrained(losses)


def _shape(along, across):
    """Products of the first factors along, the last of them across, for each goal in turn; (M, N)."""
    ones = np.ones((1, along.shape[1]))
    products = np.concatenate((ones, np.cumprod(along, axis=0)))[::-1]
    return products * np.concatenate((ones, across[::-1]))


def bnh(vectors) -> Evaluated:
    """BNH: Binh, Korn, MOBES: a multiobjective evolution strategy for constrained optimization problems, 1997."""
    x, y = 5.0 * vectors[0], 3.0 * vectors[1]
    losses = np.stack((4.0 * x**2 + 4.0 * y**2, (x - 5.0) ** 2 + (y - 5.0) ** 2))
    over = np.maximum((x - 5.0) ** 2 + y**2 - 25.0, 0.0) / 25.0
    under = np.maximum(7.7 - (x - 8.0) ** 2 - (y + 3.0) ** 2, 0.0) / 7.7
    return Evaluated(vectors, losses, over + under)


def coarse(levels: int, goals: int) -> Evaluate:
    """Every coordinate snapped to a few levels; losses are distances to as many points on the diagonal."""

    def evaluate(vectors):
        snapped = np.round(vectors * (levels - 1)) / (levels - 1)
        targets = np.linspace(0.0, 1.0, goals)
        losses = ((snapped[None] - targets[:, None, None]) ** 2).sum(axis=1)
        return Evaluated(snapped, losses, np.zeros(vectors.shape[1]))

    return evaluate


def hopeless(vectors) -> Evaluated:
    """DTLZ2 of two goals with a limit that no design meets; the violation is least, 0.5, at the origin."""
    losses = dtlz2(2)(vectors).losses
    return Evaluated(vectors, losses, 0.5 + (vectors**2).sum(axis=0))


def sphere_volume(goals: int, reference: float) -> float:
    """Hypervolume of the DTLZ2 front: the box without the part of the unit ball in it."""
    return reference**goals - math.pi ** (goals / 2) / math.gamma(goals / 2 + 1) / 2**goals


def simplex_volume(goals: int, reference: float) -> float:
    """Hypervolume of the DTLZ1 front: the box without the corner under the plane sum f = 0.5."""
    return reference**goals - 0.5**goals / math.factorial(goals)


def volume(front: Front, reference: float) -> float:
    """Hypervolume of a front from a reference point with equal coordinates."""
    goals = front.losses.shape[0]
    return front.hypervolume(np.zeros(goals), np.full(goals, reference)) * reference**goals


def begin(evaluate: Evaluate, dimensions: int, goals: int, *, reference: float = 11.0, seeds=None, **settings) -> State:
    """The start of a search in the box from zero to a reference with equal coordinates."""
    from optisize.evolution.genetic import start

    return start(
        evaluate,
        dimensions=dimensions,
        goals=goals,
        settings=Settings(**settings),
        reference=np.full(goals, reference),
        ideal=np.zeros(goals),
        seeds=seeds,
    )


def same(first: State, second: State) -> bool:
    """Whether two searches are equal bit for bit, in all that a checkpoint keeps."""
    from optisize.evolution.checkpoint import to_arrays

    one, two = to_arrays(first), to_arrays(second)
    return one.keys() == two.keys() and all(np.array_equal(one[name], two[name]) for name in one)
