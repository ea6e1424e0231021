"""A population of stages under every small-signal drive in one process of the circuit simulator, noise included."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
from scipy.interpolate import CubicSpline

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from tests.reference import spice
from tests.reference.bench import Bench, at_rest, saving

LOW, HIGH = 1e-9, 1e6  # Hz, of the single points: the lower is as good as DC, also for poles near 1 Hz
SWEEP = (8, 0.1, 1e11)  # points a decade, first and last frequency of the sweep of the differential gain
NOISE = (4, 10.0, 1e8)  # of the noise, whose points are among those of the sweep
DRIVES = {
    "rest": {"inp": 0.5, "inn": -0.5},
    "common": {"inp": 1.0, "inn": 1.0},
    "supply": {"supply": 1.0},
    "ground": {"ground": 1.0},
    "into": {"into": 1.0},
}
FIGURES = ("id", "gm", "gds", "gmbs", "vdsat")  # of every transistor at the operating point
SOURCES = {"inp": "v_inp", "inn": "v_inn", "supply": "v_supply", "ground": "v_ground", "into": "i_into"}


@dataclass(frozen=True)
class SmallSignal(Bench):
    """Such a population. The plots of the drives hold two frequencies, `LOW` and `HIGH`."""

    def input_currents(self) -> Array:
        """Return the currents into both inputs under the differential drive, (2, N, points)."""
        designs = range(self.a.circuit.designs)
        return -np.array([self.plots["rest"].stack([f"i(v_{side}_{k})" for k in designs]) for side in ("inp", "inn")])

    @cached_property
    def sweep(self) -> tuple[Array, Array]:
        """The frequencies of the sweep and the differential gain there, (points,) and (N, points)."""
        return self.plots["sweep"]["frequency"].real, self.output("sweep")

    @cached_property
    def logarithmic(self) -> CubicSpline:
        """ln(|gain|) and phase [rad] over the logarithm of the frequency, (N, 2)."""
        frequency, gain = self.sweep
        return CubicSpline(np.log(frequency), [np.log(np.abs(gain)), np.unwrap(np.angle(gain))], axis=2)

    def crossing(self, level: Array) -> Array:
        """Return where the gain of each stage first falls below its level [Hz], (N,); NaN where it never does."""
        fine = np.linspace(*np.log(SWEEP[1:]), 5000)
        over = self.logarithmic(fine)[0] - np.log(level)[:, None]
        after, every = (over < 0.0).argmax(axis=1), np.arange(len(level))
        part = over[every, after] / (over[every, after] - over[every, after - 1])
        return np.where(after > 0, np.exp(fine[after] - part * (fine[1] - fine[0])), np.nan)

    @cached_property
    def input_noise(self) -> tuple[Array, Array, Array]:
        """Frequencies (points,), white and flicker noise at the differential input there, (N, points) [V^2/Hz]."""
        frequency, gain = self.sweep
        plot = self.plots["noise"]
        parts = spice.output_noise(self.a.circuit, plot, self.figures("gm"))
        points = plot["frequency"].real
        every = SWEEP[0] // NOISE[0]
        first = int(np.searchsorted(frequency, 0.99 * points[0]))
        shared = slice(first, first + every * len(points), every)
        np.testing.assert_allclose(frequency[shared], points, rtol=1e-9)
        power = np.abs(gain[:, shared]) ** 2
        return points, parts[0] / power, parts[1] / power


def solved(ngspice: str, folder: Path, a: Analysis) -> SmallSignal:
    """Run a population of level-1 stages, each with a ground of its own, through all drives."""
    designs = range(a.circuit.designs)
    lines, sources = [], at_rest(a)
    for k in designs:
        plus, minus = spice.output_terminals(a.circuit, k)
        lines += spice.stage(a.circuit, k, spice.level1, own_ground=True) + sources(k)
        lines += [f"i_into_{k} {minus} {plus} 0 ac 0", *spice.nodesets(a.circuit, k, a.point.v, digits=3)]
    chain, total = spice.output_chain(a.circuit)
    analyses: dict[str, list[str]] = {"op": [*saving(a, FIGURES), "op"]}
    before: dict[str, float] = {}
    for name, drive in DRIVES.items():
        changed = dict.fromkeys(before, 0.0) | drive
        alter = [f"alter @{SOURCES[source]}_{k}[acmag]={value}" for source, value in changed.items() for k in designs]
        analyses[name] = ["delete all", *alter, f"ac lin 3 {LOW} {2.0 * HIGH}"]
        if name == "rest":
            analyses["sweep"] = ["ac dec {} {} {}".format(*SWEEP)]
        before = drive
    analyses["noise"] = [f"noise v({total}) v_inp_0 dec {' '.join(map(str, NOISE))} 1", "setplot previous"]
    return SmallSignal(a, spice.simulate(ngspice, folder, [*lines, *chain], analyses))
