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

from optisize.process.law import Array, Capacitances, Drain, Pick, Saturation, taken
from optisize.process.parameters import TransistorParameters
from optisize.quantities import In

_EXPONENT_MAX = 300.0


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
    """Pinch-off and inversion of T transistors in N designs, shared by current, saturation and capacitances."""

    vp: Array
    root: Array
    slope: Array
    uf: Array
    ur: Array
    sf: Array
    sr: Array


@dataclass(frozen=True)
class ChargeLaw:
    """The charge law of T transistors in N designs; every array is (T, N) or broadcasts to it."""

    beta: Array
    threshold: Array
    body_effect: Array
    root_phi: Array
    root_floor: Array
    early: Array
    vertical_field: Array
    velocity: Array
    oxide: Array
    overlap: Array
    ut: Array

    @classmethod
    def bind(cls, parameters: Mapping[str, Array], width: Array, length: Array, ut: Array) -> Self:
        """Build the law for widths and lengths [m] of shape (T, N) at thermal voltage `ut` [V]."""
        gamma = parameters["body_effect"]
        return cls(
            beta=parameters["current_factor"] * width / length,
            threshold=parameters["threshold"],
            body_effect=gamma,
            root_phi=np.sqrt(parameters["surface_potential"]) + 0.5 * gamma,
            # Far below threshold the square root is held where the slope factor reaches 3; no current flows there.
            root_floor=np.maximum(0.75 * gamma, 0.01) ** 2,
            early=1.0 / (parameters["early_voltage"] * length),
            vertical_field=0.5 * parameters["vertical_field"],
            velocity=2.0 * ut / (parameters["critical_field"] * length),
            oxide=parameters["oxide_capacitance"] * width * length,
            overlap=parameters["overlap_capacitance"] * width,
            ut=ut,
        )

    def take(self, rows: Pick, columns: Pick) -> Self:
        """Return the same law for some of its transistors and designs."""
        return type(self)(*(taken(getattr(self, f.name), rows, columns) for f in fields(self)))

    def _channel(self, vg: Array, vd: Array, vs: Array) -> _Channel:
        """Return the inversion of both ends of the channel at bulk-referenced voltages [V]."""
        drive = vg - self.threshold
        root = np.sqrt(np.maximum(drive + self.root_phi**2, self.root_floor))
        vp = drive - self.body_effect * (root - self.root_phi)
        slope = 1.0 - 0.5 * self.body_effect / root
        scale = 0.5 / self.ut
        ef = np.exp(np.minimum((vp - vs) * scale, _EXPONENT_MAX))
        er = np.exp(np.minimum((vp - vd) * scale, _EXPONENT_MAX))
        ef1, er1 = ef + 1.0, er + 1.0
        return _Channel(vp, root, slope, np.log(ef1), np.log(er1), ef / ef1, er / er1)

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V], all of shape (T, N)."""
        c = self._channel(vg, vd, vs)
        vds, delta = vd - vs, 4.0 * self.ut
        smooth_vds = np.sqrt(vds * vds + delta * delta)
        modulation = 1.0 + self.early * (smooth_vds - delta)
        smooth_vp = np.sqrt(c.vp * c.vp + delta * delta)
        field = 1.0 + self.vertical_field * (c.vp + smooth_vp)
        gap = c.uf - c.ur
        pull = self.velocity * self.velocity * gap
        drag2 = 1.0 + pull * gap
        # per_charge * (uf^2 - ur^2) is the current
        per_charge = 2.0 * self.beta * self.ut**2 * modulation / (c.slope * field * np.sqrt(drag2))
        current = per_charge * gap * (c.uf + c.ur)
        # Derivatives of uf (ur) with respect to the pinch-off voltage: sf (sr) / 2 ut.
        drag_slope = current * pull / drag2
        by_source = (2.0 * per_charge * c.uf - drag_slope) * c.sf * (0.5 / self.ut)
        by_drain = (2.0 * per_charge * c.ur - drag_slope) * c.sr * (0.5 / self.ut)
        by_vds = current * self.early * vds / (smooth_vds * modulation)
        # n'/n with n = 1/slope: a half gamma over 2 root^3 and slope; held at the floor of the root
        bend = np.where(c.root * c.root > self.root_floor, 0.25 * self.body_effect / (c.root**3 * c.slope), 0.0)
        by_field = self.vertical_field * (1.0 + c.vp / smooth_vp) * c.slope / field
        gm = (by_source - by_drain) * c.slope - current * (bend + by_field)
        return Drain(id=current, gm=gm, gds=by_drain + by_vds, gms=by_source + by_vds)

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return vdsat = 2 ut sqrt(if) + 4 ut and the forward inversion level if."""
        c = self._channel(vg, vd, vs)
        return Saturation(
            vdsat=2.0 * self.ut * c.uf + 4.0 * self.ut,
            by_gate=c.sf * c.slope,
            by_source=-c.sf,
            inversion=c.uf * c.uf,
        )

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return gate capacitances [F]: the charge expressions of the same authors (value from memory).

        With xf, xr = sqrt(1/4 + if, ir): cgs = 2/3 (1 - (xr^2 + xr + xf/2) / (xf + xr)^2), cgd with the roles turned,
        cgb = (n - 1)/n (1 - cgs - cgd), all times the oxide capacitance.
        """
        c = self._channel(vg, vd, vs)
        xf, xr = np.sqrt(0.25 + c.uf**2), np.sqrt(0.25 + c.ur**2)
        total2 = (xf + xr) ** 2
        source = 2.0 / 3.0 * (1.0 - (xr**2 + xr + 0.5 * xf) / total2)
        drain = 2.0 / 3.0 * (1.0 - (xf**2 + xf + 0.5 * xr) / total2)
        bulk = (1.0 - c.slope) * (1.0 - source - drain)
        return Capacitances(
            cgs=self.oxide * source + self.overlap,
            cgd=self.oxide * drain + self.overlap,
            cgb=self.oxide * bulk,
        )

    def _needed_inversion(self, current: Array) -> Array:
        """Return vp - vs [V] at which a saturated device carries `current`, without second-order effects."""
        u = np.sqrt(current / (2.5 * self.beta * self.ut**2))  # slope factor of about 1.25
        needed: Array = 2.0 * self.ut * np.log(np.expm1(np.clip(u, 1e-12, _EXPONENT_MAX)))
        return needed

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current`; a start for Newton."""
        vp = self._needed_inversion(current) + vs
        root_phi = self.root_phi - 0.5 * self.body_effect
        root = np.sqrt(np.maximum(root_phi**2 + vp, 0.0))
        return self.threshold + vp + self.body_effect * (root - root_phi)

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current`; a start for Newton."""
        drive = vg - self.threshold
        root = np.sqrt(np.maximum(drive + self.root_phi**2, self.root_floor))
        vp = drive - self.body_effect * (root - self.root_phi)
        return vp - self._needed_inversion(current)
