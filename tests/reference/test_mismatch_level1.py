"""Mismatch against the circuit simulator: the same deviations in both, and two Monte Carlos that know of each other
only the process.

The deviations are drawn here, from Pelgrom, Duinmaijer and Welbers, "Matching properties of MOS transistors", IEEE JSSC
24, 1989 (from memory): A / sqrt(W L) for a difference, so a square root of a half of it for each device. The simulator
takes them as thresholds and transconductance parameters of level-1 models (Shichman and Hodges, IEEE JSSC 3, 1968) and
as resistances; a loop at DC takes the offset out by the input.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from optisize.process.card import Process
from optisize.process.law import Array
from optisize.stage import mismatch
from optisize.stage.analysis import Analysis
from optisize.stage.mismatch import Deviations, Sampled, varied
from tests.reference import spice
from tests.reference.bench import assert_same
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind, sized
from tests.reference.sweeps import DIGITS

KINDS = EVERY_KIND + SOURCE_TIED + DEGENERATED
# Every load, tail, form and output, both channels.
REPRESENTATIVE = [
    Kind("nmos", "resistor", "ideal"),
    Kind("pmos", "resistor", "cascode", "differential"),
    Kind("pmos", "resistor", "single"),
    Kind("nmos", "diode", "single", "differential"),
    Kind("pmos", "diode", "resistor"),
    Kind("nmos", "mirror", "cascode"),
    Kind("pmos", "mirror", "ideal"),
    Kind("nmos", "mirror", "resistor"),
    Kind("nmos", "source", "resistor", "differential"),
    Kind("pmos", "source", "cascode", "differential"),
    Kind("nmos", "source", "cascode", "differential", form="telescopic"),
    Kind("pmos", "mirror", "single", form="telescopic"),
    *SOURCE_TIED,
    *DEGENERATED[1:],
]
TWICE = [  # the simulator draws for itself, too
    Kind("nmos", "resistor", "single", "differential"),
    Kind("pmos", "mirror", "single"),
    Kind("nmos", "diode", "cascode"),
    Kind("pmos", "source", "single", "differential"),
    Kind("nmos", "mirror", "single", form="telescopic"),
    DEGENERATED[0],
]
SAMPLES, OWN_SAMPLES, SIMULATED_SAMPLES = 100, 20_000, 2000
CHUNK, OWN_CHUNK = 40, 2000  # stages side by side in one deck (the time grows with their square), and in the kernel
SAME = 2e-5  # relative, and of the standard deviation
LINEAR = 0.05
CONFIDENCE = 0.99


def spreads(a: Analysis) -> Deviations:
    """Return the standard deviations of every transistor and resistor of one design, each (T, 1) or (R, 1)."""
    process, sizes, top = a.circuit.process, a.circuit.sizes, a.topology
    cards = [process.nmos if top.channel(t) == "n" else process.pmos for t in top.transistors]
    areas = [
        sizes[f"{t.group}.width"][0] * (sizes[t.units][0] if t.units else 1.0) * sizes[f"{t.group}.length"][0]
        for t in top.transistors
    ]
    resistor = process.resistor
    squares = [sizes[r.size][0] / resistor.sheet_resistance for r in top.resistors]

    def alone(matching: Sequence[float], area: Sequence[float]) -> Array:
        """Return the part of one device in the spread of a difference of two."""
        return (np.array(matching) / np.sqrt(2.0 * np.array(area)))[:, None]

    return Deviations(
        alone([c.threshold_matching for c in cards], areas),
        alone([c.factor_matching for c in cards], areas),
        alone([resistor.matching] * len(squares), [n * resistor.width**2 for n in squares]),
    )


def drawn(sigmas: Deviations, count: int, seed: int) -> Deviations:
    """Return deviations of every transistor and resistor of one design, each (T, N) or (R, N)."""
    rng = np.random.default_rng(seed)
    return Deviations(*(sigma * rng.standard_normal((len(sigma), count)) for sigma in sigmas))


def deviating(a: Analysis, deviations: Deviations, k: int) -> spice.Device:
    """Return the level-1 device of sample `k`: each transistor has a threshold and a current factor of its own."""
    rows = {spice.part(t.name, k): row for row, t in enumerate(a.topology.transistors)}

    def device(t: spice.Transistor, process: Process) -> list[str]:
        table = "nmos" if t.channel == "n" else "pmos"
        card, row = getattr(process, table), rows[t.name]
        own = {
            "threshold": card.threshold + deviations.threshold[row, k],
            "current_factor": card.current_factor * (1.0 + deviations.factor[row, k]),
        }
        return spice.level1(t, process.model_copy(update={table: card.model_copy(update=own)}))

    return device


def simulated(ngspice: str, folder: Path, a: Analysis, deviations: Deviations) -> tuple[Array, Array]:
    """Return the offset and the common-mode gain to the output of samples of one design, by the simulator, (N,)."""
    count = deviations.threshold.shape[1]
    circuit = a.circuit.take(np.zeros(count, dtype=np.intp))
    v = np.repeat(a.point.v, count, axis=1)
    wanted = spice.number(float(a.wiring.output(a.point.v)[0]))
    offsets, gains = [], []
    for start in range(0, count, CHUNK):
        lines, part = [f"v_wanted wanted 0 {wanted}"], range(start, min(start + CHUNK, count))
        for k in part:
            device, off = deviating(a, deviations, k), deviations.resistance[:, k]
            lines += spice.stage(circuit, k, device, deviations=off) + spice.nodesets(circuit, k, v, DIGITS)
            lines += spice.nulled_input(circuit, k, "wanted", common=True)
        analyses = {"op": ["op"], "common": ["ac lin 1 1e-3 1e-3"]}
        plots = spice.simulate(ngspice, folder, lines, analyses)
        offsets.append(plots["op"].stack([f"v(null_{k})" for k in part])[:, 0])
        sides = [
            sign * plots["common"].stack([f"v({spice.node(node, k)})" for k in part])[:, 0].real
            for node, sign in a.topology.output
        ]
        gains.append(np.sum(sides, axis=0))
    return np.concatenate(offsets), np.concatenate(gains)


def solved(a: Analysis, deviations: Deviations) -> tuple[Array, Array]:
    """Return the same by the kernel."""
    count = deviations.threshold.shape[1]
    samples = Sampled(varied(a.circuit.take(np.zeros(count, dtype=np.intp)), deviations), a)
    assert samples.converged.all()
    return samples.offset, samples.wiring.output(samples.responses[:, 1])


@lru_cache(maxsize=32)
def sturdy(kind: Kind) -> Analysis:
    """Return the sizing with the most room of a few: mismatch is straight well inside saturation only."""
    a = sized(kind, "handbook", 8)
    best = int(np.argmax(a.room_at_rest))
    return Analysis(a.circuit.take(np.array([best])))


@lru_cache(maxsize=32)
def monte_carlo(kind: Kind, seed: int = 11) -> tuple[Array, Array]:
    """Return offset and common-mode gain by the kernel's own Monte Carlo of that sizing, with its own spreads."""
    a = sturdy(kind)
    sigmas = mismatch.spreads(a.circuit)
    chunks = [solved(a, drawn(sigmas, OWN_CHUNK, seed + i)) for i in range(OWN_SAMPLES // OWN_CHUNK)]
    offset, gain = (np.concatenate(x) for x in zip(*chunks, strict=True))
    return offset, gain


@pytest.mark.parametrize("kind", TWICE + REPRESENTATIVE, ids=str)
def test_first_order(kind: Kind) -> None:
    """The standard deviations of the measures are those of the Monte Carlo."""
    a, (offset, gain) = sturdy(kind), monte_carlo(kind)
    assert mismatch.offset_sigma(a)[0] == pytest.approx(offset.std(), rel=LINEAR)
    assert mismatch.common_gain_sigma(a)[0] == pytest.approx(gain.std(), rel=LINEAR)


@pytest.mark.parametrize("kind", TWICE, ids=str)
def test_two_monte_carlos(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """Means and standard deviations within the intervals (t, chi-square) of the simulator's samples."""
    a = sturdy(kind)
    samples = simulated(ngspice, tmp_path, a, drawn(spreads(a), SIMULATED_SAMPLES, seed=5))
    for own, found in zip(monte_carlo(kind), samples, strict=True):
        n, sigma = len(found), found.std(ddof=1)
        low, high = stats.t.interval(CONFIDENCE, n - 1, found.mean(), sigma / np.sqrt(n))
        assert low < own.mean() < high
        least, most = stats.chi2.interval(CONFIDENCE, n - 1)
        assert sigma * np.sqrt((n - 1) / most) < own.std() < sigma * np.sqrt((n - 1) / least)


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_the_same_deviations(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """The spreads, and sample by sample the offset and the common-mode gain with the offset taken out."""
    a = sized(kind, "handbook", 1)
    for own, reference in zip(mismatch.spreads(a.circuit), spreads(a), strict=True):
        np.testing.assert_allclose(own, reference, rtol=1e-12)
    deviations = drawn(spreads(a), SAMPLES, seed=7)
    for found, reference in zip(solved(a, deviations), simulated(ngspice, tmp_path, a, deviations), strict=True):
        assert_same(found, reference, SAME, SAME * reference.std())
