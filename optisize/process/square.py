"""The square law: Shichman and Hodges, "Modeling and simulation of insulated-gate field-effect transistor
switching circuits", IEEE JSSC 3, 1968, exactly as the level-1 model of SPICE writes it.

Both regions carry the factor 1 + lambda vds; lambda is inversely proportional to length. It serves hand analysis and
exact comparison with a circuit simulator.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Annotated, Self

import numpy as np
from pydantic import Field

from optisize.process.law import Array, Capacitances, Drain, OfParameters, Pick, Saturation, taken
from optisize.process.parameters import TransistorParameters
from optisize.quantities import In


class SquareParameters(TransistorParameters):
    """Parameters of one kind of transistor under the square law."""

    channel_modulation: Annotated[
        float, In("m/V", "um/V"), Field(ge=0, description="channel-length modulation: lambda times length")
    ]


@dataclass(frozen=True)
class SquareLaw(OfParameters):
    """The square law of T transistors in N designs; every array is (T, N) or broadcasts to it."""

    beta: Array
    threshold: Array
    body_effect: Array
    surface_potential: Array
    root: Array
    modulation: Array
    oxide: Array
    overlap: Array
    ut: Array

    @classmethod
    def bind(cls, parameters: Mapping[str, Array], width: Array, length: Array, ut: Array) -> Self:
        """Build the law for widths and lengths [m] of shape (T, N) at thermal voltage `ut` [V]."""
        return cls(
            beta=parameters["current_factor"] * width / length,
            threshold=parameters["threshold"],
            body_effect=parameters["body_effect"],
            surface_potential=parameters["surface_potential"],
            root=np.sqrt(parameters["surface_potential"]),
            modulation=parameters["channel_modulation"] / length,
            oxide=parameters["oxide_capacitance"] * width * length,
            overlap=parameters["overlap_capacitance"] * width,
            ut=ut,
        )

    def take(self, rows: Pick, columns: Pick) -> Self:
        """Return the same law for some of its transistors and designs."""
        return type(self)(*(taken(getattr(self, f.name), rows, columns) for f in fields(self)))

    def single(self) -> Self:
        """Return the same law in single precision."""
        return type(self)(*(getattr(self, f.name).astype(np.float32) for f in fields(self)))

    def _threshold(self, vs: Array) -> tuple[Array, Array]:
        """Return threshold [V] and its derivative with respect to the source-bulk voltage `vs`.

        Below zero bias the square root goes on as its tangent, as in SPICE.
        """
        inside = np.sqrt(self.surface_potential + np.maximum(vs, 0.0))
        root, slope = inside, 0.5 / inside
        if not vs.min() >= 0.0:
            tangent = np.maximum(self.root + vs / (2.0 * self.root), 0.0)
            root = np.where(vs > 0.0, inside, tangent)
            slope = np.where(vs > 0.0, slope, np.where(tangent > 0.0, 0.5 / self.root, 0.0))
        return self.threshold + self.body_effect * (root - self.root), self.body_effect * slope

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V], all of shape (T, N).

        Drain and source change roles where vd < vs, so the law is symmetric.
        """
        low = np.minimum(vd, vs)
        return self._drain(vg, vd, vs, low, self._threshold(low))

    def _drain(self, vg: Array, vd: Array, vs: Array, low: Array, threshold: tuple[Array, Array]) -> Drain:
        """Return the drain current with the lower end of the channel at `low` and the threshold there."""
        vth, body = threshold
        vds = np.abs(vd - vs)
        vov = np.maximum(vg - low - vth, 0.0)
        vx = np.minimum(vds, vov)  # the channel sees vds in the triode region and vov beyond it
        modulated = 1.0 + self.modulation * vds
        strength = self.beta * vx
        channel = strength * (vov - 0.5 * vx)
        current = channel * modulated
        gm = strength * modulated
        gds = self.beta * (vov - vx) * modulated + channel * self.modulation
        gms = gm * (1.0 + body) + gds
        if (low == vs).all():
            return Drain(current, gm, gds, gms)
        forward = vd >= vs
        sign = np.where(forward, 1.0, -1.0)
        return Drain(sign * current, sign * gm, np.where(forward, gds, gms), np.where(forward, gms, gds))

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return vdsat (the overdrive above threshold) and the strong-inversion level (vov / 2 n ut)^2."""
        return self._saturation(vg, vs, self._threshold(vs))

    def _saturation(self, vg: Array, vs: Array, threshold: tuple[Array, Array]) -> Saturation:
        vth, body = threshold
        vov = np.maximum(vg - vs - vth, 0.0)
        on = (vov > 0.0).astype(float)
        slope_factor = 1.0 + body
        return Saturation(
            vdsat=vov,
            by_gate=on,
            by_source=-on * slope_factor,
            inversion=(vov / (2.0 * slope_factor * self.ut)) ** 2,
        )

    def drain_and_saturation(self, vg: Array, vd: Array, vs: Array) -> tuple[Drain, Saturation]:
        """Return both at once: where no device is turned round they share the threshold."""
        low = np.minimum(vd, vs)
        threshold = self._threshold(low)
        drain = self._drain(vg, vd, vs, low, threshold)
        return drain, self._saturation(vg, vs, threshold if (low == vs).all() else self._threshold(vs))

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return gate capacitances [F] of a conducting device.

        Meyer, "MOS models and circuit simulation", RCA Review 32, 1971 (value from memory): two thirds of the oxide
        to the source in saturation, split between source and drain in the triode region.
        """
        vov = np.maximum(vg - vs - self._threshold(vs)[0], 1e-12)
        vds = np.clip(vd - vs, 0.0, vov)
        total = 2.0 * vov - vds
        source = 1.0 - ((vov - vds) / total) ** 2
        drain = 1.0 - (vov / total) ** 2
        part = self.oxide / 1.5
        shape = np.broadcast_shapes(part.shape, source.shape)
        return Capacitances(cgs=part * source + self.overlap, cgd=part * drain + self.overlap, cgb=np.zeros(shape))

    def noise_conductance(self, vg: Array, vd: Array, vs: Array) -> Array:
        """Return 2/3 |gm| [S], which SPICE takes in both regions.

        It is right in saturation only: without drain voltage gm vanishes, and the noise of the channel does not.
        """
        conductance: Array = np.abs(self.drain(vg, vd, vs).gm) * (2.0 / 3.0)
        return conductance

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current`, without modulation."""
        return vs + self._threshold(vs)[0] + np.sqrt(2.0 * current / self.beta)

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current`, without modulation.

        Solves vs + gamma sqrt(phi + vs) = vg - vt0 - vov + gamma sqrt(phi), a quadratic in sqrt(phi + vs).
        """
        vov = np.sqrt(2.0 * current / self.beta)
        right = vg - self.threshold - vov + self.body_effect * self.root + self.surface_potential
        half = 0.5 * self.body_effect
        root = np.sqrt(np.maximum(right + half**2, 0.0)) - half
        return np.where(root > self.root, root**2 - self.surface_potential, vg - self.threshold - vov)
