"""The table law: sampled transistors of a designer's own models, between the samples by splines.

The current is kept as a pinch-off voltage (see `pinch.py`), a spline over vgs, vds and vsb at every tabulated length and
width of one finger, and so is everything else. A transistor of F fingers in U units is F U transistors of one finger.
Between widths the tables are weighted linearly in 1/W, between lengths quadratically in 1/L, in which the parameters of
binned models are linear (Liu, "MOSFET Models for SPICE Simulation", Wiley, 2001; value from memory), never across an
edge where such a model changes its form. Drain and source change roles where vds is negative, as in the other laws.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Annotated, Any, NamedTuple, Self

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from optisize.process.law import Array, Capacitances, Drain, Pick, Saturation, taken
from optisize.process.parameters import Parameters
from optisize.process.pinch import softplus
from optisize.process.spline import Box
from optisize.process.tabulated import CHANNELS, SMALL, ChannelTable, Grids, Sizes
from optisize.quantities import In

NEAR = 1e-9  # relative; a size that is so near to a tabulated one is that size
ROUNDING = 1e-6  # V; beyond the ends of a table by no more is inside
GUESSES = 4  # Newton steps of the two estimates


class TableParameters(Parameters):
    """What a table cannot say of one kind of transistor: how well two of them match."""

    threshold_matching: Annotated[
        float,
        In("V*m", "mV*um"),
        Field(ge=0, description="matching A_VT: sigma of the threshold difference is A_VT / sqrt(W L)"),
    ]
    factor_matching: Annotated[
        float,
        In("m", "%*um"),
        Field(ge=0, description="matching A_beta: relative sigma of the current factors' difference times sqrt(W L)"),
    ]


class Between(NamedTuple):
    """Tabulated sizes and their weights, each (K, ...)."""

    index: NDArray[np.intp]
    weight: Array


def between(x: Array, samples: Array, edges: Array, degree: int) -> Between:
    """Return which tabulated sizes stand for sizes of any shape, and their weights; beyond the ends, the end itself.

    Args:
        x: sizes [m].
        samples: the tabulated ones, rising.
        edges: sizes across which no interpolation reaches.
        degree: of the interpolation in 1/x: 1 or 2.
    """
    x = np.clip(x, samples[0], samples[-1])
    nearest = np.abs(x[..., None] - samples).argmin(axis=-1)
    x = np.where(np.abs(x - samples[nearest]) <= NEAR * x, samples[nearest], x)
    groups = np.array([_neighbours(j, samples, edges, degree) for j in range(max(len(samples) - 1, 1))])
    chosen = groups[np.clip(np.searchsorted(samples, x, side="right") - 1, 0, len(groups) - 1)]
    index = np.moveaxis(chosen, -1, 0)
    inverse, at = 1.0 / x, 1.0 / samples[index]
    weight = np.ones(index.shape)
    for k in range(len(index)):
        for other in range(len(index)):
            if other != k:
                apart = at[k] - at[other]
                weight[k] *= np.where(apart == 0.0, 1.0, (inverse - at[other]) / np.where(apart == 0.0, 1.0, apart))
    # A size that stands twice in a group, to fill it, counts once.
    for k in range(1, len(index)):
        weight[k] = np.where((index[:k] == index[k]).any(axis=0), 0.0, weight[k])
    return Between(index, weight)


def _neighbours(j: int, samples: Array, edges: Array, degree: int) -> list[int]:
    """Return the samples for sizes between sample `j` and the next one, filled up by repeating one of them."""
    if len(samples) == 1:
        return [0] * (degree + 1)
    low = max((e for e in edges if e <= samples[j] * (1 + NEAR)), default=0.0)
    high = min((e for e in edges if e >= samples[j + 1] * (1 - NEAR)), default=np.inf)
    group = [j, j + 1]
    if degree == 2:
        further = [k for k in (j - 1, j + 2) if 0 <= k < len(samples)]
        inside = [k for k in further if low * (1 - NEAR) <= samples[k] <= high * (1 + NEAR)]
        middle = 0.5 * (1.0 / samples[j] + 1.0 / samples[j + 1])
        # With no other sample on this side of the edges, a straight line is all that is known.
        group.append(min(inside, key=lambda k: abs(1.0 / samples[k] - middle), default=j))
    return group


@dataclass(frozen=True)
class Surfaces:
    """The splines of both channels at one condition.

    Attributes:
        grids: the voltages.
        sizes: the sizes of each channel.
        tables: what was sampled, by channel.
        flat: coefficients by the name of a figure, those of the n-channel first, one table after the other.
        ut: thermal voltage [V].
    """

    grids: Grids
    sizes: Mapping[str, Sizes]
    tables: Mapping[str, ChannelTable]
    flat: Mapping[str, Any]
    ut: float

    @classmethod
    def fitted(cls, grids: Grids, sizes: Mapping[str, Sizes], tables: Mapping[str, ChannelTable], ut: float) -> Self:
        """Return the splines through tables."""
        flat = {}
        for name, box in grids.boxes.items():
            parts = [box.coefficients(tables[c].figures[name]).astype(np.float32).ravel() for c in CHANNELS]
            flat[name] = np.concatenate(parts)
        return cls(grids, sizes, tables, flat, ut)

    def shape_tables(self, channel: Array, width: Array, length: Array, *, small: bool) -> Between:
        """Return the tables of transistors and their weights, (K, T, N); tables that stand for none are left out.

        Args:
            channel: 0 for n, 1 for p, (T, 1).
            width, length: of one finger, (T, N).
            small: whether of capacitances and noise.
        """
        rows = [self._row(int(c), w, x, small) for c, w, x in zip(channel[:, 0], width, length, strict=True)]
        index = np.stack([r.index for r in rows], axis=1)
        weight = np.stack([r.weight for r in rows], axis=1)
        order = np.argsort(-np.abs(weight), axis=0, kind="stable")
        index, weight = np.take_along_axis(index, order, 0), np.take_along_axis(weight, order, 0)
        needed = weight.any(axis=(1, 2))
        return Between(index[needed], weight[needed])

    def _row(self, channel: int, width: Array, length: Array, small: bool) -> Between:
        sizes = self.sizes[CHANNELS[channel]]
        widths = sizes.small_widths if small else sizes.widths
        first = self.sizes["n"] if channel else None
        start = len(first.lengths) * len(first.small_widths if small else first.widths) if first is not None else 0
        by_length = between(length, sizes.lengths, sizes.length_edges, 2)
        by_width = between(width, widths, sizes.width_edges, 1)
        index = start + by_length.index[:, None] * len(widths) + by_width.index
        weight = by_length.weight[:, None] * by_width.weight
        return Between(index.reshape(-1, *length.shape), weight.reshape(-1, *length.shape))


class _Turned(NamedTuple):
    """Terminal voltages with the lower end of the channel as its source; `forward` where that is the source."""

    vgs: Array
    vds: Array
    vsb: Array
    forward: Array | None


@dataclass(frozen=True)
class TableLaw:
    """The table law of T transistors in N designs; arrays are (T, N) or broadcast to it.

    Attributes:
        surfaces: the splines.
        channel: 0 for n, 1 for p.
        index, weight: the tables of each transistor and their weights, (K, T, N).
        finger, length: of one finger [m].
        area: of all gates [m^2].
        scale: the current's scale [A].
        shift: of the threshold [V].
    """

    surfaces: Surfaces
    channel: Array
    index: NDArray[np.intp]
    weight: Array
    finger: Array
    length: Array
    area: Array
    scale: Array
    shift: Array

    @classmethod
    def of(
        cls, surfaces: Surfaces, parameters: Mapping[str, Array], width: Array, length: Array, fingers: Array
    ) -> Self:
        """Build the law.

        Args:
            surfaces: the splines.
            parameters: `channel`; `threshold`, a shift; `current_factor`, a ratio; each (T, 1) or (T, N).
            width: of all fingers [m], (T, N).
            length: [m], (T, N).
            fingers: of all units, (T, N).
        """
        channel = parameters["channel"]
        finger = width / fingers
        specific = np.array([surfaces.tables[c].specific_current for c in CHANNELS])[channel.astype(np.intp)]
        tables = surfaces.shape_tables(channel, finger, length, small=False)
        return cls(
            surfaces=surfaces,
            channel=channel,
            index=tables.index,
            weight=tables.weight,
            finger=finger,
            length=length,
            area=width * length,
            scale=specific * parameters["current_factor"] * width / length,
            shift=np.asarray(parameters["threshold"], dtype=float),
        )

    @classmethod
    def bind(cls, parameters: Mapping[str, Array], width: Array, length: Array, ut: Array) -> Self:
        """Refuse: a table law is built from its tables, see `of`."""
        raise TypeError("a table law is built from its tables")

    def take(self, rows: Pick, columns: Pick) -> Self:
        """Return the same law for some of its transistors and designs."""
        names = ("channel", "finger", "length", "area", "scale", "shift")
        tables = {name: np.stack([taken(x, rows, columns) for x in getattr(self, name)]) for name in ("index", "weight")}
        return replace(self, **tables, **{name: taken(getattr(self, name), rows, columns) for name in names})

    def single(self) -> Self:
        """Return the same law in single precision."""
        names = ("weight", "scale", "shift")
        return replace(self, **{name: getattr(self, name).astype(np.float32) for name in names})

    def _turned(self, vg: Array, vd: Array, vs: Array) -> _Turned:
        vg, vd, vs = np.broadcast_arrays(vg, vd, vs)
        forward = vd >= vs
        if forward.all():
            return _Turned(vg - vs - self.shift, vd - vs, vs, None)
        low = np.minimum(vd, vs)
        return _Turned(vg - low - self.shift, np.abs(vd - vs), low, forward)

    def _spline(
        self, name: str, v: Sequence[Array], slopes: bool = True, tables: Between | None = None
    ) -> tuple[Array, tuple[Array, Array, Array] | None]:
        """Return a figure and its slopes to vgs, vds and vsb, (T, N)."""
        box: Box = self.surfaces.grids.boxes[name]
        index, weight = (self.index, self.weight) if tables is None else tables
        shape = np.broadcast_shapes(v[0].shape, index.shape[1:])
        flat_v = [np.broadcast_to(x, shape).ravel() for x in v]
        k = len(index)
        nodes = np.broadcast_to(index, (k, *shape)).reshape(k, -1) * box.size
        weights = np.broadcast_to(weight, (k, *shape)).reshape(k, -1)
        found = box.evaluate(self.surfaces.flat[name], nodes, weights, flat_v, slopes=slopes)
        by = None if found.slopes is None else (
            found.slopes[0].reshape(shape), found.slopes[1].reshape(shape), found.slopes[2].reshape(shape)
        )
        return found.value.reshape(shape), by

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V], all of shape (T, N)."""
        return self._drain(self._turned(vg, vd, vs))

    def _drain(self, at: _Turned) -> Drain:
        ut = self.surfaces.ut
        p, slopes = self._spline("pinch_off", (at.vgs, at.vds, at.vsb))
        assert slopes is not None
        by_gate, by_drain, by_bulk = slopes
        (u, s), (r, t) = softplus(p, ut), softplus(p - at.vds, ut)
        current = self.scale * ((u - r) * (u + r))
        strength = self.scale * (1.0 / ut)
        reverse = strength * (r * t)
        rise = strength * (u * s) - reverse
        gm = rise * by_gate
        gds = rise * by_drain + reverse
        gms = gm + gds - rise * by_bulk
        if at.forward is None:
            return Drain(current, gm, gds, gms)
        sign = np.where(at.forward, 1.0, -1.0).astype(current.dtype)
        return Drain(sign * current, sign * gm, np.where(at.forward, gds, gms), np.where(at.forward, gms, gds))

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return the tabulated vdsat, and the inversion level of the end of the channel at the source."""
        return self._saturation(vg, vd, vs)

    def _saturation(self, vg: Array, vd: Array, vs: Array, level: Array | None = None) -> Saturation:
        vg, vd, vs = np.broadcast_arrays(vg, vd, vs)
        vgs, vds = vg - vs - self.shift, np.maximum(vd - vs, 0.0)
        vdsat, slopes = self._spline("vdsat", (vgs, vds, vs))
        assert slopes is not None
        if level is None:
            p, _ = self._spline("pinch_off", (vgs, vds, vs), slopes=False)
            level = softplus(p, self.surfaces.ut)[0] ** 2
        return Saturation(vdsat, slopes[0], slopes[2] - slopes[0] - slopes[1], level)

    def drain_and_saturation(self, vg: Array, vd: Array, vs: Array) -> tuple[Drain, Saturation]:
        """Return both at once."""
        return self.drain(vg, vd, vs), self._saturation(vg, vd, vs)

    def _small(self, names: Sequence[str], at: _Turned) -> list[Array]:
        """Return figures of capacitances and noise, (T, N)."""
        channel = np.broadcast_to(self.channel, (self.index.shape[1], 1))
        tables = self.surfaces.shape_tables(channel, self.finger, self.length, small=True)
        return [self._spline(name, (at.vgs, at.vds, at.vsb), slopes=False, tables=tables)[0] for name in names]

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return the gate capacitances [F], what the channel and the overlaps have together."""
        at = self._turned(vg, vd, vs)
        source, drain, bulk = (x * self.area for x in self._small(("cgs", "cgd", "cgb"), at))
        if at.forward is not None:
            source, drain = np.where(at.forward, source, drain), np.where(at.forward, drain, source)
        return Capacitances(cgs=source, cgd=drain, cgb=bulk)

    def noise_conductance(self, vg: Array, vd: Array, vs: Array) -> Array:
        """Return the tabulated factor times gms [S]; times gds where drain and source have changed roles."""
        at = self._turned(vg, vd, vs)
        drain = self._drain(at)
        gms = drain.gms if at.forward is None else np.where(at.forward, drain.gms, drain.gds)
        return self._small(("noise",), at)[0] * gms

    def flicker(self, parameters: Mapping[str, Array], drain: Drain, v: Sequence[Array], frequency: float) -> Array:
        """Return the flicker noise current at a frequency [A^2/Hz]: the tabulated one at the gate, times gm^2."""
        exponent = np.array([self.surfaces.tables[c].flicker_exponent for c in CHANNELS])[self.channel.astype(np.intp)]
        density = self._small(("flicker",), self._turned(v[0], v[1], v[2]))[0]
        return density * drain.gm**2 / (self.area * frequency**exponent)

    def junctions(self, parameters: Mapping[str, Array], area: Array, edge: Array, reverse: Array) -> Array:
        """Return the capacitance [F] of junctions (T, N), the tabulated edge under the gate with them."""
        grid = self.surfaces.grids.reverse
        gate = self.area / self.length
        rows = []
        for row, channel in enumerate(self.channel[:, 0].astype(int)):
            j = self.surfaces.tables[CHANNELS[channel]].junction
            v = np.clip(reverse[row], grid[0], grid[-1])
            parts = [np.interp(v, grid, j[name]) for name in ("area", "edge", "gate")]
            rows.append(area[row] * parts[0] + edge[row] * parts[1] + gate[row] * parts[2])
        return np.array(rows)

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current`; a start for Newton."""
        wanted, _, axis = self._wanted(current, vs)
        vgs = np.clip(wanted + 0.5, axis.low, axis.high)
        for _ in range(GUESSES):
            p, slopes = self._spline("pinch_off", np.broadcast_arrays(vgs, np.maximum(0.5 * vgs, 0.2), vs))
            assert slopes is not None
            vgs = np.clip(vgs + (wanted - p) / np.maximum(slopes[0], 0.2), axis.low, axis.high)
        return vgs + vs + self.shift

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current`; a start for Newton."""
        wanted, body, _ = self._wanted(current, vg)
        gate = vg - self.shift
        vs = np.clip(gate - wanted - 0.5, body.low, body.high)
        for _ in range(GUESSES):
            p, slopes = self._spline("pinch_off", np.broadcast_arrays(gate - vs, np.full_like(vs, 0.5), vs))
            assert slopes is not None
            vs = np.clip(vs + (p - wanted) / np.maximum(slopes[0] - slopes[2], 0.2), body.low, body.high)
        return vs

    def _wanted(self, current: Array, v: Array) -> tuple[Array, Any, Any]:
        """Return the pinch-off voltage of a saturated device, of the shape of all, and the axes of vsb and vgs."""
        root = np.sqrt(np.maximum(current, 1e-30) / self.scale)
        ut = self.surfaces.ut
        wanted = 2.0 * ut * np.where(root < 30.0, np.log(np.expm1(np.clip(root, 1e-12, 30.0))), root)
        vgs, _, vsb = self.surfaces.grids.current.axes
        return np.broadcast_to(wanted, np.broadcast_shapes(wanted.shape, v.shape)), vsb, vgs


def outside_sizes(law: TableLaw) -> NDArray[np.bool_]:
    """Tell which transistors have a finger or a length that no table reaches, (T, N) of bool."""
    rows = []
    for row, channel in enumerate(law.channel[:, 0].astype(int)):
        sizes = law.surfaces.sizes[CHANNELS[channel]]
        out = np.zeros(law.length.shape[1], dtype=bool)
        for x, samples in ((law.finger[row], sizes.widths), (law.length[row], sizes.lengths)):
            out |= (x < samples[0] * (1.0 - NEAR)) | (x > samples[-1] * (1.0 + NEAR))
        rows.append(out)
    return np.array(rows)


__all__ = ["SMALL", "Surfaces", "TableLaw", "TableParameters", "between", "outside_sizes"]
