"""Sweeps of a population in the circuit simulator in which every stage goes its own way, and what is read from them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import partial
from pathlib import Path

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from tests.reference import spice
from tests.reference.bench import Bench, parameter

DIGITS = 3  # of the nodesets [V]; with one digit, stages with cascodes take a hundred times as long to begin
WITHOUT_JUNCTIONS = partial(spice.level1, leak=1e-100)  # an ideal tail pulls its node some volts beyond the rails
CURRENTS = "option abstol=1e-14"  # A; with a hundredth of it some population at rest does not converge
NEARER = 0.55  # how much of the way that is left remains after a step to an expected end, at first
STEPS = 10  # such steps; what is then left is half a percent
THROUGH = np.array([0.1, -0.35, -0.8, -1.7, -3.5])  # of that, before and beyond the end


@dataclass
class Ways:
    """The common-mode and the differential input voltage of every stage, stretch after stretch.

    Attributes:
        a: the stages.
        common, differential: of each stretch, (N, points) [V].
        analyses: the sweep of each stretch by its name.
    """

    a: Analysis
    common: list[Array] = field(default_factory=list)
    differential: list[Array] = field(default_factory=list)
    analyses: dict[str, Sequence[str]] = field(default_factory=dict)

    def add(self, name: str, *, common: Array | None = None, differential: Array | None = None) -> None:
        """Add a stretch; the common mode stays in the middle of its range, the differential input at zero."""
        given = common if common is not None else differential
        assert given is not None
        assert np.isfinite(given).all(), f"{name}: no way to where nothing was found"
        begin = 1 + sum(part.shape[1] for part in self.common)
        middle = np.full(given.shape, self.a.circuit.conditions.middle)
        self.common.append(middle if common is None else common)
        self.differential.append(np.zeros(given.shape) if differential is None else differential)
        self.analyses[name] = [CURRENTS, f"dc v_theta {begin} {begin + given.shape[1] - 1} 1"]

    def sources(self, k: int) -> list[str]:
        """Return the sources of the inputs of stage `k`."""
        lines = ["v_theta theta 0 0"] if k == 0 else []
        for name, parts in (("cm", self.common), ("d", self.differential)):
            lines += spice.path(f"{name}_{k}", np.concatenate([part[k] for part in parts]))
        return [
            *lines,
            f"e_inp_{k} inp_{k} cm_{k} d_{k} 0 0.5",
            f"e_inn_{k} inn_{k} cm_{k} d_{k} 0 -0.5",
        ]

    def run(
        self,
        ngspice: str,
        folder: Path,
        figures: Sequence[str],
        *,
        held: bool = False,
    ) -> Bench:
        """Run all stretches in one process of the simulator.

        Args:
            ngspice: path of the simulator.
            folder: where the files go.
            figures: of every transistor that are kept, such as ``id``.
            held: whether the drains of the pair are held at rest by `spice.held_drains`, without the load.
        """
        circuit, v = self.a.circuit, self.a.point.v
        lines: list[str] = []
        for k in range(circuit.designs):
            stage = spice.stage(circuit, k, WITHOUT_JUNCTIONS, loaded=not held) + self.sources(k)
            stage += spice.held_drains(circuit, k, v) if held else []
            there = {word for line in stage for word in line.split()}
            begin = spice.nodesets(circuit, k, v, DIGITS)
            lines += stage + [line for line in begin if line[line.index("(") + 1 : line.index(")")] in there]
        there = [t for t in self.a.topology.transistors if not (held and spice.of_load(t.name))]
        saves = [parameter(t.name, k, name) for t in there for k in range(circuit.designs) for name in figures]
        return Bench(self.a, spice.simulate(ngspice, folder, lines, self.analyses, saves))


def to_end(reach: Array) -> Array:
    """Return ways (N, points) from zero to where an end is expected (N,), and through it in steps of 0.2 %.

    The simulator expects every step of a sweep to be as large as the one before. So no step is less than half of it,
    or Newton starts beyond the end, where a transistor may be turned round, and does not find its way back.
    """
    left = NEARER ** np.arange(STEPS)
    return reach[:, None] * (1.0 - np.concatenate([left, left[-1] * THROUGH]))


def margins(bench: Bench, plot: str) -> Array:
    """Return vds - vdsat of every transistor that has to be saturated, by the simulator, (K, N, points)."""
    result = []
    for t in bench.topology.transistors:
        if t.saturates:
            sign = 1.0 if bench.topology.channel(t) == "n" else -1.0
            ends = [0.0 if n == "ground" else bench.voltage(plot, n) for n in (t.drain, t.source)]
            result.append(sign * (ends[0] - ends[1]) - np.abs(bench.figure(t, "vdsat", plot)))
    return np.array(result)


def pair(bench: Bench, plot: str) -> Array:
    """Return the currents of both input transistors, by the simulator, (2, N, points)."""
    rows = [t for t in bench.topology.transistors if t.group == "input"]
    return np.array([np.abs(bench.figure(t, "id", plot)) for t in rows])


def first_end(margin: Array, along: Array) -> Array:
    """Return where the first margin (K, N, points) vanishes, as read from another quantity (N, points), (N,).

    Infinite where none does.
    """
    smallest = margin.min(axis=0)
    assert (smallest[:, 0] > 0.0).all()
    beyond = (smallest < 0.0).argmax(axis=1)
    k = np.flatnonzero(beyond)
    i, result = beyond[k], np.full(len(along), np.inf)
    part = smallest[k, i - 1] / (smallest[k, i - 1] - smallest[k, i])
    result[k] = along[k, i - 1] + part * (along[k, i] - along[k, i - 1])
    return result
