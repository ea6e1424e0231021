"""Sizes between tabulated sizes: which tables stand for them, and how much each of them counts.

Tables are weighted so that what is a polynomial in 1/size is exact: the parameters of binned models are linear in 1/L
and 1/W (Liu, "MOSFET Models for SPICE Simulation", Wiley, 2001; value from memory). No weighting reaches across an edge
where such a model changes its form.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array

REACH = 0.02  # relative; so far beyond the samples on its side of an edge a size is taken from them
NEAR = 1e-9  # relative; a size that is so near to a tabulated one is that size


class Between(NamedTuple):
    """The rows of tabulated sizes and their weights, each (K, ...)."""

    rows: NDArray[np.intp]
    weight: Array


@dataclass(frozen=True)
class Ladder:
    """Tabulated sizes of one kind.

    Attributes:
        samples: the sizes, rising [m].
        edges: sizes at which the model changes its form; a size at an edge is below it [m].
        degree: of the polynomial in 1/size: 1 or 2.
        shared: whether a sample at an edge is also of what is above it.
    """

    samples: Array
    edges: Array
    degree: int
    shared: bool = True

    @cached_property
    def _bounds(self) -> Array:
        """Where the samples that stand for a size change, rising."""
        return np.unique(np.concatenate([self.samples, self._inner]))

    @cached_property
    def _inner(self) -> Array:
        """The edges between the samples; the ends of the model part nothing."""
        return self.edges[(self.edges > self.samples[0]) & (self.edges < self.samples[-1])]

    @cached_property
    def _groups(self) -> NDArray[np.intp]:
        """The samples that stand for sizes between two bounds, (bounds - 1 or 1, degree + 1)."""
        b = self._bounds
        middles = 0.5 * (b[:-1] + b[1:]) if len(b) > 1 else b
        return np.array([self._group(float(m)) for m in middles])

    def _group(self, x: float) -> list[int]:
        """Return the samples for sizes about `x`, filled up by repeating the first of them.

        They are on the same side of every edge, unless `x` is far from all that are.
        """
        samples, degree = self.samples, self.degree
        low = max((e for e in self._inner if e < x), default=0.0)
        high = min((e for e in self._inner if e > x), default=np.inf)
        above = samples >= low * (1.0 - NEAR) if self.shared else samples > low * (1.0 + NEAR)
        pool = np.flatnonzero(above & (samples <= high * (1.0 + NEAR)))
        alone = len(pool) == 1 and not self.shared
        near = len(pool) and samples[pool[0]] * (1.0 - REACH) <= x <= samples[pool[-1]] * (1.0 + REACH)
        if not (alone or near):
            pool, degree = np.arange(len(samples)), 1
        below, beyond = pool[samples[pool] <= x], pool[samples[pool] > x]
        group = [*below[-1:], *beyond[:1]]
        rest = sorted((k for k in pool if k not in group), key=lambda k: abs(1.0 / samples[k] - 1.0 / x))
        chosen = [int(k) for k in [*group, *rest][: degree + 1]]
        return chosen + chosen[:1] * (self.degree + 1 - len(chosen))

    def reaches(self, x: Array) -> NDArray[np.bool_]:
        """Tell which sizes are between the ends."""
        return (x >= self.samples[0] * (1.0 - NEAR)) & (x <= self.samples[-1] * (1.0 + NEAR))

    def between(self, x: Array) -> Between:
        """Return the tables for sizes (...) and their weights, (degree + 1, ...); beyond the ends, those of the end."""
        samples = self.samples
        x = np.clip(x, samples[0], samples[-1])
        above = np.clip(np.searchsorted(samples, x), 1, max(len(samples) - 1, 1)) if len(samples) > 1 else 0
        for near in (samples[above - 1], samples[above]) if len(samples) > 1 else ():
            x = np.where(np.abs(x - near) <= NEAR * x, near, x)
        chosen = self._groups[np.clip(np.searchsorted(self._bounds, x) - 1, 0, len(self._groups) - 1)]
        index = np.moveaxis(chosen, -1, 0)
        inverse, at = 1.0 / x, 1.0 / samples[index]
        weight = np.ones(index.shape)
        for k in range(len(index)):
            for other in range(len(index)):
                apart = at[k] - at[other]
                same = apart == 0.0
                weight[k] *= np.where(same, 1.0, (inverse - at[other]) / np.where(same, 1.0, apart))
            # A size that stands twice in a group, to fill it, counts once.
            weight[k] = np.where((index[:k] == index[k]).any(axis=0), 0.0, weight[k])
        return Between(index, weight)
