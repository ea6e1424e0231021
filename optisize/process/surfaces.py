"""The splines through the tables of both channels at one condition, and which of them stand for a transistor's size."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Self

import numpy as np

from optisize.process.ladder import Between, Ladder
from optisize.process.law import Array
from optisize.process.tabulated import CHANNELS, ChannelTable, Grids, Sizes


@dataclass(frozen=True)
class Surfaces:
    """The splines of both channels at one condition.

    Attributes:
        grids: the voltages.
        sizes: the sizes of each channel.
        tables: what was sampled, by channel.
        flat: coefficients by the name of a figure, those of the n-channel first, one table after the other.
        leaky: whether a part of the drain current flows to the bulk.
        ladders: lengths and widths of each channel, of the current and of capacitances and noise.
        ut: thermal voltage [V].
    """

    grids: Grids
    sizes: Mapping[str, Sizes]
    tables: Mapping[str, ChannelTable]
    flat: Mapping[str, Any]
    leaky: bool
    ladders: Mapping[tuple[str, bool], tuple[Ladder, Ladder]]
    ut: float

    @classmethod
    def fitted(cls, grids: Grids, sizes: Mapping[str, Sizes], tables: Mapping[str, ChannelTable], ut: float) -> Self:
        """Return the splines through tables."""
        flat = {}
        for name, box in grids.boxes.items():
            parts = [box.coefficients(tables[c].figures[name]).astype(np.float32).ravel() for c in CHANNELS]
            flat[name] = np.concatenate(parts)
        ladders: dict[tuple[str, bool], tuple[Ladder, Ladder]] = {}
        for channel, of in sizes.items():
            large = Ladder(of.lengths, of.length_edges, 2), Ladder(of.widths, of.width_edges, 1)
            lengths = Ladder(of.small_lengths, of.length_edges, 2, shared=False)
            widths = Ladder(of.small_widths, of.width_edges, 1, shared=False)
            ladders |= {(channel, False): large, (channel, True): (lengths, widths)}
        leaky = any(bool(tables[c].figures["leak"].any()) for c in CHANNELS)
        return cls(grids, sizes, tables, flat, leaky, ladders, ut)

    def shape_tables(self, channel: Array, width: Array, length: Array, *, small: bool) -> Between:
        """Return the tables of transistors and their weights, (K, T, N); tables that no transistor needs are left out.

        Args:
            channel: 0 for n, 1 for p, (T, 1).
            width, length: of one finger, (T, N).
            small: whether of capacitances and noise.
        """
        rows = [self._row(int(c), w, x, small) for c, w, x in zip(channel[:, 0], width, length, strict=True)]
        index = np.stack([r.rows for r in rows], axis=1)
        weight = np.stack([r.weight for r in rows], axis=1)
        order = np.argsort(-np.abs(weight), axis=0, kind="stable")
        index, weight = np.take_along_axis(index, order, 0), np.take_along_axis(weight, order, 0)
        needed = weight.any(axis=(1, 2))
        return Between(index[needed], weight[needed])

    def _row(self, channel: int, width: Array, length: Array, small: bool) -> Between:
        before = [self.ladders[c, small] for c in CHANNELS[:channel]]
        lengths, widths = self.ladders[CHANNELS[channel], small]
        by_length, by_width = lengths.between(length), widths.between(width)
        rows = by_length.rows[:, None] * len(widths.samples) + by_width.rows
        rows += sum(len(a.samples) * len(b.samples) for a, b in before)
        weight = by_length.weight[:, None] * by_width.weight
        return Between(rows.reshape(-1, *length.shape), weight.reshape(-1, *length.shape))
