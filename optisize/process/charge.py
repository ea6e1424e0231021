"""The charge law: the all-region model of Enz, Krummenacher and Vittoz, "An analytical MOS transistor model valid in
all regions of operation and dedicated to low-voltage and low-current applications", Analog Integrated Circuits and
Signal Processing 8, 1995.

    vp   = vg - vt0 - gamma (sqrt(vg - vt0 + (sqrt(phi) + gamma/2)^2) - sqrt(phi) - gamma/2)     pinch-off voltage
    n    = 1 / (d vp / d vg)                                                                     slope factor
    u(v) = ln(1 + exp(v / 2 ut)),  F = u^2                                                       interpolation
    I    = 2 n beta ut^2 [F(vp - vs) - F(vp - vd)] * M / (V D)

with three second-order effects, each even in vd - vs so that the law stays symmetric:

    M = 1 + (sqrt(vds^2 + d^2) - d) / (VA L),  d = 4 ut         channel-length modulation, Early voltage VA L
    V = 1 + theta (vp + sqrt(vp^2 + d^2)) / 2                   mobility reduction by the vertical field
    D = sqrt(1 + ((2 ut / Ec L) (u_f - u_r))^2)                 velocity saturation above the critical field Ec
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

_EXPONENT_MAX = 300.0
_CHARGE_MIN = 1e-35  # below the smallest charge that is not zero


class ChargeParameters(TransistorParameters):
    """Parameters of one kind of transistor under the charge law."""

    early_voltage: Annotated[float, In("V/m", "V/um"), Field(gt=0, description="Early voltage per channel length")]
    vertical_field: Annotated[
        float, In("1/V", "1/V"), Field(ge=0, description="mobility reduction theta by the vertical field")
    ] = 0.0
    critical_field: Annotated[
        float, In("V/m", "V/um"), Field(gt=0, description="lateral field at which the velocity saturates")
    ] = 1e12


@dataclass(frozen=True)
class _Channel:
    """Pinch-off and inversion of T transistors in N designs; `u` and `s` are (2, T, N), source end first.

    Attributes:
        vp: pinch-off voltage [V].
        root: the square root in it [V^0.5].
        slope: d vp / d vg, the inverse of the slope factor.
        u: ln(1 + exp(v / 2 ut)) of either end.
        s: its derivative, times 2 ut.
    """

    vp: Array
    root: Array
    slope: Array
    u: Array
    s: Array


@dataclass(frozen=True)
class ChargeLaw(OfParameters):
    """The charge law of T transistors in N designs; every array is (T, N) or broadcasts to it."""

    strength: Array  # 2 beta ut^2
    threshold: Array
    body_effect: Array
    body_half: Array
    root_start: Array  # sqrt(phi) + gamma / 2
    root_start2: Array
    root_floor: Array
    early: Array
    field_half: Array
    velocity2: Array
    oxide: Array
    overlap: Array
    ut: Array
    per_ut: Array
    per_two_ut: Array
    delta2: Array
    unmodulated: Array

    @classmethod
    def bind(cls, parameters: Mapping[str, Array], width: Array, length: Array, ut: Array) -> Self:
        """Build the law for widths and lengths [m] of shape (T, N) at thermal voltage `ut` [V]."""
        gamma = parameters["body_effect"]
        early = 1.0 / (parameters["early_voltage"] * length)
        root_start = np.sqrt(parameters["surface_potential"]) + 0.5 * gamma
        return cls(
            strength=2.0 * ut**2 * parameters["current_factor"] * width / length,
            threshold=parameters["threshold"],
            body_effect=gamma,
            body_half=0.5 * gamma,
            root_start=root_start,
            root_start2=root_start**2,
            # Far below threshold the root is held where the slope factor reaches 3; no current flows there.
            root_floor=np.maximum(0.75 * gamma, 0.01) ** 2,
            early=early,
            field_half=0.5 * parameters["vertical_field"],
            velocity2=(2.0 * ut / (parameters["critical_field"] * length)) ** 2,
            oxide=parameters["oxide_capacitance"] * width * length,
            overlap=parameters["overlap_capacitance"] * width,
            ut=ut,
            per_ut=1.0 / ut,
            per_two_ut=0.5 / ut,
            delta2=(4.0 * ut) ** 2,
            unmodulated=1.0 - early * 4.0 * ut,
        )

    def take(self, rows: Pick, columns: Pick) -> Self:
        """Return the same law for some of its transistors and designs."""
        return type(self)(*(taken(getattr(self, f.name), rows, columns) for f in fields(self)))

    def single(self) -> Self:
        """Return the same law in single precision."""
        return type(self)(*(getattr(self, f.name).astype(np.float32) for f in fields(self)))

    def _channel(self, vg: Array, vd: Array, vs: Array) -> _Channel:
        """Return the inversion of both ends of the channel at bulk-referenced voltages [V]."""
        drive = vg - self.threshold
        root = np.sqrt(np.maximum(drive + self.root_start2, self.root_floor))
        vp = drive - self.body_effect * (root - self.root_start)
        ends = np.empty((2, *vp.shape))
        np.subtract(vp, vs, out=ends[0])
        np.subtract(vp, vd, out=ends[1])
        ends *= self.per_two_ut
        grown = np.exp(np.minimum(ends, _EXPONENT_MAX, out=ends), out=ends)
        above = grown + 1.0
        return _Channel(vp, root, 1.0 - self.body_half / root, np.log(above), grown / above)

    def _drain(self, c: _Channel, vds: Array) -> Drain:
        """Return current and derivatives of a channel."""
        smooth_vds = np.sqrt(vds * vds + self.delta2)
        modulation = self.unmodulated + self.early * smooth_vds
        smooth_vp = np.sqrt(c.vp * c.vp + self.delta2)
        reduction = self.field_half * (c.vp + smooth_vp)
        field = 1.0 + reduction
        gap = c.u[0] - c.u[1]
        pull = self.velocity2 * gap
        drag2 = 1.0 + pull * gap
        # per_charge * (u_f^2 - u_r^2) is the current
        per_charge = self.strength * modulation / (c.slope * field * np.sqrt(drag2))
        current = per_charge * gap * (c.u[0] + c.u[1])
        by_end = self.per_ut * per_charge * c.u
        by_end -= self.per_two_ut * current * pull / drag2
        by_end *= c.s
        by_vds = self.early * current * vds / (smooth_vds * modulation)
        # d ln n / d vg with n = 1 / slope, and d ln V / d vg
        bend = 0.5 * self.body_half / (c.root * c.root * c.root * c.slope)
        by_field = reduction * c.slope / (smooth_vp * field)
        gm = (by_end[0] - by_end[1]) * c.slope - current * (bend + by_field)
        by_end += by_vds
        return Drain(id=current, gm=gm, gds=by_end[1], gms=by_end[0])

    def _saturation(self, c: _Channel) -> Saturation:
        return Saturation(
            vdsat=2.0 * self.ut * c.u[0] + 4.0 * self.ut,
            by_gate=c.s[0] * c.slope,
            by_source=-c.s[0],
            inversion=c.u[0] * c.u[0],
        )

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V], all of shape (T, N)."""
        return self._drain(self._channel(vg, vd, vs), vd - vs)

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return vdsat = 2 ut sqrt(if) + 4 ut and the forward inversion level if."""
        return self._saturation(self._channel(vg, vd, vs))

    def drain_and_saturation(self, vg: Array, vd: Array, vs: Array) -> tuple[Drain, Saturation]:
        """Return both at once, for less than one after the other."""
        c = self._channel(vg, vd, vs)
        return self._drain(c, vd - vs), self._saturation(c)

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return gate capacitances [F]: the charge expressions of the same authors (value from memory).

        With xf, xr = sqrt(1/4 + if, ir): cgs = 2/3 (1 - (xr^2 + xr + xf/2) / (xf + xr)^2), cgd with the roles
        turned, cgb = (n - 1)/n (1 - cgs - cgd), all times the oxide capacitance.
        """
        c = self._channel(vg, vd, vs)
        xf, xr = np.sqrt(0.25 + c.u * c.u)
        total2 = (xf + xr) ** 2
        source = 2.0 / 3.0 * (1.0 - (xr * xr + xr + 0.5 * xf) / total2)
        drain = 2.0 / 3.0 * (1.0 - (xf * xf + xf + 0.5 * xr) / total2)
        bulk = (1.0 - c.slope) * (1.0 - source - drain)
        return Capacitances(
            cgs=self.oxide * source + self.overlap,
            cgd=self.oxide * drain + self.overlap,
            cgb=self.oxide * bulk,
        )

    def noise_conductance(self, vg: Array, vd: Array, vs: Array) -> Array:
        """Return Gamma gms [S], from half of gms (weak inversion) to two thirds of it (strong), all of it at vds = 0.

        Enz and Vittoz, Charge-Based MOS Transistor Modeling, Wiley, 2006 (value from memory): each part of the channel
        has the noise of its charge, so Gamma is the mean charge over that at the source. With the normalised charges
        qs, qd of the ends, i = q^2 + q,

            Gamma = (4 (qs^2 + qs qd + qd^2) + 3 (qs + qd)) / (6 qs (qs + qd + 1)).

        Where drain and source have changed roles, gds stands for gms. Velocity saturation adds nothing to Gamma.
        """
        c = self._channel(vg, vd, vs)
        drain = self._drain(c, vd - vs)
        inversion = c.u * c.u
        charge = inversion / (np.sqrt(0.25 + inversion) + 0.5)
        qs = np.maximum(charge[0], charge[1])
        ratio = np.minimum(charge[0], charge[1]) / np.maximum(qs, _CHARGE_MIN)
        gamma = (4.0 * qs * (1.0 + ratio + ratio * ratio) + 3.0 * (1.0 + ratio)) / (6.0 * (qs * (1.0 + ratio) + 1.0))
        return gamma * np.where(vd >= vs, drain.gms, drain.gds)

    def _needed_inversion(self, current: Array) -> Array:
        """Return vp - vs [V] at which a saturated device carries `current`, without second-order effects."""
        u = np.sqrt(current / (1.25 * self.strength))  # slope factor of about 1.25
        needed: Array = 2.0 * self.ut * np.log(np.expm1(np.clip(u, 1e-12, _EXPONENT_MAX)))
        return needed

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current`; a start for Newton."""
        vp = self._needed_inversion(current) + vs
        root_phi = self.root_start - self.body_half
        root = np.sqrt(np.maximum(root_phi**2 + vp, 0.0))
        return self.threshold + vp + self.body_effect * (root - root_phi)

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current`; a start for Newton."""
        drive = vg - self.threshold
        root = np.sqrt(np.maximum(drive + self.root_start2, self.root_floor))
        vp = drive - self.body_effect * (root - self.root_start)
        return vp - self._needed_inversion(current)
