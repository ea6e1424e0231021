"""What makes one design of a front the one to take, by losses alone: the knee, the balance, what is nearest to wishes.

Losses are those of `Goal.loss`, smaller is better, (M, N): M goals of N designs. Each goal counts in ranges of the
front, so that decibels and amperes weigh alike: 0 is the best of the front in a goal, 1 the worst.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array

FLAT = 0.01  # a front that nowhere comes closer than this to its ideal than a straight one has no knee


def spans(losses: Array) -> Array:
    """Return the range of each goal over the front, (M, 1); one where all designs have the same."""
    span = np.ptp(losses, axis=1, keepdims=True)
    return np.where(span > 0.0, span, 1.0)


def scaled(losses: Array) -> Array:
    """Return losses in ranges of the front, (M, N)."""
    return (losses - losses.min(axis=1, keepdims=True)) / spans(losses)


def bulge(losses: Array) -> Array:
    """Return how far each design lies ahead of the straight front, towards the ideal, (N,); negative behind it.

    The straight front is the line between the extremes, or for more than two goals the plane that weighs them alike
    and passes through the best of the extremes. It is largest at the knee (Das, On characterizing the "knee" of the
    Pareto curve based on normal-boundary intersection, Structural Optimization 18, 1999, 107-115; who takes the plane
    through all extremes: the same for two goals, but the extremes of three may lie on a line, or so that the plane
    leans the wrong way).
    """
    total = scaled(losses).sum(axis=0)
    extremes = [best_of(row, total) for row in losses]
    return (total[extremes].min() - total) / np.sqrt(len(losses))


def imbalance(losses: Array) -> Array:
    """Return the worst of each design's goals in ranges of the front, (N,): 0 at the ideal (Tchebycheff's distance)."""
    return scaled(losses).max(axis=0)


def best_of(*keys: Array, among: NDArray[np.bool_] | None = None) -> int:
    """Return the position of the smallest first key; of the second among equals, and so on; the first of what is left.

    Args:
        keys: each (N,); not a number counts as worst.
        among: which designs may be taken, (N,); all where None.
    """
    out = np.zeros(len(keys[0]), dtype=bool) if among is None else ~among
    ordered = [np.where(np.isnan(key), np.inf, key) for key in keys]
    return int(np.lexsort((*reversed(ordered), out))[0])


def knee(losses: Array, among: NDArray[np.bool_] | None = None) -> tuple[int, bool]:
    """Return the position of the knee of a front, and whether there is one.

    Where the front is straight or bulges away from its ideal there is none, and it is the most balanced design: the
    one whose worst goal, in ranges of the front, is best. Of a single goal it is the best.

    Args:
        losses: of the whole front, (M, N).
        among: which designs may be taken, (N,); the scale is that of the whole front, so that the knee stays where it
            is as long as it may be taken.
    """
    out = bulge(losses)
    found = best_of(-out, imbalance(losses), among=among)
    if out[found] >= FLAT or len(losses) == 1:
        return found, True
    return best_of(imbalance(losses), -out, among=among), False


def achievement(distances: Array) -> Array:
    """Return the achievement of wishes, (N,): the largest of their signed distances; the smaller, the better.

    Zero or less where every wish is met. The scalarisation by a reference point of Wierzbicki, The use of reference
    objectives in multiobjective optimization, Lecture Notes in Economics and Mathematical Systems 177, 1980, 468-486.

    Args:
        distances: how far each wish is from being met, in ranges of the front, (W, N); negative where it is exceeded.
    """
    return np.where(np.isnan(distances), np.inf, distances).max(axis=0)
