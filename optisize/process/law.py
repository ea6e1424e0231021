"""What every transistor law offers, and the arrays that it is built from.

Terminal voltages are relative to the bulk and in n-channel sense (a p-channel device has every sign turned by the
caller). Arrays have the shape (T, N): transistors by designs; parameters may be (T, 1).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple, Protocol, Self

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Pick = slice | NDArray[np.intp]
Voltages = tuple[Array, Array, Array]


class Drain(NamedTuple):
    """The drain current and its derivatives, each of shape (T, N).

    Attributes:
        id: current into the drain [A].
        gm, gds, gms: derivatives with respect to gate, drain and (negative) source voltage [S].
    """

    id: Array
    gm: Array
    gds: Array
    gms: Array

    @property
    def gmb(self) -> Array:
        """Bulk transconductance [S]: all four terminals moved together change nothing."""
        return self.gms - self.gm - self.gds


class Saturation(NamedTuple):
    """The saturation voltage and how it moves with the terminals, each of shape (T, N).

    Attributes:
        vdsat: drain-source voltage at which saturation begins [V].
        by_gate, by_source: its derivatives with respect to gate and source voltage.
        inversion: forward inversion level (drain current over specific current), no unit.
    """

    vdsat: Array
    by_gate: Array
    by_source: Array
    inversion: Array


class Capacitances(NamedTuple):
    """Capacitances between gate and the other terminals, overlaps included [F], each of shape (T, N)."""

    cgs: Array
    cgd: Array
    cgb: Array


class Law(Protocol):
    """A transistor law bound to the parameters and sizes of T transistors in N designs."""

    @classmethod
    def bind(cls, parameters: Mapping[str, Array], width: Array, length: Array, ut: Array) -> Self:
        """Build the law for widths and lengths [m] of shape (T, N) at thermal voltage `ut` [V]."""

    def take(self, rows: Pick, columns: Pick) -> Self:
        """Return the same law for some of its transistors and designs."""

    def single(self) -> Self:
        """Return the same law in single precision."""

    def drain(self, vg: Array, vd: Array, vs: Array) -> Drain:
        """Return current and derivatives at the terminal voltages [V]."""

    def saturation(self, vg: Array, vd: Array, vs: Array) -> Saturation:
        """Return the saturation voltage and the inversion level at the terminal voltages [V]."""

    def drain_and_saturation(self, vg: Array, vd: Array, vs: Array) -> tuple[Drain, Saturation]:
        """Return both at once, sharing what they share."""

    def capacitances(self, vg: Array, vd: Array, vs: Array) -> Capacitances:
        """Return the gate capacitances at the terminal voltages [V]."""

    def noise_conductance(self, vg: Array, vd: Array, vs: Array) -> Array:
        """Return the conductance g [S] of the channel's white noise: its current has the density 4 k T g [A^2/Hz]."""

    def flicker(
        self, parameters: Mapping[str, Array], drain: Drain, v: Voltages, sizes: Voltages, frequency: float
    ) -> Array:
        """Return the flicker noise current at a frequency [A^2/Hz].

        Args:
            parameters: as for `bind`.
            drain: currents and derivatives at the terminal voltages `v` of gate, drain and source [V].
            sizes: width of a unit [m], units, length [m].
            frequency: [Hz].
        """

    def junctions(self, parameters: Mapping[str, Array], area: Array, edge: Array, reverse: Array) -> Array:
        """Return the capacitances [F] of drain or source junctions.

        Args:
            parameters: as for `bind`.
            area, edge: drawn area [m^2] and perimeter without the edge under the gate [m].
            reverse: voltage over the junction [V].
        """

    def leak(self, drain: Drain, vg: Array, vd: Array, vs: Array) -> Drain | None:
        """Return what of a drain current flows to the bulk, and its derivatives; None where the law has none."""

    def outside(self, vg: Array, vd: Array, vs: Array) -> NDArray[np.bool_] | None:
        """Tell which transistors are where the law knows nothing of them; None where it holds everywhere."""

    def why_outside(self, names: Sequence[str], vg: Array, vd: Array, vs: Array) -> list[str]:
        """Return what is outside in the first design, each one short text with the transistor's name."""

    def gate_voltage(self, current: Array, vs: Array) -> Array:
        """Estimate the gate voltage at which a saturated device carries `current` [A]; a start for Newton."""

    def source_voltage(self, current: Array, vg: Array) -> Array:
        """Estimate the source voltage at which a saturated device carries `current` [A]; a start for Newton."""


def taken(array: Array, rows: Pick, columns: Pick) -> Array:
    """Index the two axes of a parameter array, either of which may have length one for "the same for all"."""
    part = array if array.shape[0] == 1 else array[rows]
    return part if part.shape[1] == 1 else picked(part, columns)


def picked(array: Array, columns: Pick) -> Array:
    """Index the columns of an array that has one for every design, however few they are."""
    return array[:, columns] if isinstance(columns, slice) else array.take(columns, axis=1)


class OfParameters:
    """What every law with parameters of a process file says alike of junctions and flicker noise."""

    def flicker(
        self, parameters: Mapping[str, Array], drain: Drain, v: Voltages, sizes: Voltages, frequency: float
    ) -> Array:
        """Return the flicker noise current [A^2/Hz]: Kf / (Cox W L f^Af) at the gate, times gm^2."""
        width, units, length = sizes
        gate = parameters["oxide_capacitance"] * width * units * length * frequency ** parameters["flicker_exponent"]
        return parameters["flicker_coefficient"] * drain.gm**2 / gate

    def junctions(self, parameters: Mapping[str, Array], area: Array, edge: Array, reverse: Array) -> Array:
        """Return the depletion capacitance [F] of an area and its edge; grading powers of one logarithm."""
        built_in = parameters["junction_potential"]
        bias = np.log1p(np.maximum(reverse / built_in, -0.4))
        bottom = parameters["junction_capacitance"] * area * np.exp(-parameters["junction_grading"] * bias)
        return bottom + parameters["sidewall_capacitance"] * edge * np.exp(-parameters["sidewall_grading"] * bias)

    def leak(self, drain: Drain, vg: Array, vd: Array, vs: Array) -> None:
        """Return None: the whole drain current flows to the source."""
        return None

    def outside(self, vg: Array, vd: Array, vs: Array) -> None:
        """Return None: a law with parameters holds everywhere."""
        return None

    def why_outside(self, names: Sequence[str], vg: Array, vd: Array, vs: Array) -> list[str]:
        """Return nothing: a law with parameters holds everywhere."""
        return []
