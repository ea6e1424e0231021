"""The decks that sweep the transistors of a library, and what is read back from them.

Transistors of all sizes stand side by side under the same voltages, so that one sweep serves them all. Every one is a
single finger. Three kinds of deck: currents and vdsat over vgs, vds and vsb; capacitances of the gate and noise at fewer
of these voltages; the capacitances of junctions.

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
from optisize.simulator.ngspice import Plot, last_lines, read_raw

OPTIONS = "gmin=1e-16 abstol=1e-16 reltol=1e-6 vntol=1e-9 itl1=500"
FIGURES = ("id", "isub", "vdsat")  # of an operating point; a model need not have isub
AC_FREQUENCY = 1e6  # Hz
NOISE = "dec 1 1 1e12"  # Hz; at the lowest two flicker noise is all there is, at the highest there is none
JUNCTION_SIZE = 10e-6  # m
RAW, NOISE_RAW = "sweep.raw", "noise.raw"
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
    """

    library: Library
    channel: str
    corner: str
    temperature: float
    figures: tuple[str, ...] = FIGURES

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
        box: of the current; every `stride`-th drain voltage is one of vdsat.
    """

    subject: Subject
    lengths: Array
    widths: Array
    box: Box
    stride: int

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
        vgs, vds, vsb = (axis.samples for axis in self.box.axes)
        lines = s.head(self.title)
        lines += _steps("g", "gate_clock", vgs, s.sign) + _steps("d", "drain_clock", vds, s.sign)
        lines += [f"vb{j} b{j} 0 {_volts(-s.sign * float(v))}" for j, v in enumerate(vsb)]
        names = []
        for k, (width, length) in enumerate(self._sizes):
            for j in range(len(vsb)):
                name = f"{k}_{j}"
                lines.append(s.instance(name, ("d", "g", "0", f"b{j}"), width, length))
                names += [s.device.vector(name, figure) for figure in s.figures]
        lines += [f".save {' '.join(names[i : i + PER_LINE])}" for i in range(0, len(names), PER_LINE)]
        sweep = f"dc vdrain_clock 0 {len(vds) - 1} 1 vgate_clock 0 {len(vgs) - 1} 1"
        return "\n".join([*lines, *_control(sweep, f"write {RAW}")]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `current` and `vdsat`, (lengths, widths, vgs, vds, vsb).

        Raises SimulationFailed when something is missing or no sense can be made of it.
        """
        plot = _only(folder / RAW, said)
        vgs, vds, vsb = (axis.count for axis in self.box.axes)
        shape = (len(self.lengths), len(self.widths), vsb, vgs, vds)
        found = {f: self._figure(plot, f, shape, said) for f in self.subject.figures}
        current = np.abs(found["id"]) + np.abs(found.get("isub", np.zeros(1)))
        self._check(current, said)
        vdsat = np.abs(found["vdsat"][..., :: self.stride])
        return {"current": np.moveaxis(current, 2, -1), "vdsat": np.moveaxis(vdsat, 2, -1)}

    def _figure(self, plot: Plot, figure: str, shape: tuple[int, ...], said: str) -> Array:
        lengths, widths, vsb, vgs, vds = shape
        names = [self.subject.device.vector(f"{k}_{j}", figure) for k in range(lengths * widths) for j in range(vsb)]
        lacking = [name for name in names if name not in plot]
        if lacking:
            raise SimulationFailed(f"{self.title}: the simulator gave no {lacking[0]}{last_lines(said)}")
        values = plot.stack(names)
        if values.shape[1] != vgs * vds:
            raise SimulationFailed(
                f"{self.title}: the sweep stopped after {values.shape[1]} of {vgs * vds} points{last_lines(said)}"
            )
        return values.reshape(shape)

    def _check(self, current: Array, said: str) -> None:
        """Raise SimulationFailed for currents that are none."""
        vgs, vds, vsb = (axis.samples for axis in self.box.axes)
        strong = current[..., -1, -1]
        bad = ~np.isfinite(current)
        if not bad.any() and (strong > 0.0).all():
            return
        where = np.argwhere(bad)[0] if bad.any() else [*np.argwhere(strong <= 0.0)[0], len(vgs) - 1, len(vds) - 1]
        x, w, j, i, d = (int(k) for k in where)
        raise SimulationFailed(
            f"{self.title}: the current is {current[x, w, j, i, d]:g} A at width {self.widths[w] * 1e6:g} um, length "
            f"{self.lengths[x] * 1e6:g} um, vgs {vgs[i]:g} V, vds {vds[d]:g} V, vsb {vsb[j]:g} V{last_lines(said)}"
        )


def _only(path: Path, said: str) -> Plot:
    plots = read_raw(path)
    if len(plots) != 1:
        raise SimulationFailed(f"the simulator gave {len(plots)} sweeps where one was asked for{last_lines(said)}")
    return plots[0]


@dataclass(frozen=True)
class SmallSweep:
    """Capacitances of the gate and noise of all lengths and some widths, over vgs and vds at one vsb.

    Every transistor has sources in series with its gate and drain, in which its currents are read. A current source of
    one ampere per ampere of each drain adds all drains up at one node, so that one noise analysis gives every one.
    """

    subject: Subject
    lengths: Array
    widths: Array
    box: Box
    body: int

    @property
    def title(self) -> str:
        """What the deck is of, for progress and messages."""
        return f"capacitances and noise of {self.subject.device.name}"

    @property
    def _sizes(self) -> list[tuple[float, float]]:
        return [(float(w), float(x)) for x in self.lengths for w in self.widths]

    def deck(self) -> str:
        """Return the deck."""
        s = self.subject
        vgs, vds, vsb = (axis.samples for axis in self.box.axes)
        lines = s.head(self.title)
        lines += [f"v{terminal} {terminal} 0 0 ac 0" for terminal in "gds"]
        lines.append(f"vb b 0 {_volts(-s.sign * float(vsb[self.body]))}")
        for k, (width, length) in enumerate(self._sizes):
            lines += [f"vg{k} g g{k} 0", f"vd{k} d d{k} 0"]
            lines.append(s.instance(str(k), (f"d{k}", f"g{k}", "s", "b"), width, length))
            lines.append(f"f{k} 0 sum vd{k} 1")
        lines += ["rsum sum 0 1", "vnone none 0 0 ac 1", "rnone none 0 1"]
        count = len(self._sizes)
        gates = " ".join(f"i(vg{k})" for k in range(count))
        noises = " ".join(self._noise_name(str(k)) for k in range(count))
        commands = ["set appendwrite"]
        for gate in vgs:
            for drain in vds:
                commands += [f"alter vg dc={_volts(s.sign * gate)}", f"alter vd dc={_volts(s.sign * drain)}"]
                for terminal, before in (("g", "s"), ("d", "g"), ("s", "d")):
                    commands += [f"alter @v{before}[acmag]=0", f"alter @v{terminal}[acmag]=1"]
                    commands += [f"ac lin 1 {AC_FREQUENCY:g} {AC_FREQUENCY:g}", f"write {RAW} {gates}"]
                commands += [f"noise v(sum) vnone {NOISE} 1", "setplot previous", f"write {NOISE_RAW} {noises}"]
                commands.append("destroy all")
        return "\n".join([*lines, *_control(*commands)]) + "\n"

    def collect(self, folder: Path, said: str) -> dict[str, Array]:
        """Return `cgg`, `cgd`, `cgs` [F], `white`, `low`, `lower` [A^2/Hz], each (lengths, widths, vgs, vds, 1)."""
        axes = [axis.count for axis in self.box.axes]
        points, count = axes[0] * axes[1], len(self.lengths) * len(self.widths)
        plots, noises = read_raw(folder / RAW), read_raw(folder / NOISE_RAW)
        if len(plots) != 3 * points or len(noises) != points:
            raise SimulationFailed(
                f"{self.title}: {min(len(plots) // 3, len(noises))} of {points} points converged{last_lines(said)}"
            )

        def arranged(values: NDArray[np.float64]) -> Array:
            return values.T.reshape(len(self.lengths), len(self.widths), axes[0], axes[1], 1)

        gates = [f"i(vg{k})" for k in range(count)]
        susceptance = np.array([plot.stack(gates)[:, 0].imag for plot in plots]) / (2.0 * np.pi * AC_FREQUENCY)
        # A source between its own node and the gate carries what flows into the gate.
        found = {name: arranged(sign * susceptance[i::3]) for i, name, sign in ((0, "cgg", 1), (1, "cgd", -1), (2, "cgs", -1))}
        names = [self._noise_name(str(k)) for k in range(count)]
        density = np.array([plot.stack(names)[:, [0, 1, -1]] for plot in noises]) ** 2
        found |= {name: arranged(density[:, :, i]) for i, name in enumerate(("lower", "low", "white"))}
        for name, values in found.items():
            if not np.isfinite(values).all():
                raise SimulationFailed(f"{self.title}: {name} is not a number{last_lines(said)}")
        return found

    def _noise_name(self, instance: str) -> str:
        """Return how the simulator names the noise of an instance."""
        device = self.subject.device
        return f"onoise_m{instance}" if device.kind == "model" else f"onoise.m.x{instance}.{device.inner}".lower()


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
        shapes = ({}, {"drain_area": side * side}, {"drain_edge": side})
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
            raise SimulationFailed(f"{self.title}: {len(plots)} of {len(self.reverse)} points converged{last_lines(said)}")
        names = [f"i(vb{k})" for k in range(3)]
        c = np.array([p.stack(names)[:, 0].imag for p in plots]).T / (2.0 * np.pi * AC_FREQUENCY)
        side = JUNCTION_SIZE
        return {
            "area": np.maximum(c[1] - c[0], 0.0) / side**2,
            "edge": np.maximum(c[2] - c[0], 0.0) / side,
            "gate": np.maximum(c[0], 0.0) / self.width,
        }


Sweep = CurrentSweep | SmallSweep | JunctionSweep
