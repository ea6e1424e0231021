"""The table law: sampled transistors of a designer's own models, between the samples by splines.

The current is kept as a pinch-off voltage (see `pinch.py`), a spline over gate voltage, vds and vsb at every tabulated
length and width of one finger; so is everything else. A transistor of F fingers in U units is F U transistors of one
finger. Between sizes see `ladder.py`. Drain and source change roles where vds is negative, as in the other laws.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, NamedTuple, Self

import numpy as np
from numpy.typing import NDArray

from optisize.process.ladder import Between
from optisize.process.law import Array, Capacitances, Drain, Pick, Saturation, Voltages, taken
from optisize.process.parameters import MatchedParameters
from optisize.process.pinch import softplus
from optisize.process.spline import Box
from optisize.process.surfaces import Surfaces
from optisize.process.tabulated import CHANNELS, gate_lift
from optisize.quantities import write

ROUNDING = 1e-6  # V; beyond the ends of a table by no more is inside
GUESSES = 8  # Newton steps of the two estimates
BEYOND = 5.0  # V; so far beyond the tables they may go
GUESS = 0.5  # V, of a threshold and of a drain voltage in saturation
LEAST_SHARE = 5e-3  # of the figure of the leak: exp(-200) of the current
LEAST_SLOPE = 0.2  # of the pinch-off voltage over the gate's
STRONG = 30.0  # of the root of the inversion level; ln(exp(x) - 1) is x beyond


class TableParameters(MatchedParameters):
    """What a table cannot say of one kind of transistor: how well two of them match."""


class _Point(NamedTuple):
    """Terminal voltages on the axes of the tables, (T, N).

    Attributes:
        gate, vds, vsb: on the axes, the lower end of the channel taken as its source.
        slope: of the lift of the gate's axis.
        forward: where the lower end is the source; None where it is everywhere.
    """

    gate: Array
    vds: Array
    vsb: Array
    slope: Array
    forward: NDArray[np.bool_] | None


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
        channel = np.broadcast_to(parameters["channel"], (len(width), 1)).copy()
        finger = width / fingers
        specific = np.array([surfaces.tables[c].specific_current for c in CHANNELS])[channel.astype(np.intp)]
        tables = surfaces.shape_tables(channel, finger, length, small=False)
        return cls(
            surfaces=surfaces,
            channel=channel,
            index=tables.rows,
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
        parts: dict[str, Any] = {name: taken(getattr(self, name), rows, columns) for name in names}
        parts |= {name: _picked(getattr(self, name), rows, columns) for name in ("index", "weight")}
        return replace(self, **parts)

    def single(self) -> Self:
        """Return the same law in single precision."""
        names = ("weight", "scale", "shift")
        return replace(self, **{name: getattr(self, name).astype(np.float32) for name in names})

    def _point(self, vg: Array, vd: Array, vs: Array) -> _Point:
        vg, vd, vs = np.broadcast_arrays(vg, vd, vs)
        forward = vd >= vs
        turned = None if forward.all() else forward
        low = vs if turned is None else np.minimum(vd, vs)
        lift, slope = gate_lift(low)
        vds = vd - vs if turned is None else np.abs(vd - vs)
        return _Point(vg - low - self.shift - lift, vds, low, slope, turned)

    def _spline(
        self, name: str, at: _Point, slopes: bool = True, tables: Between | None = None
    ) -> tuple[Array, tuple[Array, Array, Array] | None]:
        """Return a figure and its slopes to vgs, vds and vsb, (T, N)."""
        box: Box = self.surfaces.grids.boxes[name]
        index, weight = (self.index, self.weight) if tables is None else tables
        shape = np.broadcast_shapes(at.gate.shape, index.shape[1:])
        v = [np.broadcast_to(x, shape).ravel() for x in at[:3]]
        k = len(index)
        nodes = np.broadcast_to(index, (k, *shape)).reshape(k, -1) * box.size
        weights = np.broadcast_to(weight, (k, *shape)).reshape(k, -1)
        found = box.evaluate(self.surfaces.flat[name], nodes, weights, v, slopes=slopes)
        if found.slopes is None:
            return found.value.reshape(shape), None
        gate, drain, body = (x.reshape(shape) for x in found.slopes)
        return found.value.reshape(shape), (gate, drain, body - at.slope * gate)

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V], all of shape (T, N)."""
        return self._drain(self._point(vg, vd, vs))[0]

    def _drain(self, at: _Point) -> tuple[Drain, Array]:
        """Return current and derivatives, and ln(1 + exp(p / 2 ut)) of the end of the channel that is the source."""
        ut = self.surfaces.ut
        p, slopes = self._spline("pinch_off", at)
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
            return Drain(current, gm, gds, gms), u
        sign = np.where(at.forward, 1.0, -1.0).astype(current.dtype)
        turned = np.where(at.forward, gds, gms), np.where(at.forward, gms, gds)
        return Drain(sign * current, sign * gm, *turned), u

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return the tabulated vdsat, and the inversion level of the end of the channel at the source."""
        at = self._point(vg, np.maximum(vd, vs), vs)
        u, _ = softplus(self._spline("pinch_off", at, slopes=False)[0], self.surfaces.ut)
        return self._saturation(at, vd >= vs, u)

    def _saturation(self, at: _Point, forward: NDArray[np.bool_], u: Array) -> Saturation:
        vdsat, slopes = self._spline("vdsat", at)
        assert slopes is not None
        by_drain = slopes[1] if forward.all() else np.where(forward, slopes[1], 0.0).astype(vdsat.dtype)
        return Saturation(vdsat, slopes[0], slopes[2] - slopes[0] - by_drain, u * u)

    def drain_and_saturation(self, vg: Array, vd: Array, vs: Array) -> tuple[Drain, Saturation]:
        """Return both at once: where no device is turned round they share the inversion level."""
        at = self._point(vg, vd, vs)
        drain, u = self._drain(at)
        if at.forward is None:
            return drain, self._saturation(at, vd >= vs, u)
        return drain, self.saturation(vg, vd, vs)

    def leak(self, drain: Drain, vg: Array, vd: Array, vs: Array) -> Drain | None:
        """Return what of the drain current flows to the bulk, by impact ionisation, and its derivatives.

        Where drain and source have changed roles there is none: the voltage is low there.
        """
        if not self.surfaces.leaky:
            return None
        at = self._point(vg, vd, vs)
        share, slopes = self._spline("leak", at)
        assert slopes is not None
        share = np.maximum(share, LEAST_SHARE)
        part, turn = np.exp(-1.0 / share), drain.id / (share * share)
        slope = slopes[0] + slopes[1] - slopes[2]
        by = (drain.gm + turn * slopes[0], drain.gds + turn * slopes[1], drain.gms + turn * slope)
        found = (drain.id * part, by[0] * part, by[1] * part, by[2] * part)
        return Drain(*(x if at.forward is None else np.where(at.forward, x, 0.0) for x in found))

    def _small(self, names: Sequence[str], at: _Point) -> list[Array]:
        """Return figures of capacitances and noise, (T, N)."""
        tables = self.surfaces.shape_tables(self.channel, self.finger, self.length, small=True)
        return [self._spline(name, at, slopes=False, tables=tables)[0] for name in names]

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return the gate capacitances [F], what the channel and the overlaps have together."""
        at = self._point(vg, vd, vs)
        source, drain, bulk = (x * self.area for x in self._small(("cgs", "cgd", "cgb"), at))
        if at.forward is not None:
            source, drain = np.where(at.forward, source, drain), np.where(at.forward, drain, source)
        return Capacitances(cgs=source, cgd=drain, cgb=bulk)

    def noise_conductance(self, vg: Array, vd: Array, vs: Array) -> Array:
        """Return the tabulated factor times gms [S]; times gds where drain and source have changed roles."""
        at = self._point(vg, vd, vs)
        drain, _ = self._drain(at)
        gms = drain.gms if at.forward is None else np.where(at.forward, drain.gms, drain.gds)
        return self._small(("noise",), at)[0] * gms

    def flicker(
        self, parameters: Mapping[str, Array], drain: Drain, v: Voltages, sizes: Voltages, frequency: float
    ) -> Array:
        """Return the flicker noise current at a frequency [A^2/Hz]: the tabulated one at the gate, times gm^2."""
        density = self._small(("flicker",), self._point(*v))[0]
        return density * drain.gm**2 / (self.area * frequency ** parameters["flicker_exponent"])

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

    def outside(self, vg: Array, vd: Array, vs: Array) -> NDArray[np.bool_]:
        """Tell which transistors have a size or a voltage that no table reaches, (T, N) of bool.

        Below its lowest gate voltage a transistor is off, and the tables go on.
        """
        out = self._outside_sizes()
        for value, low, high in self._reached(vg, vd, vs).values():
            out = out | (value < low - ROUNDING) | (value > high + ROUNDING)
        return out

    def _reached(self, vg: Array, vd: Array, vs: Array) -> dict[str, tuple[Array, float, float]]:
        """Return voltages by name, and between which values there are tables."""
        at = self._point(vg, vd, vs)
        gate, drain, body = self.surfaces.grids.current.axes
        return {
            "vgs": (at.gate, -np.inf, gate.high),
            "vds": (at.vds, 0.0, drain.high),
            "vsb": (at.vsb, body.low, body.high),
        }

    def _outside_sizes(self) -> NDArray[np.bool_]:
        out = np.zeros(np.broadcast_shapes(self.finger.shape, self.index.shape[1:]), dtype=bool)
        for row, channel in enumerate(self.channel[:, 0].astype(int)):
            lengths, widths = self.surfaces.ladders[CHANNELS[channel], False]
            out[row] = ~(lengths.reaches(self.length[row]) & widths.reaches(self.finger[row]))
        return out

    def why_outside(self, names: Sequence[str], vg: Array, vd: Array, vs: Array) -> list[str]:
        """Return what is beyond the tables in the first design, each one short text with the transistor's name."""
        told = []
        for row, (name, channel) in enumerate(zip(names, self.channel[:, 0].astype(int), strict=True)):
            lengths, widths = self.surfaces.ladders[CHANNELS[channel], False]
            for what, x, ladder in (("finger width", self.finger, widths), ("length", self.length, lengths)):
                if not ladder.reaches(x[row, :1])[0]:
                    ends = " to ".join(write(float(end), "m") for end in ladder.samples[[0, -1]])
                    told.append(f"{what} {write(float(x[row, 0]), 'm')} of {name} is not in the table ({ends})")
            lift = float(gate_lift(np.minimum(vd, vs))[0][row, 0])
            for what, (value, low, high) in self._reached(vg, vd, vs).items():
                v = float(value[row, 0])
                if not low - ROUNDING <= v <= high + ROUNDING:
                    by = lift if what == "vgs" else 0.0
                    end = high + by if v > high else low + by
                    told.append(f"{what} {write(v + by, 'V')} of {name} is beyond the table ({write(end, 'V')})")
        return told

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current`; a start for Newton."""
        wanted, vs = np.broadcast_arrays(self._pinch_off(current), vs)
        axis, nearest = self.surfaces.grids.current.axes[0], self._nearest
        lift, slope = gate_lift(vs)
        low, high = axis.low - BEYOND, axis.high + BEYOND
        gate = np.clip(wanted + GUESS, low, high)
        for _ in range(GUESSES):
            at = _Point(gate, np.full_like(gate, GUESS), vs, slope, None)
            p, slopes = self._spline("pinch_off", at, tables=nearest)
            assert slopes is not None
            gate = np.clip(gate + (wanted - p) / np.maximum(slopes[0], LEAST_SLOPE), low, high)
        return gate + lift + vs + self.shift

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current`; a start for Newton."""
        wanted, vg = np.broadcast_arrays(self._pinch_off(current), vg)
        body, nearest = self.surfaces.grids.current.axes[2], self._nearest
        low, high = body.low - BEYOND, body.high + BEYOND
        vs = np.clip(vg - self.shift - wanted - GUESS, low, high)
        for _ in range(GUESSES):
            p, slopes = self._spline("pinch_off", self._point(vg, vs + GUESS, vs), tables=nearest)
            assert slopes is not None
            vs = np.clip(vs + (p - wanted) / np.maximum(slopes[0] - slopes[2], LEAST_SLOPE), low, high)
        return vs

    @property
    def _nearest(self) -> Between:
        """The table with the largest weight alone, for estimates."""
        return Between(self.index[:1], np.ones_like(self.weight[:1]))

    def _pinch_off(self, current: Array) -> Array:
        """Return the pinch-off voltage of a saturated device [V]."""
        root = np.sqrt(np.maximum(current, 1e-30) / self.scale)
        near = np.log(np.expm1(np.clip(root, 1e-12, STRONG)))
        return 2.0 * self.surfaces.ut * np.where(root < STRONG, near, root)


def _picked(array: Any, rows: Pick, columns: Pick) -> Any:
    """Index the last two axes of an array of tables, (K, T, N)."""
    part = array[:, rows]
    return part[:, :, columns] if isinstance(columns, slice) else part.take(columns, axis=2)
