"""The archive: every feasible non-dominated design ever seen, its hypervolume, and a thinned choice from it.

Comparing each generation with the whole archive would cost more than the rest of the search. Newcomers therefore wait
in `pending` and are merged when enough of them have gathered; what the archive holds does not depend on when.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import moocore
import numpy as np

from optisize.evolution.arrays import Floats, Indices
from optisize.evolution.ranking import distinct

_EXACT_GOALS = 4  # exact hypervolume up to here: above, its cost grows as size ** (goals - 2)
_DIRECTIONS = 4096  # of the approximation above; within about 1 % for five to ten goals
_GATHER, _GROWTH = 0.5, 0.05  # gather so many populations before a merge, and this share of the archive


@dataclass(frozen=True)
class Front:
    """Designs none of which dominates another: vectors (D, N), losses (M, N)."""

    vectors: Floats
    losses: Floats

    @property
    def size(self) -> int:
        """How many designs there are."""
        return int(self.losses.shape[1])

    def take(self, which: Indices) -> Front:
        """The designs at these positions."""
        return Front(self.vectors.take(which, axis=1), self.losses.take(which, axis=1))

    def hypervolume(self, ideal: Floats, reference: Floats) -> float:
        """The share of the box from ideal to reference (both (M,)) that the front dominates.

        Designs beyond the reference count for nothing; designs better than the ideal can bring the share above 1.
        Exact for up to four goals (Guerreiro, Fonseca, 2017, in moocore); for more, moocore's deterministic
        approximation (within about 1 %).
        """
        scaled = (self.losses - ideal[:, None]) / (reference - ideal)[:, None]
        inside = np.ascontiguousarray(scaled[:, (scaled < 1.0).all(axis=0)].T)
        goals = inside.shape[1]
        if inside.size == 0:
            return 0.0
        if goals == 1:
            return float(1.0 - inside.min())
        if goals <= _EXACT_GOALS:
            return float(moocore.hypervolume(inside, ref=np.ones(goals)))
        return float(moocore.hv_approx(inside, ref=np.ones(goals), nsamples=_DIRECTIONS, seed=1))

    def thinned(self, count: int) -> Front:
        """At most `count` well-spread designs of the front, in the order of the front."""
        return self.take(spread(self.losses, count))


@dataclass(frozen=True)
class Archive:
    """The front so far and the newcomers that are still to be compared with it.

    gathered: newcomers since the archive was last measured; measured: its size then. Both decide when the next
    measurement is due, and so, when a search goes on after an interruption, it is due at the same generation.
    """

    front: Front
    pending: tuple[Front, ...] = ()
    gathered: int = 0
    measured: int = 0

    @classmethod
    def empty(cls, dimensions: int, goals: int) -> Archive:
        """An archive without designs."""
        return cls(Front(np.empty((dimensions, 0)), np.empty((goals, 0))))

    @property
    def is_empty(self) -> bool:
        """Whether no feasible design was ever seen."""
        return self.front.size == 0 and not self.pending

    def due(self, population: int) -> bool:
        """Whether enough newcomers have gathered for a measurement: some populations, and so many for the archive."""
        first = self.gathered > 0 and self.measured == 0
        return first or self.gathered >= max(_GATHER * population, _GROWTH * self.measured)

    def add(self, newcomers: Front) -> Archive:
        """The archive with these feasible designs waiting to be compared."""
        if newcomers.size == 0:
            return self
        return replace(self, pending=(*self.pending, newcomers), gathered=self.gathered + newcomers.size)

    def merged(self) -> Archive:
        """The same archive with nothing waiting. Of designs with equal losses the first one seen is kept."""
        if not self.pending:
            return self
        parts = (self.front, *self.pending)
        vectors = np.concatenate([part.vectors for part in parts], axis=1)
        losses = np.concatenate([part.losses for part in parts], axis=1)
        keep = moocore.is_nondominated(np.ascontiguousarray(losses.T)).nonzero()[0]
        front = Front(vectors, losses).take(keep)
        once = distinct(front.vectors)
        return replace(self, front=front if once.size == front.size else front.take(once), pending=())

    def settled(self) -> Archive:
        """The same archive, merged, after a measurement: gathering starts anew."""
        merged = self.merged()
        return replace(merged, gathered=0, measured=merged.front.size)


def spread(losses: Floats, count: int) -> Indices:
    """Positions, ascending, of at most `count` well-spread columns of losses (M, N) that are non-dominated.

    First the best design of each goal (as far as `count` allows), then always the one farthest from all chosen so far,
    in losses scaled to their ranges: the greedy solution of the k-centre problem, whose largest gap is at most twice
    the smallest possible (Gonzalez, Theoretical Computer Science 38, 1985). One step a chosen design, on whole arrays.
    """
    goals, size = losses.shape
    if count >= size:
        return np.arange(size)
    low = losses.min(axis=1, keepdims=True)
    span = losses.max(axis=1, keepdims=True) - low
    scaled = (losses - low) / np.where(span > 0.0, span, 1.0)
    chosen: list[int] = []
    distance = np.full(size, math.inf)
    for step in range(count):
        best = _best_of_goal(scaled, step) if step < goals else int(distance.argmax())
        chosen.append(best)
        distance = np.minimum(distance, ((scaled - scaled[:, best, None]) ** 2).sum(axis=0))
    return np.unique(chosen)


def _best_of_goal(scaled: Floats, goal: int) -> int:
    """The position of the smallest loss of a goal; among equals, of the smallest sum of the others."""
    return int(np.lexsort((scaled.sum(axis=0), scaled[goal]))[0])
