"""The decks that sweep the transistors of a library, and what is read back from them.

Transistors of all sizes stand side by side under the same voltages, so that one sweep serves them all. Every one is a
single finger. Four kinds of deck: currents and vdsat over vgs, vds and vsb; capacitances of the gate, and noise, at
fewer of these voltages; the capacitances of junctions.

The simulator's own threads are switched off: waiting for each other they take a hundred times as long as the work.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from optisize.errors import SimulationFailed
from optisize.process.law import Array
from optisize.process.library import Library, LibraryDevice
from optisize.process.spline import Box
from optisize.process.tabulated import Grids, gate_lift
from optisize.simulator.ngspice import Plot, last_lines, read_raw

OPTIONS = "gmin=1e-16 abstol=1e-16 reltol=1e-6 vntol=1e-9 itl1=500"
FIGURES = ("id", "isub", "vdsat")  # of an operating point; a model need not have isub
AC_FREQUENCY = 1e6  # Hz
AC_SWEEP = "dec 1 1e5 1e7"  # Hz, about it
NOISE = "dec 1 1 1e12"  # Hz; at the lowest two flicker noise is all there is, at the highest there is none
JUNCTION_SIZE = 10e-6  # m
RAW = "sweep.raw"
PER_LINE = 20


@dataclass(frozen=True)
class Subject:
    """One kind of transistor of a library at a corner and a temperature.

    Attributes:
        library: the library, its path absolute.
        channel: ``n`` or ``p``.
        corner: of the process.
        temperature: absolute [K].
        figures: those of FIGURES that the model has.
        mark: what the simulator puts before the name of a transistor of this model in the name of its noise.
    """

    library: Library
    channel: str
    corner: str
    temperature: float
    figures: tuple[str, ...] = FIGURES
    mark: str = "."

    @property
    def device(self) -> LibraryDevice:
        """How a deck names it."""
        return self.library.device(self.channel)

    @property
    def sign(self) -> int:
        """What turns voltages in n-channel sense into those of the deck."""
        return 1 if self.channel == "n" else -1

    def head(self, title: str) -> list[str]:
        """Return the first lines of a deck."""
        celsius = f"{self.temperature - 273.15:.10g}"
        text = f"* {title}: {self.device.name}, {self.corner}, {celsius} degC; one finger each"
        return [text, *self.library.includes(self.corner), f".options {OPTIONS} temp={celsius}"]

    def instance(self, name: str, nodes: Sequence[str], width: float, length: float, **junction: float) -> str:
        """Return the line of one finger; nodes of drain, gate, source, bulk."""
        shape = {"width": width, "length": length, **junction}
        return self.device.call(name, dict(zip("dgsb", nodes, strict=True)), shape, self.library.unit)


def _control(*commands: str) -> list[str]:
    return [".control", "set num_threads=1", "set filetype=binary", *commands, ".endc", ".end"]


def _volts(value: float) -> str:
    return f"{value:.10g}"


def _steps(node: str, clock: str, values: Array, sign: int) -> list[str]:
    """Return a source that takes a node through values while its clock goes 0, 1, 2 and so on."""
    points = [f"{k},{_volts(sign * float(v))}" for k, v in enumerate(values)]
    lines = [f"b{node} {node} 0 v=pwl(v({clock}),"]
    lines += [f"+ {','.join(points[i : i + 8])}," for i in range(0, len(points), 8)]
    lines[-1] = lines[-1].removesuffix(",") + ")"
    return [*lines, f"v{clock} {clock} 0 0"]


@dataclass(frozen=True)
class CurrentSweep:
    """Currents and saturation voltages of some lengths at all widths, over all voltages.

    Attributes:
        lengths, widths: [m].
        grids: the voltages.
    """

    subject: Subject
    lengths: Array
    widths: Array
    grids: Grids

    @property
    def title(self) -> str:
        """What the deck is of, for progress and messages."""
        return f"currents of {self.subject.device.name}"

    @property
    def _sizes(self) -> list[tuple[float, float]]:
        return [(float(w), float(x)) for x in self.lengths for w in self.widths]

    def deck(self) -> str:
        """Return the deck."""
        s = self.subject
        gate, vds, vsb = (axis.samples for axis in self.grids.current.axes)
        lines = s.head(self.title)
        lines += _steps("g", "gate_clock", gate, s.sign) + _steps("d", "drain_clock", vds, s.sign)
        for j, (v, lift) in enumerate(zip(vsb, gate_lift(vsb)[0], strict=True)):
            lines += [f"vb{j} b{j} 0 {_volts(-s.sign * v)}", f"vg{j} g{j} g {_volts(s.sign * lift)}"]
        names = []
        for k, (width, length) in enumerate(self._sizes):
            for j in range(len(vsb)):
                name = f"{k}_{j}"
                lines.append(s.instance(name, ("d", f"g{j}", "0", f"b{j}"), width, length))
                names += [s.device.vector(name, figure) for figure in s.figures]
        lines += [f".save {' '.join(names[i : i + PER_LINE])}" for i in range(0, len(names), PER_LINE)]
        sweep = f"dc vdrain_clock 0 {len(vds) - 1} 1 vgate_clock 0 {len(gate) - 1} 1"
        return "\n".join([*lines, *_control(sweep, f"write {RAW}")]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `current`, `vdsat` and `leak`, what flows to the bulk, (lengths, widths, vgs, vds, vsb).

        Raises SimulationFailed when something is missing or no sense can be made of it.
        """
        plot = _only(folder / RAW, said)
        vgs, vds, vsb = (axis.count for axis in self.grids.current.axes)
        shape = (len(self.lengths), len(self.widths), vsb, vgs, vds)
        found = {f: self._figure(plot, f, shape, said) for f in self.subject.figures}
        leak = np.abs(found["isub"]) if "isub" in found else np.zeros(shape)
        current = np.abs(found["id"]) + leak
        self._check(current, said)
        current, vdsat, leak = (np.moveaxis(x, 2, -1) for x in (current, np.abs(found["vdsat"]), leak))
        grids = self.grids
        return {
            "current": current,
            "vdsat": grids.thinned(vdsat, grids.vdsat),
            "leak": grids.thinned(leak, grids.leak),
        }

    def _figure(self, plot: Plot, figure: str, shape: tuple[int, ...], said: str) -> Array:
        lengths, widths, vsb, vgs, vds = shape
        names = [self.subject.device.vector(f"{k}_{j}", figure) for k in range(lengths * widths) for j in range(vsb)]
        lacking = [name for name in names if name not in plot]
        if lacking:
            raise SimulationFailed(f"the simulator gave no {lacking[0]}{last_lines(said)}")
        values = plot.stack(names)
        if values.shape[1] != vgs * vds:
            raise SimulationFailed(f"the sweep stopped after {values.shape[1]} of {vgs * vds} points{last_lines(said)}")
        return values.reshape(shape)

    def _check(self, current: Array, said: str) -> None:
        """Raise SimulationFailed for currents that are none."""
        vgs, vds, vsb = (axis.samples for axis in self.grids.current.axes)
        strong = current[..., -1, -1]
        bad = ~np.isfinite(current)
        if not bad.any() and (strong > 0.0).all():
            return
        where = np.argwhere(bad)[0] if bad.any() else [*np.argwhere(strong <= 0.0)[0], len(vgs) - 1, len(vds) - 1]
        x, w, j, i, d = (int(k) for k in where)
        raise SimulationFailed(
            f"the current is {current[x, w, j, i, d]:g} A at width {self.widths[w] * 1e6:g} um, length "
            f"{self.lengths[x] * 1e6:g} um, vgs {vgs[i] + gate_lift(vsb)[0][j]:g} V, vds {vds[d]:g} V, vsb {vsb[j]:g} V"
            f"{last_lines(said)}"
        )


def _only(path: Path, said: str) -> Plot:
    plots = read_raw(path)
    if len(plots) != 1:
        raise SimulationFailed(f"the simulator gave {len(plots)} sweeps where one was asked for{last_lines(said)}")
    return plots[0]


@dataclass(frozen=True)
class _SmallSweep:
    """Some lengths and widths over gate voltage and vds at one vsb, an analysis for each of these points."""

    subject: Subject
    lengths: Array
    widths: Array
    grids: Grids
    body: int

    @property
    def _sizes(self) -> list[tuple[float, float]]:
        return [(float(w), float(x)) for x in self.lengths for w in self.widths]

    def _arranged(self, values: NDArray[np.float64], box: Box) -> Array:
        """Return values (points, transistors) as (lengths, widths, vgs, vds, 1)."""
        gates, drains = (axis.count for axis in box.axes[:2])
        return values.T.reshape(len(self.lengths), len(self.widths), gates, drains, 1)

    def _at_each_point(self, box: Box, commands: Sequence[str]) -> list[str]:
        """Return the commands at every point."""
        sign = self.subject.sign
        gate, vds, vsb = (axis.samples for axis in box.axes)
        lines = ["set appendwrite"]
        for vgs in gate + gate_lift(vsb)[0][self.body]:
            for v in vds:
                lines += [f"alter vg dc={_volts(sign * vgs)}", f"alter vd dc={_volts(sign * v)}", *commands]
        return lines

    def _bulk(self, box: Box) -> str:
        return f"vb b 0 {_volts(-self.subject.sign * float(box.axes[2].samples[self.body]))}"

    def _read(self, path: Path, box: Box, said: str) -> list[Plot]:
        plots = read_raw(path)
        points = box.axes[0].count * box.axes[1].count
        if len(plots) != points:
            raise SimulationFailed(f"{len(plots)} of {points} points converged{last_lines(said)}")
        return plots

    def _checked(self, found: dict[str, Array], said: str) -> dict[str, Array]:
        for name, values in found.items():
            if not np.isfinite(values).all():
                raise SimulationFailed(f"{name} is not a number{last_lines(said)}")
        return found | {"body": np.array(self.body)}


class GateSweep(_SmallSweep):
    """Capacitances of the gate.

    One analysis gives three of them: what flows into a gate is purely reactive, and it is driven by a volt, the drain
    by one that leads by 90 degrees, the source by one through a filter.
    """

    @property
    def title(self) -> str:
        """What the deck is of, for progress and messages."""
        return f"gate capacitances of {self.subject.device.name}"

    def deck(self) -> str:
        """Return the deck."""
        s, box = self.subject, self.grids.gate
        lines = [*s.head(self.title), self._bulk(box)]
        lines += ["vg g 0 0 ac 1 0", "vd d 0 0 ac 1 90", "vlow in 0 0 ac 1 0", "rlow in low 1"]
        lines += [f"clow low 0 {1.0 / (2.0 * np.pi * AC_FREQUENCY):.10g}", "es s 0 low 0 1"]
        for k, (width, length) in enumerate(self._sizes):
            lines += [f"vg{k} g g{k} 0", s.instance(str(k), ("d", f"g{k}", "s", "b"), width, length)]
        gates = " ".join(f"i(vg{k})" for k in range(len(self._sizes)))
        commands = [f"ac {AC_SWEEP}", f"write {RAW} v(s) {gates}", "destroy all"]
        return "\n".join([*lines, *_control(*self._at_each_point(box, commands))]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `cgg`, `cgd`, `cgs` [F], each (lengths, widths, vgs, vds, 1), and `body`."""
        box = self.grids.gate
        plots = self._read(folder / RAW, box, said)
        gates = [f"i(vg{k})" for k in range(len(self._sizes))]
        charge = np.array([plot.stack(gates) for plot in plots]) / (2j * np.pi * plots[0]["frequency"])
        # What flows into a gate is cgg times its volt, less cgd times that of the drain, less cgs times the source's.
        source = plots[0]["v(s)"]
        drives = np.stack([np.ones(len(source)), np.full(len(source), -1j), -source], axis=1)
        solved = np.linalg.pinv(np.concatenate([drives.real, drives.imag]))
        parts = np.concatenate([charge.real, charge.imag], axis=2)
        names = ("cgg", "cgd", "cgs")
        found = {name: self._arranged(parts @ row, box) for name, row in zip(names, solved, strict=True)}
        return self._checked(found, said)


class NoiseSweep(_SmallSweep):
    """Noise of the drain current.

    A source of one ampere for every ampere of each drain adds all drains up at one node, so that one analysis gives
    the noise of every transistor.
    """

    @property
    def title(self) -> str:
        """What the deck is of, for progress and messages."""
        return f"noise of {self.subject.device.name}"

    def deck(self) -> str:
        """Return the deck."""
        s, box = self.subject, self.grids.noise
        lines = [*s.head(self.title), self._bulk(box), "vg g 0 0", "vd d 0 0"]
        for k, (width, length) in enumerate(self._sizes):
            lines += [f"vd{k} d d{k} 0", s.instance(str(k), (f"d{k}", "g", "0", "b"), width, length)]
            lines.append(f"f{k} 0 sum vd{k} 1")
        lines += ["rsum sum 0 1", "vnone none 0 0 ac 1", "rnone none 0 1"]
        names = " ".join(self._name(str(k)) for k in range(len(self._sizes)))
        commands = [f"noise v(sum) vnone {NOISE} 1", "setplot previous", f"write {RAW} {names}", "destroy all"]
        return "\n".join([*lines, *_control(*self._at_each_point(box, commands))]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `white`, `low`, `lower` [A^2/Hz], each (lengths, widths, vgs, vds, 1), and `body`."""
        box = self.grids.noise
        plots = self._read(folder / RAW, box, said)
        names = [self._name(str(k)) for k in range(len(self._sizes))]
        density = np.array([plot.stack(names)[:, [0, 1, -1]] for plot in plots]) ** 2
        found = {name: self._arranged(density[:, :, i], box) for i, name in enumerate(("lower", "low", "white"))}
        return self._checked(found, said)

    def _name(self, instance: str) -> str:
        """Return how the simulator names the noise of an instance."""
        named = self.subject.device.vector(instance, "").removeprefix("@").removesuffix("[]")
        return f"onoise{self.subject.mark}{named}"


@dataclass(frozen=True)
class JunctionSweep:
    """The capacitance of drain junctions of three shapes over their reverse voltage, with the channel off."""

    subject: Subject
    width: float
    length: float
    reverse: Array

    @property
    def title(self) -> str:
        """What the deck is of, for progress and messages."""
        return f"junctions of {self.subject.device.name}"

    def deck(self) -> str:
        """Return the deck."""
        s, w, x = self.subject, self.width, self.length
        lines = [*s.head(self.title), "vd d 0 0 ac 1", "vg g 0 0", "vs s 0 0"]
        side = JUNCTION_SIZE
        shapes: tuple[dict[str, float], ...] = ({}, {"drain_area": side * side}, {"drain_edge": side})
        for k, shape in enumerate(shapes):
            lines += [f"vb{k} b{k} 0 0", s.instance(str(k), ("d", "g", "s", f"b{k}"), w, x, **shape)]
        commands = ["set appendwrite"]
        for v in self.reverse:
            drain = s.sign * max(float(v), 0.0)
            bulk = s.sign * (max(float(v), 0.0) - float(v))
            # The source goes with the drain, so that no current flows whatever the gate does.
            commands += [f"alter vd dc={_volts(drain)}", f"alter vs dc={_volts(drain)}"]
            commands += [f"alter vb{k} dc={_volts(bulk)}" for k in range(len(shapes))]
            commands += [f"ac lin 1 {AC_FREQUENCY:g} {AC_FREQUENCY:g}", f"write {RAW}", "destroy all"]
        return "\n".join([*lines, *_control(*commands)]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `area` [F/m^2], `edge` and `gate` [F/m], each (reverse,)."""
        plots = read_raw(folder / RAW)
        if len(plots) != len(self.reverse):
            raise SimulationFailed(f"{len(plots)} of {len(self.reverse)} points converged{last_lines(said)}")
        names = [f"i(vb{k})" for k in range(3)]
        c = np.array([p.stack(names)[:, 0].imag for p in plots]).T / (2.0 * np.pi * AC_FREQUENCY)
        side = JUNCTION_SIZE
        return {
            "area": np.maximum(c[1] - c[0], 0.0) / side**2,
            "edge": np.maximum(c[2] - c[0], 0.0) / side,
            "gate": np.maximum(c[0], 0.0) / self.width,
        }


Sweep = CurrentSweep | GateSweep | NoiseSweep | JunctionSweep
