"""Linearity, steering, distortion and systematic offset against the circuit simulator's level-1 model.

The definitions are those of the catalogue of measures; the closed forms of a pair's curve (Gray, Hurst, Lewis and
Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3, from memory) are held elsewhere. Here every stage is
swept with all its elements. Law: Shichman and Hodges, IEEE JSSC 3, 1968.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.fft import dct

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.reference import spice
from tests.reference.bench import Bench, assert_same
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind, sized
from tests.reference.sweeps import DIGITS, Ways, first_end, pair, to_end

SIZINGS = 40
KINDS = EVERY_KIND + SOURCE_TIED + DEGENERATED
DEPARTURE, STEERED = 0.01, 0.01  # the catalogue's defaults
LITTLE = 0.02  # of the linear range
RANGE, STEERING, LEAST_STEERING = 1e-2, 2e-3, 3e-4  # relative; relative; V
PART = 0.4  # of the smaller excursion of the output, that a sine asks for at most
HARMONICS, DISTORTION = 16, 10.0 ** (0.5 / 20.0) - 1.0  # intervals of half a period; half a decibel
SHIFT, OFFSET, LEAST_OFFSET = 0.6, 1e-3, 1e-6  # of the excursion at which the output is wanted; relative; V
# What the simulator is told, and what it resolves of a third harmonic then. Stacked cascodes do not converge any finer.
FINER, RESOLVED = "option reltol=1e-9 vntol=1e-11", 3e-9
FINER_DELICATE, RESOLVED_DELICATE = "option reltol=1e-8 vntol=1e-11", 3e-8


def directions() -> Array:
    """Return the direction in which each stage is driven: matched stages answer alike both ways."""
    return np.where(np.arange(SIZINGS) % 2, 1.0, -1.0)


@pytest.fixture(scope="module", params=KINDS, ids=str)
def held(request: pytest.FixtureRequest, ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> Bench:
    """Held drains: a little both ways, then to 1 % of departure, then to 1 % of a current."""
    a = sized(request.param, "handbook", SIZINGS)
    ways = Ways(a)
    linear, steering = (CATALOGUE[name].of(a) for name in ("linear_range", "steering_voltage"))
    ways.add("little", differential=LITTLE * linear[:, None] * np.array([-1.0, 1.0]))
    ways.add("linear", differential=directions()[:, None] * to_end(linear))
    ways.add("steering", differential=directions()[:, None] * to_end(steering))
    return ways.run(ngspice, tmp_path_factory.mktemp("held"), ("id",), held=True)


def test_linear_range(held: Bench) -> None:
    """Where the difference of the pair's currents is 1 % off its tangent at rest, a short chord."""

    def difference(plot: str) -> tuple[Array, Array]:
        current = pair(held, plot)
        return held.voltage(plot, "d"), current[0] - current[1]

    (input, ends), (way, along) = difference("little"), difference("linear")
    tangent = np.diff(ends) / np.diff(input)
    gone = np.abs(along[:, 1:] / (tangent * way[:, 1:]) - 1.0)
    left = DEPARTURE - np.concatenate([np.zeros((SIZINGS, 1)), gone], axis=1)
    assert_same(CATALOGUE["linear_range"].of(held.a), first_end(left[None], np.abs(way)), RANGE)


def test_steering_voltage(held: Bench) -> None:
    """Where an input transistor is left with 1 % of the pair's current."""
    current = pair(held, "steering")
    reference = first_end(current / current.sum(axis=0) - STEERED, np.abs(held.voltage("steering", "d")))
    assert_same(CATALOGUE["steering_voltage"].of(held.a), reference, STEERING, LEAST_STEERING)


def sines(a: Analysis) -> Array:
    """Return a peak for the input of each stage, a power of two, that keeps its output well inside its swing, (N,)."""
    largest = PART * np.minimum(*a.output_excursions) / np.abs(a.adm)
    return 2.0 ** np.floor(np.log2(largest))


def distortions(a: Analysis, amplitude: Array) -> Array:
    """Return the measure of each stage at its own amplitude, (N,)."""
    result = np.empty(len(amplitude))
    for value in np.unique(amplitude):
        rows = np.flatnonzero(amplitude == value)
        measure = CATALOGUE["distortion"].at("distortion", {"amplitude": float(value)})
        result[rows] = measure.of(a.take(rows))
    return result


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_distortion(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """The static curve at the points of a sine, and its Fourier series by a cosine transform."""
    a = sized(kind, "handbook", SIZINGS)
    amplitude, ways = sines(a), Ways(a)
    to_peak, along = np.linspace(-0.5 * np.pi, 0.0, 7)[:-1], np.linspace(0.0, np.pi, HARMONICS + 1)
    ways.add("sine", differential=amplitude[:, None] * np.cos(np.concatenate([to_peak, along])))
    finer, resolved = (FINER_DELICATE, RESOLVED_DELICATE) if a.topology.delicate else (FINER, RESOLVED)
    ways.analyses["sine"] = [finer, *ways.analyses["sine"]]
    bench = ways.run(ngspice, tmp_path, ())
    series = dct(bench.output("sine")[:, len(to_peak) :], type=1, axis=1)
    found = 10.0 ** (distortions(a, amplitude) / 20.0)
    assert_same(found, np.abs(series[:, 3] / series[:, 1]), DISTORTION, resolved)


def wanting(a: Analysis) -> Analysis:
    """Return the same stages with an output wanted well away from rest, up and down by turns.

    As everything else that is the same for all designs as a rule, the wish may differ from one to the next.
    """
    down, up = a.output_excursions
    shift = SHIFT * np.where(np.arange(SIZINGS) % 2, up, -down)
    rest = a.wiring.output(a.point.v)
    other = Analysis(replace(a.circuit, conditions=replace(a.circuit.conditions, output_common_mode=rest + shift)))
    other.point = a.point
    return other


@pytest.mark.parametrize("kind", [k for k in KINDS if k.output == "single-ended"], ids=str)
def test_systematic_offset(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """The input that a loop at DC takes to bring the output to where it is wanted."""
    a = wanting(sized(kind, "handbook", SIZINGS))
    lines = []
    for k, wanted in enumerate(a.circuit.conditions.output_common_mode):
        lines += spice.stage(a.circuit, k, spice.level1) + spice.nodesets(a.circuit, k, a.point.v, DIGITS)
        lines += [f"v_wanted_{k} wanted_{k} 0 {spice.number(wanted)}"]
        lines += spice.nulled_input(a.circuit, k, f"wanted_{k}")
    plots = spice.simulate(ngspice, tmp_path, lines, {"op": [FINER, "op"]})
    reference = plots["op"].stack([f"v(null_{k})" for k in range(SIZINGS)])[:, 0]
    assert_same(CATALOGUE["offset_systematic"].of(a), reference, OFFSET, LEAST_OFFSET)
