"""A population of sized stages as the kernel sees it and as the circuit simulator does."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology
from optisize.stage.elements import Transistor
from tests.reference import spice

Sources = Callable[[int], list[str]]


@dataclass(frozen=True)
class Bench:
    """A population solved twice: by the kernel (`a`) and by the simulator (`plots`)."""

    a: Analysis
    plots: dict[str, spice.Plot]

    @property
    def topology(self) -> Topology:
        return self.a.topology

    def voltage(self, plot: str, node: str) -> np.ndarray:
        """Return the voltage of a node of every stage, (N, points)."""
        return self.plots[plot].stack([f"v({spice.node(node, k)})" for k in range(self.a.circuit.designs)])

    def output(self, plot: str) -> np.ndarray:
        """Return the output of every stage, (N, points)."""
        return np.sum([sign * self.voltage(plot, node) for node, sign in self.topology.output], axis=0)

    def mean(self, plot: str) -> np.ndarray:
        """Return the output of every stage, of a differential one the mean of its sides, (N, points)."""
        return np.mean([self.voltage(plot, node) for node, _ in self.topology.output], axis=0)

    def figure(self, transistor: Transistor, name: str, plot: str = "op") -> np.ndarray:
        """Return a parameter of one transistor of every stage, (N, points)."""
        designs = range(self.a.circuit.designs)
        return self.plots[plot].stack([parameter(transistor.name, k, name) for k in designs])

    def figures(self, name: str) -> np.ndarray:
        """Return a parameter of every transistor at the operating point, (T, N)."""
        return np.array([self.figure(t, name)[:, 0] for t in self.topology.transistors])

    def supply_current(self) -> np.ndarray:
        """Return the current from the supply of every stage at the operating point, (N,)."""
        names = [f"i(v_supply_{k})" for k in range(self.a.circuit.designs)]
        return -self.plots["op"].stack(names)[:, 0]


def parameter(transistor: str, k: int, name: str) -> str:
    """Return the simulator's name of a parameter of one transistor of stage `k`."""
    return f"@m_{spice.part(transistor, k)}[{name}]"


def saving(a: Analysis, figures: Sequence[str]) -> list[str]:
    """Return the commands that keep figures of every transistor, until a ``delete all``; a sweep of them is slow."""
    names = [
        parameter(t.name, k, name) for t in a.topology.transistors for k in range(a.circuit.designs) for name in figures
    ]
    return [f"save all {' '.join(names[i : i + 50])}" for i in range(0, len(names), 50)]


def at_rest(a: Analysis) -> Sources:
    """Return sources at both inputs in the middle of the common-mode range; `drive` sets their small signals."""
    middle = spice.number(a.circuit.conditions.middle)
    return lambda k: [f"v_{side}_{k} {side}_{k} 0 {middle} ac 0" for side in ("inp", "inn")]


def drive(a: Analysis, positive: float, negative: float) -> list[str]:
    """Return the commands that set the small-signal drive of every stage."""
    values = {"inp": positive, "inn": negative}
    designs = range(a.circuit.designs)
    return [f"alter @v_{side}_{k}[acmag]={value}" for k in designs for side, value in values.items()]


def simulated(
    ngspice: str,
    folder: Path,
    a: Analysis,
    device: spice.Device,
    sources: Sources,
    analyses: dict[str, Sequence[str]],
    figures: Sequence[str] = (),
) -> Bench:
    """Run a population through the simulator, with `figures` of every transistor saved at every point."""
    lines = []
    for k in range(a.circuit.designs):
        lines += spice.stage(a.circuit, k, device) + sources(k) + spice.nodesets(a.circuit, k, a.point.v, digits=3)
    designs = range(a.circuit.designs)
    saves = [parameter(t.name, k, name) for t in a.topology.transistors for k in designs for name in figures]
    return Bench(a, spice.simulate(ngspice, folder, lines, analyses, saves))


def assert_same(found: Array, reference: Array, relative: float = 0.0, absolute: Array | float = 0.0) -> None:
    """Hold the deviation of every element within the sum of a relative and an absolute bound; name the worst."""
    assert found.shape == reference.shape
    assert np.isfinite(reference).all()
    share = np.abs(found - reference) / (relative * np.abs(reference) + absolute + 1e-300)
    share = np.where(np.isfinite(share), share, np.inf)
    worst = np.unravel_index(np.argmax(share), share.shape)
    assert share[worst] <= 1.0, (
        f"{found[worst]} against {reference[worst]} at {worst}, {share[worst]:.3g} times the bound"
    )
