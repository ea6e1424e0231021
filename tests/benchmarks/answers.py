"""What the simulator answers, read from its results, and how far that may be from what the kernel says."""

from __future__ import annotations

import subprocess
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from tests.reference import spice

Plots = Mapping[str, spice.Plot]


@dataclass(frozen=True)
class Bound:
    """A bound on a deviation, in the unit of the measure or relative."""

    value: float
    relative: bool = False


DECIBELS, CROSSING, VOLTS = Bound(0.1), Bound(0.01, relative=True), Bound(5e-3)
BOUNDS: dict[str, Bound] = {
    "gain": DECIBELS,
    "common_mode_gain": Bound(0.01, relative=True),
    "cmrr": DECIBELS,
    "cmrr_at_1mhz": DECIBELS,
    "supply_rejection": DECIBELS,
    "supply_rejection_at_1mhz": DECIBELS,
    "ground_rejection": DECIBELS,
    "input_noise": Bound(0.02, relative=True),
    "input_noise_total": Bound(0.02, relative=True),
    "supply_current": CROSSING,
    "power": CROSSING,
    "headroom": VOLTS,
    "input_range_low": VOLTS,
    "input_range_high": VOLTS,
    "linear_range": VOLTS,
    "steering_voltage": VOLTS,
    "distortion": Bound(0.5),
    "output_swing": VOLTS,
    "bandwidth": CROSSING,
    "unity_gain_frequency": CROSSING,
    "phase": Bound(2.0),
    "output_resistance": CROSSING,
    "input_capacitance": CROSSING,
}


@dataclass(frozen=True)
class Reader:
    """Reads the measures of one design from its plots."""

    a: Analysis
    plots: Plots

    def node(self, plot: str, name: str) -> Any:
        """Return the voltage of a node in a sweep."""
        fixed = {"ground": 0.0, "supply": self.a.circuit.conditions.supply}
        return fixed[name] if name in fixed else self.plots[plot][f"v({spice.node(name, 0)})"]

    def output(self, plot: str, *, mirrored: bool = False) -> Any:
        """Return the output; mirrored: with the sides exchanged."""
        other = {"left": "right", "right": "left"} if mirrored else {}
        return sum(sign * self.node(plot, other.get(node, node)) for node, sign in self.a.topology.output)

    def mean(self, plot: str) -> Any:
        """Return the mean of the sides of the output."""
        sides = [self.node(plot, node) for node, _ in self.a.topology.output]
        return sum(sides) / len(sides)

    def room(self, plot: str) -> Array:
        """Return vds - vdsat of the transistors that have to be saturated, (K, points)."""
        top, rows = self.a.topology, []
        for t in (t for t in top.transistors if t.saturates):
            sign = 1.0 if top.channel(t) == "n" else -1.0
            across = self.node(plot, t.drain) - self.node(plot, t.source)
            rows.append(sign * across - np.abs(self.figure(plot, t.name, "vdsat")))
        return np.array(rows)

    def pair(self, plot: str) -> Array:
        """Return the currents of the input transistors, (2, points)."""
        return np.abs(np.array([self.figure(plot, name, "id") for name in ("input.p", "input.n")]))

    def figure(self, plot: str, transistor: str, name: str) -> Array:
        """Return a parameter of a transistor, (points,)."""
        found: Array = self.plots[plot][f"@m_{spice.part(transistor, 0)}[{name}]"]
        return found

    def fall(self, plot: str) -> tuple[Array, Array]:
        """Return ln f and ln(|H(0)/H|^2 - 1) of a frequency response."""
        magnitude = np.abs(self.output(plot))
        fall = np.log(np.maximum((magnitude[0] / magnitude) ** 2 - 1.0, 1e-12))
        return np.log(self.plots[plot]["frequency"].real), fall

    def crossing(self, plot: str, level: float) -> float:
        """Return where |H(0)/H|^2 - 1 rises through a level, straight between points on logarithmic axes."""
        if level <= 0.0:
            return float("nan")
        log_f, fall = self.fall(plot)
        place = first_zero(np.log(level) - fall)
        return float(np.exp(at(log_f, place)))

    def magnitude(self, plot: str, frequency: float) -> float:
        """Return |H| at a frequency within the response."""
        log_f, fall = self.fall(plot)
        there = np.exp(np.interp(np.log(frequency), log_f, fall))
        return float(np.abs(self.output(plot)[0]) / np.sqrt(1.0 + there))

    def turned(self, plot: str, frequency: float) -> float:
        """Return the phase of H at a frequency against that at DC [degrees]."""
        response = self.output(plot)
        phase = np.unwrap(np.angle(response / response[0]))
        return float(np.degrees(np.interp(np.log(frequency), self.fall(plot)[0], phase)))

    def swing(self) -> float:
        """Return the output swing from a sweep of the differential input."""
        current = self.pair("swing")
        margin = np.min([*self.room("swing"), *(np.sqrt(current / current.sum(axis=0)) - 0.1)], axis=0)
        output, rest = self.output("swing"), len(margin) // 2
        if self.a.topology.symmetric:
            walks = [(margin, output), (margin, self.output("swing", mirrored=True))]
        else:
            walks = [(margin[rest:], output[rest:]), (margin[rest::-1], output[rest::-1])]
        return 2.0 * float(min(abs(at(output, first_zero(m)) - output[0]) for m, output in walks))


def first_zero(margin: Array) -> float:
    """Return the place, a fraction of points, at which a margin first falls through zero; NaN where it does not."""
    below = np.flatnonzero(margin < 0.0)
    if not len(below) or below[0] == 0:
        return float("nan")
    i = int(below[0])
    return float(i - 1 + margin[i - 1] / (margin[i - 1] - margin[i]))


def at(values: Array, place: float) -> float:
    """Return the value at a place between points."""
    if not np.isfinite(place):
        return float("nan")
    return float(np.interp(place, np.arange(len(values)), values))


class Answering(Protocol):
    """A script of which answers can be read."""

    bounds: Mapping[str, Bound]

    @property
    def deck(self) -> list[str]: ...
    def commands(self, count: int, keep: bool = False) -> list[str]: ...
    def own(self) -> dict[str, Array]: ...
    def answers(self, plots: Plots, k: int) -> dict[str, float]: ...


def answered(ngspice: str, script: Answering, count: int) -> dict[str, tuple[Array, Array]]:
    """Return what the simulator and the kernel say of each measure, each (count,).

    The commands are those that are timed, with their results written.
    """
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        control = ["set filetype=binary", *script.commands(count, keep=True), "quit"]
        text = "\n".join([*script.deck, ".control", *control, ".endc", ".end"])
        (folder / "deck.sp").write_text(text + "\n", encoding="ascii")
        subprocess.run([ngspice, "-b", "-n", "deck.sp"], cwd=folder, capture_output=True, check=False, timeout=300)
        found = []
        for k in range(count):
            files = folder.glob(f"*_{k}.raw")
            plots = {path.stem.rpartition("_")[0]: spice.read_raw(path) for path in files}
            found.append(script.answers(plots, k))
    own = {key: values[:count] for key, values in script.own().items()}
    return {key: (np.array([answer[key] for answer in found]), values) for key, values in own.items()}


def checked(ngspice: str, script: Answering, count: int) -> dict[str, dict[str, float]]:
    """Return how right the simulator's answers are, by measure.

    Of each: the deviation from the kernel that 19 designs in 20 keep, its bound, and the share of designs within it.
    Where the kernel has no figure (rejection without limit, zero common-mode gain, no crossing) nothing is held against
    the simulator.
    """
    rows = {}
    for name, (found, expected) in answered(ngspice, script, count).items():
        known, bound = np.isfinite(expected) & (expected != 0.0), script.bounds[name]
        if not known.any():
            continue
        missed = np.abs(found - expected)[known] / (np.abs(expected)[known] if bound.relative else 1.0)
        missed = np.where(np.isnan(missed), np.inf, missed)
        rows[name] = {
            "deviation": float(np.quantile(missed, 0.95, method="lower")),
            "bound": bound.value,
            "within": float(np.mean(missed <= bound.value)),
        }
    return rows
