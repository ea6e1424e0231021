"""Tensor splines over three voltages on grids that are uniform after a map, for many tables and points at once.

The value and its derivatives come from the same coefficients, so that Newton sees one consistent function. Beyond its
ends a spline goes on as its tangent.

de Boor, "A Practical Guide to Splines", Springer, 1978 (value from memory): the uniform B-splines of degree one, two
and three, and the condition that joins the two outermost cells of a cubic at either end.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from optisize.process.law import Array

Indices = NDArray[np.intp]
BLOCK = 2000  # points evaluated together: their windows stay in the cache


@dataclass(frozen=True)
class Axis:
    """One voltage: where it is sampled, and how the spline goes along it.

    Attributes:
        low, high: first and last sample [V].
        count: how many samples there are.
        degree: of the spline along it: 1, 2 or 3.
        bend: 0 for equal steps of the voltage; else equal steps of ln(v - low + bend), closest at the low end [V].
    """

    low: float
    high: float
    count: int
    degree: int
    bend: float = 0.0

    @cached_property
    def _start(self) -> float:
        return float(np.log(self.bend)) if self.bend else self.low

    @cached_property
    def _per_step(self) -> float:
        end = float(np.log(self.high - self.low + self.bend)) if self.bend else self.high
        return (self.count - 1) / (end - self._start)

    @cached_property
    def samples(self) -> Array:
        """The sampled voltages (count,)."""
        steps = np.arange(self.count) / self._per_step + self._start
        values: Array = np.exp(steps) - self.bend + self.low if self.bend else steps
        values[0], values[-1] = self.low, self.high
        return values

    @property
    def coefficients(self) -> int:
        """The number of coefficients along the axis."""
        return self.count + (0 if self.degree == 1 else 2)

    def locate(self, v: Array) -> tuple[Array, Array]:
        """Return where voltages within the axis are, in steps from the first sample, and the slope of that."""
        if not self.bend:
            return (v - self._start) * self._per_step, np.asarray(self._per_step, dtype=v.dtype)
        shifted = v + (self.bend - self.low)
        return (np.log(shifted) - self._start) * self._per_step, self._per_step / shifted

    @cached_property
    def fit(self) -> Array:
        """The coefficients of the interpolating spline as a linear function of the samples, (coefficients, count)."""
        n, m = self.count, self.coefficients
        if self.degree == 1:
            return np.eye(n)
        rows = np.zeros((m, m))
        known = np.zeros((m, n))
        quadratic = self.degree == 2
        for k in range(n):
            rows[k, k : k + 3] = (0.125, 0.75, 0.125) if quadratic else (1.0 / 6.0, 2.0 / 3.0, 1.0 / 6.0)
        known[:n, :n] = np.eye(n)
        # The highest derivative is the same in the two cells at either end.
        stencil = np.array([-1.0, 3.0, -3.0, 1.0] if quadratic else [1.0, -4.0, 6.0, -4.0, 1.0])
        rows[n, : len(stencil)] = stencil
        rows[n + 1, m - len(stencil) :] = stencil
        solved: Any = np.linalg.solve(rows, known)
        return solved

    def window(self, v: Array, slopes: bool) -> tuple[Array, list[Array], list[Array]]:
        """Return the first coefficient, and the weights of it and its followers, for voltages within the axis.

        Args:
            v: voltages (M,), clipped to the axis.
            slopes: whether the derivatives of the weights are wanted.
        """
        t, rate = self.locate(v)
        if self.degree == 2:
            first = np.minimum((t + 0.5).astype(np.intp), self.count - 1)
            f = t - first  # -1/2 to 1/2 about the nearest sample
            left = 0.5 - f
            right = 0.5 + f
            weights = [0.5 * left * left, 0.75 - f * f, 0.5 * right * right]
            turns = [-left * rate, -2.0 * f * rate, right * rate] if slopes else []
            return first, weights, turns
        first = np.minimum(t.astype(np.intp), self.count - 2)
        f = t - first
        g = 1.0 - f
        if self.degree == 1:
            return first, [g, f], [np.broadcast_to(-rate, f.shape), np.broadcast_to(rate, f.shape)] if slopes else []
        f2, g2 = f * f, g * g
        a, d = g2 * g / 6.0, f2 * f / 6.0
        b = 2.0 / 3.0 - f2 + 3.0 * d
        weights = [a, b, 1.0 - a - b - d, d]
        if not slopes:
            return first, weights, []
        half = 0.5 * rate
        outer = [-g2 * half, (3.0 * f2 - 4.0 * f) * half, f2 * half]
        return first, weights, [outer[0], outer[1], -(outer[0] + outer[1] + outer[2]), outer[2]]


class Values(NamedTuple):
    """A spline and its slopes along the three voltages; the slopes are None where they were not asked for."""

    value: Array
    slopes: tuple[Array, Array, Array] | None


@dataclass(frozen=True)
class Box:
    """A tensor spline over three voltages; samples and coefficients have the order of the axes, (..., X, Y, Z)."""

    axes: tuple[Axis, Axis, Axis]

    @property
    def size(self) -> int:
        """The number of coefficients of one table."""
        return int(np.prod([axis.coefficients for axis in self.axes]))

    def coefficients(self, samples: Array) -> Array:
        """Return the coefficients of tables, (..., X, Y, Z) from samples of the same axes."""
        for position, axis in enumerate(self.axes, start=samples.ndim - 3):
            samples = np.moveaxis(np.tensordot(axis.fit, samples, (1, position)), 0, position)
        return np.ascontiguousarray(samples)

    @cached_property
    def _offsets(self) -> Array:
        """Where the coefficients of a window are, counted from its first one, (window, 1)."""
        (x, y, z) = (np.arange(axis.degree + 1) for axis in self.axes)
        _, ny, nz = (axis.coefficients for axis in self.axes)
        offsets: Any = ((x[:, None, None] * ny + y[:, None]) * nz + z).reshape(-1, 1)
        return offsets

    def evaluate(
        self, flat: Array, nodes: Indices, weights: Array, v: Sequence[Array], *, slopes: bool = True
    ) -> Values:
        """Return a weighted sum of tables at M points.

        Args:
            flat: the coefficients of all tables, one after the other.
            nodes: where the K tables of each point begin in it, (K, M).
            weights: of these tables, (K, M).
            v: the three voltages, each (M,).
            slopes: whether the derivatives are wanted.
        """
        count = nodes.shape[1]
        clipped = [np.clip(x, axis.low, axis.high) for x, axis in zip(v, self.axes, strict=True)]
        rows = np.empty((4 if slopes else 1, count), dtype=weights.dtype)
        for start in range(0, count, BLOCK):
            part = slice(start, start + BLOCK)
            self._block(flat, nodes[:, part], weights[:, part], [x[part] for x in clipped], rows[:, part])
        if not slopes:
            return Values(rows[0], None)
        value, by = rows[0], (rows[1], rows[2], rows[3])
        for x, inside, slope in zip(v, clipped, by, strict=True):
            beyond = x - inside
            if beyond.any():
                value = value + slope * beyond
        return Values(value, by)

    def _block(self, flat: Array, nodes: Indices, weights: Array, v: Sequence[Array], rows: Array) -> None:
        """Write value and slopes at M points into the rows (4, M), or the value only where there is one row."""
        slopes = len(rows) > 1
        (fx, wx, sx), (fy, wy, sy), (fz, wz, sz) = (
            axis.window(x, slopes) for x, axis in zip(v, self.axes, strict=True)
        )
        _, ny, nz = (axis.coefficients for axis in self.axes)
        first = (fx * ny + fy) * nz + fz
        count = len(first)
        window = np.empty((len(self._offsets), count), dtype=weights.dtype)
        where = np.empty(window.shape, dtype=np.intp)
        for k, (node, weight) in enumerate(zip(nodes, weights, strict=True)):
            np.add(first + node, self._offsets, out=where)
            if k == 0:
                np.multiply(flat.take(where), weight, out=window)
            else:
                window += flat.take(where) * weight
        cells = window.reshape(len(wx), len(wy), len(wz), count)
        along_z = np.einsum("xyzm,zm->xym", cells, np.array(wz))
        along_y = np.einsum("xym,ym->xm", along_z, np.array(wy))
        rows[0] = np.einsum("xm,xm->m", along_y, np.array(wx))
        if slopes:
            rows[1] = np.einsum("xm,xm->m", along_y, np.array(sx))
            rows[2] = np.einsum("xm,xm->m", np.einsum("xym,ym->xm", along_z, np.array(sy)), np.array(wx))
            turned = np.einsum("xym,ym->xm", np.einsum("xyzm,zm->xym", cells, np.array(sz)), np.array(wy))
            rows[3] = np.einsum("xm,xm->m", turned, np.array(wx))
