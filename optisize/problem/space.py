"""The sizing space: which sizes are fixed, which are free, and what can be drawn.

Free sizes are searched on a logarithmic scale as vectors in [0, 1]; every vector stands for a sizing that is snapped
to the process grid, so that each design can be drawn as it was evaluated.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from optisize.errors import InputError
from optisize.process.card import Process
from optisize.process.law import Array
from optisize.quantities import write
from optisize.stage.assembly import Topology
from optisize.stage.elements import Size
from optisize.stage.layout import finger_count, resistor_length, snap_length, snap_resistance, snap_width

CURRENT_DIGITS = 3  # a bias current is set to three significant digits


@dataclass(frozen=True)
class SizeRange:
    """The values that one size may take: one value where `low` equals `high`."""

    size: Size
    low: float
    high: float

    @property
    def free(self) -> bool:
        """Whether the size is searched."""
        return self.high > self.low


@dataclass(frozen=True)
class SizingSpace:
    """All sizes of a stage with their ranges, on the grid of a process.

    Attributes:
        tabulated: whether channel lengths are only those of the tables of the process.
    """

    topology: Topology
    process: Process
    ranges: tuple[SizeRange, ...]
    tabulated: bool = False

    @cached_property
    def free(self) -> tuple[SizeRange, ...]:
        """The sizes that are searched, in the order of the vector."""
        return tuple(r for r in self.ranges if r.free)

    @property
    def dimensions(self) -> int:
        """The number of free sizes."""
        return len(self.free)

    @cached_property
    def _bounds(self) -> tuple[Array, Array]:
        """Logarithms of the lowest and highest value of the free sizes, (D, 1)."""
        low = np.array([[np.log(r.low)] for r in self.free]).reshape(-1, 1)
        high = np.array([[np.log(r.high)] for r in self.free]).reshape(-1, 1)
        return low, high

    @cached_property
    def _even_groups(self) -> frozenset[str]:
        return frozenset(t.group for t in self.topology.transistors if t.even_fingers)

    def _even(self, size: Size) -> bool:
        """Whether a width is drawn with an even number of fingers."""
        return size.name.rpartition(".")[0] in self._even_groups

    def snap(self, size: Size, values: Array) -> Array:
        """Return the nearest values of one size that can be drawn or set, (N,); snapping twice changes nothing."""
        grid = self.process.grid
        if size.kind == "width":
            return snap_width(values, grid, self._even(size))
        if size.kind == "length":
            allowed = self.lengths(size)
            return snap_length(values, grid) if allowed is None else _nearest(values, allowed)
        if size.kind == "resistance":
            return snap_resistance(values, self.process.resistor, grid)
        if size.kind == "count":
            return np.maximum(np.rint(values), 1.0)
        return round_significant(values, CURRENT_DIGITS)

    def lengths(self, size: Size) -> Array | None:
        """Return the lengths that a length may have, rising; None where any on the grid will do.

        Raises InputError when the tables have none that is on the grid of every transistor of the group.
        """
        tables = self.process.tables
        if not self.tabulated or tables is None:
            return None
        group = size.name.rpartition(".")[0]
        channels = {self.topology.channel(t) for t in self.topology.transistors if t.group == group}
        found = [snap_length(tables.sizes[c].lengths, self.process.grid) for c in sorted(channels)]
        allowed = found[0] if len(found) == 1 else np.intersect1d(found[0], found[1])
        allowed = np.unique(allowed[allowed <= self.process.grid.maximum_length * (1.0 + 1e-9)])
        if not len(allowed):
            raise InputError(f"sizes.{size.name}: no length is in the tables of both channels")
        return allowed

    def neighbours(self, size: Size, value: float) -> tuple[float | None, float | None]:
        """Return the next values of one size below and above one value [SI] that can be drawn or set.

        None where there is none: below one unit, below what the process can draw, above its longest channel.
        """
        allowed = self.lengths(size) if size.kind == "length" else None
        pitch, reach = self._pitch(size, value)
        near: Array = value + pitch * np.arange(-reach, reach + 1.0)
        found = self.snap(size, near[near > 0.0]) if allowed is None else allowed
        if size.kind == "length":
            found = found[found <= self.process.grid.maximum_length * (1.0 + 1e-9)]
        below, above = found[found < value * (1.0 - 1e-9)], found[found > value * (1.0 + 1e-9)]
        return float(below.max()) if len(below) else None, float(above.min()) if len(above) else None

    def _pitch(self, size: Size, value: float) -> tuple[float, int]:
        """Return the distance whose multiples part the values that can be drawn, and how many a gap near one has.

        The widths of f fingers are f steps apart, or as far as two fingers of the narrowest where two more are begun.
        A current has ten times as many values below a power of ten as above it.
        """
        grid = self.process.grid
        if size.kind == "width":
            fingers = int(finger_count(np.array(value), grid, self._even(size)))
            return grid.step, fingers + 2 + 2 * int(np.ceil(grid.minimum_width / grid.step))
        if size.kind == "length":
            return grid.step, 2
        if size.kind == "resistance":
            return grid.step / float(resistor_length(np.array(1.0), self.process.resistor)), 2
        if size.kind == "count":
            return 1.0, 2
        return float(10.0 ** (np.floor(np.log10(value) + 1e-9) - CURRENT_DIGITS)), 20

    def fitted(self, size: Size, low: float, high: float) -> tuple[float, float]:
        """Return the smallest and the largest value between two ends that can be drawn or set.

        Snapping what lies between them leads to nothing beyond the ends.

        Raises InputError when nothing between them can be drawn.
        """
        allowed = self.lengths(size) if size.kind == "length" else None
        inward = np.linspace(0.0, 0.15, 3001)  # further than any step of a grid, and finer than any
        found = (
            allowed
            if allowed is not None
            else np.concatenate([self.snap(size, low * (1.0 + inward)), self.snap(size, high * (1.0 - inward))])
        )
        found = found[(found >= low * (1.0 - 1e-12)) & (found <= high * (1.0 + 1e-12))]
        if not len(found):
            ends = f"{write(low, size.unit)} and {write(high, size.unit)}"
            where = "on the process grid" if allowed is None else "a length of its tables"
            raise InputError(f"sizes.{size.name}: nothing between {ends} is {where}")
        return float(found.min()), float(found.max())

    def snapped(self, sizes: Mapping[str, Array]) -> dict[str, Array]:
        """Return every size of a population snapped to what can be drawn, each (N,)."""
        return {s.name: self.snap(s, np.asarray(sizes[s.name], dtype=float)) for s in self.topology.sizes}

    def decode(self, vectors: Array) -> dict[str, Array]:
        """Return the sizing of every vector, each size (N,) in SI units and snapped.

        Args:
            vectors: positions of the free sizes between their bounds on a logarithmic scale, (D, N) in [0, 1].
        """
        low, high = self._bounds
        values = np.exp(low + np.clip(vectors, 0.0, 1.0) * (high - low))
        count = vectors.shape[1]
        row = {r.size.name: i for i, r in enumerate(self.free)}
        sizes = {}
        for r in self.ranges:
            name = r.size.name
            value = np.clip(values[row[name]], r.low, r.high) if name in row else np.full(count, r.low)
            sizes[name] = self.snap(r.size, value)
        return sizes

    def encode(self, sizes: Mapping[str, Array]) -> Array:
        """Return the vectors (D, N) of sizings, each size (N,); values outside the ranges go to their ends."""
        low, high = self._bounds
        values = np.array([np.log(np.asarray(sizes[r.size.name], dtype=float)) for r in self.free])
        return np.clip((values.reshape(len(self.free), -1) - low) / (high - low), 0.0, 1.0)


def round_significant(values: Array, digits: int) -> Array:
    """Return positive values rounded to significant decimal digits."""
    exponent = digits - 1 - np.floor(np.log10(values)).astype(int)
    up = 10.0 ** np.maximum(exponent, 0)
    down = 10.0 ** np.maximum(-exponent, 0)
    return np.rint(values * up / down) * down / up


def _nearest(values: Array, allowed: Array) -> Array:
    """Return the nearest of the allowed values, rising, by their ratio."""
    return allowed[np.searchsorted(np.sqrt(allowed[:-1] * allowed[1:]), values)]
