"""A population of level-1 stages under every small-signal drive, and their noise, in one process of the simulator."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
from scipy.integrate import simpson
from scipy.interpolate import CubicSpline

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from tests.reference import spice
from tests.reference.bench import Bench, at_rest, saving
from tests.reference.samples import Kind, sized

FIGURES = ("id", "gm", "gds", "gmbs", "vdsat")  # of every transistor at the operating point
LOW, HIGH = 1e-9, 1e6  # Hz, of the single points; a telescopic stage has poles near 1 Hz, so 1 mHz is not low enough
SWEEP = (20, 0.1, 1e11)  # points a decade, first and last frequency of the sweep of the differential gain
NOISE = (10, 10.0, 1e7)  # of the noise; its points are among those of the sweep
SOURCES = {"inp": "v_inp", "inn": "v_inn", "supply": "v_supply", "ground": "v_ground", "into": "i_into"}
DRIVES = {
    "rest": {"inp": 0.5, "inn": -0.5},
    "common": {"inp": 1.0, "inn": 1.0},
    "supply": {"supply": 1.0},
    "ground": {"ground": 1.0},
    "into": {"into": 1.0},
}
NEAR_TRIODE = (
    0.025  # V; below this drain-source voltage the simulator's gate capacitances are those of the triode region
)


@dataclass(frozen=True)
class SmallSignal(Bench):
    """Such a population; the plots of the drives hold `LOW` and `HIGH` as their first two points."""

    def at(self, plot: str, *, mean: bool = False) -> Array:
        """Return the output, or the mean of its sides, at DC (real) and at `HIGH`, (2, N)."""
        values = (self.mean(plot) if mean else self.output(plot))[:, :2].T.copy()
        values[0] = values[0].real
        return values

    @cached_property
    def gain(self) -> CubicSpline:
        """ln |gain| and phase against that at DC [rad] over the logarithm of the frequency, (2, N)."""
        frequency, turned = self.plots["sweep"]["frequency"].real, self.output("sweep") / self.at("rest")[0][:, None]
        magnitude = np.log(np.abs(self.output("sweep")))
        return CubicSpline(np.log(frequency), [magnitude, np.unwrap(np.angle(turned))], axis=2)

    def crossing(self, level: Array) -> tuple[Array, Array]:
        """Return where each gain first falls below its level [Hz], NaN where never, and the phase there [deg]."""
        fine = np.linspace(*np.log(SWEEP[1:]), 4000)
        over = self.gain(fine)[0] - np.log(level)[:, None]
        after, every = (over < 0.0).argmax(axis=1), np.arange(len(level))
        part = over[every, after] / (over[every, after] - over[every, after - 1])
        at = fine[after] - part * (fine[1] - fine[0])
        phase = np.array([self.gain(x)[1, k] for k, x in enumerate(at)])
        return np.where(after > 0, np.exp(at), np.nan), np.degrees(phase)

    def input_capacitance(self, point: int) -> Array:
        """Return the capacitance at the heavier input under the differential drive, at `LOW` or `HIGH`, (N,)."""
        angular = 2.0 * np.pi * self.plots["rest"]["frequency"].real[point]
        currents = [
            self.plots["rest"].stack([f"i(v_{side}_{k})" for k in range(self.a.circuit.designs)]).imag[:, point] / drive
            for side, drive in DRIVES["rest"].items()
        ]
        return -np.min(currents, axis=0) / angular

    @cached_property
    def input_noise(self) -> tuple[Array, Array, Array]:
        """Frequencies (points,), white and flicker noise at the differential input there, (N, points) [V^2/Hz]."""
        plot, sweep = self.plots["noise"], self.plots["sweep"]["frequency"].real
        points = plot["frequency"].real
        shared = [int(np.abs(np.log(sweep / f)).argmin()) for f in points]
        np.testing.assert_allclose(sweep[shared], points, rtol=1e-9)
        white, flicker = spice.output_noise(self.a.circuit, plot, self.figures("gm"))
        power = np.abs(self.output("sweep")[:, shared]) ** 2
        return points, white / power, flicker / power

    def input_noise_total(self) -> Array:
        """Return the noise at the input over the band [V], (N,); Simpson's rule on the logarithm of the frequency."""
        points, white, flicker = self.input_noise
        return np.sqrt(simpson((white + flicker) * points, x=np.log(points), axis=1))


def ordinary(kind: Kind, count: int) -> Analysis:
    """Return saturated sizings of which the simulator thinks as the law does.

    Left out are a few with a drain-source voltage below `NEAR_TRIODE`, and with a source below the bulk: there both go
    on along the tangent of the square root of the body effect, but the simulator takes gmb from the root all the same,
    which is not the slope of its own current.
    """
    a = sized(kind, "handbook", count + 12)
    good = (a.terminals.vds.min(axis=0) > NEAR_TRIODE) & (a.terminals.source.min(axis=0) >= 0.0)
    picked = np.flatnonzero(good)[:count]
    assert len(picked) == count
    return Analysis(a.circuit.take(picked))


def solved(ngspice: str, folder: Path, a: Analysis) -> SmallSignal:
    """Run a population of level-1 stages, each with a ground of its own, through all drives."""
    designs = range(a.circuit.designs)
    lines, inputs = [], at_rest(a)
    for k in designs:
        plus, minus = spice.output_terminals(a.circuit, k)
        lines += spice.stage(a.circuit, k, spice.level1, own_ground=True) + inputs(k)
        lines += [f"i_into_{k} {minus} {plus} 0 ac 0", *spice.nodesets(a.circuit, k, a.point.v, digits=3)]
    chain, total = spice.output_chain(a.circuit)
    analyses = {"op": [*saving(a, FIGURES), "op", "delete all"]}
    before: dict[str, float] = {}
    for name, drive in DRIVES.items():
        changed = dict.fromkeys(before, 0.0) | drive
        alter = [f"alter @{SOURCES[source]}_{k}[acmag]={value}" for source, value in changed.items() for k in designs]
        analyses[name] = [*alter, f"ac lin 3 {LOW} {2.0 * HIGH}"]
        if name == "rest":
            analyses["sweep"] = [f"ac dec {' '.join(map(str, SWEEP))}"]
        before = drive
    analyses["noise"] = [f"noise v({total}) v_inp_0 dec {' '.join(map(str, NOISE))} 1", "setplot previous"]
    return SmallSignal(a, spice.simulate(ngspice, folder, [*lines, *chain], analyses))
