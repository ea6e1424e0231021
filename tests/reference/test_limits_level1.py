"""How far a stage can go, against sweeps of the circuit simulator's level-1 model: headroom, swing, slewing, refusal.

The saturation voltages and currents are the simulator's own, at every point of its sweep; the definitions are those of
the catalogue of measures (common practice, no source). Law: Shichman and Hodges, IEEE JSSC 3, 1968.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import size_circuit
from optisize.stage.measures import CATALOGUE
from tests.reference import spice
from tests.reference.bench import Bench, Sources, assert_same, at_rest, simulated
from tests.reference.samples import EVERY_KIND, SOURCE_TIED, Kind, conditions, draw, sized

SIZINGS = 40
KINDS = EVERY_KIND + SOURCE_TIED
VOLTAGE = 1e-4  # V, for a margin at a given point
SWING = 5e-3  # V, for an end that is interpolated between the points of a sweep
POINTS, RATIO = 320, 3000.0  # of a differential sweep, and of its largest step over its smallest
STEERED = 0.01  # the catalogue's bound on the current of an input transistor, of the pair's


def margins(bench: Bench, plot: str) -> Array:
    """Return vds - vdsat of every transistor that has to be saturated, by the simulator, (K, N, points)."""
    result = []
    for t in bench.topology.transistors:
        if t.saturates:
            sign = 1.0 if bench.topology.channel(t) == "n" else -1.0
            ends = [0.0 if n == "ground" else bench.voltage(plot, n) for n in (t.drain, t.source)]
            result.append(sign * (ends[0] - ends[1]) - np.abs(bench.figure(t, "vdsat", plot)))
    return np.array(result)


def steering(bench: Bench, plot: str) -> Array:
    """Return the share of each input transistor in the pair's current, by the simulator, (2, N, points)."""
    pair = [t for t in bench.topology.transistors if t.group == "input"]
    current = np.array([np.abs(bench.figure(t, "id", plot)) for t in pair])
    return current / current.sum(axis=0)


def common_sweep(k: int) -> list[str]:
    """Return inputs that both follow one swept source."""
    source = ["v_common common 0 0"] if k == 0 else []
    return source + [f"e_{side}_{k} {side}_{k} 0 common 0 1" for side in ("inp", "inn")]


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_headroom(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """The smallest margin over the range; that it lies at an end is what the kernel relies on."""
    a = sized(kind, "handbook", SIZINGS)
    low, high = a.circuit.conditions.common_mode
    sweep = [f"dc v_common {low!r} {high + 1e-9!r} {(high - low) / 10!r}"]
    bench = simulated(ngspice, tmp_path, a, spice.level1, common_sweep, {"sweep": sweep}, ("vdsat",))
    smallest = margins(bench, "sweep").min(axis=0)
    assert smallest.shape == (SIZINGS, 11)
    assert_same(CATALOGUE["headroom"].function(a), smallest[:, [0, -1]].min(axis=1), absolute=VOLTAGE)
    assert_same(CATALOGUE["headroom"].function(a), smallest.min(axis=1), absolute=VOLTAGE)
    assert_same(a.room_at_rest, smallest[:, 5], absolute=VOLTAGE)


def differential_sweep(middle: float, amplitudes: Array) -> Sources:
    """Return inputs that go apart with one swept source, each stage up to its own amplitude.

    The drive grows exponentially with the source, so that a gain of a hundred is as finely resolved as one of two.
    """

    def sources(k: int) -> list[str]:
        half = spice.number(0.5 * amplitudes[k] / (RATIO - 1.0))
        return [
            *(["v_sweep sweep 0 0"] if k == 0 else []),
            f"v_middle_{k} middle_{k} 0 {spice.number(middle)}",
            f"b_half_{k} half_{k} 0 v={half}*(exp({spice.number(np.log(RATIO))}*v(sweep))-1)",
            f"e_inp_{k} inp_{k} middle_{k} half_{k} 0 1",
            f"e_inn_{k} inn_{k} middle_{k} half_{k} 0 -1",
        ]

    return sources


def first_end(margin: Array, output: Array) -> Array:
    """Return how far the output is from its rest where the first margin (K, N, points) vanishes, (N,)."""
    smallest = margin.min(axis=0)
    result = np.full(len(output), np.nan)
    for k in range(len(output)):
        beyond = np.flatnonzero(smallest[k] < 0.0)
        if len(beyond) and beyond[0] > 0:
            i = beyond[0]
            part = smallest[k, i - 1] / (smallest[k, i - 1] - smallest[k, i])
            end = output[k, i - 1] + part * (output[k, i] - output[k, i - 1])
            result[k] = abs(end - output[k, 0])
    return result


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_output_swing(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """Both directions, up to the first transistor out of saturation or the pair steered to 99 %.

    The sweep begins at rest and goes beyond full steering, which a square-law pair reaches at sqrt(2) overdrives.
    """
    a = sized(kind, "handbook", SIZINGS)
    twice = Analysis(a.circuit.take(np.tile(np.arange(a.circuit.designs), 2)))
    sign = np.repeat([-1.0, 1.0], SIZINGS)
    amplitude = 1.6 * twice.saturation.vdsat[twice.wiring.rows["input.p"]] + 0.1
    sources = differential_sweep(a.circuit.conditions.middle, sign * amplitude)
    sweep = [f"dc v_sweep 0 1 {1 / POINTS}"]
    bench = simulated(ngspice, tmp_path, twice, spice.level1, sources, {"sweep": sweep}, ("id", "vdsat"))
    margin = np.concatenate([margins(bench, "sweep"), steering(bench, "sweep") - STEERED])
    reached = first_end(margin, bench.output("sweep")).reshape(2, SIZINGS)
    assert_same(np.array(a.output_excursions), reached, absolute=SWING)
    assert_same(CATALOGUE["output_swing"].function(a), 2.0 * reached.min(axis=0), absolute=SWING)


SLEWING = 1e-10  # F; a load that outweighs every capacitance of the transistors
STEP_TIME = 1e-10  # s, of the rise of the input
SLEW = 0.08  # of the slew rate; see the test for why the two differ

# Three sizings of each kind, all of about 100 uA: widths and lengths [um] of pair, mirror and tail.
SLEWED = {
    "input.width": np.array([60.0, 120.0, 30.0]) * 1e-6,
    "input.length": np.array([1.0, 2.0, 0.8]) * 1e-6,
    "load.width": np.array([40.0, 60.0, 20.0]) * 1e-6,
    "load.length": np.array([2.0, 3.0, 1.0]) * 1e-6,
    "load.resistance": np.array([15e3, 12e3, 10e3]),
    "tail.width": np.array([10.0, 20.0, 12.0]) * 1e-6,
    "tail.length": np.array([3.0, 4.0, 2.0]) * 1e-6,
    "tail.units": np.array([4.0, 5.0, 8.0]),
    "tail.current": np.array([80e-6, 100e-6, 120e-6]),
    "bias.current": np.array([20e-6, 20e-6, 15e-6]),
}


@pytest.mark.parametrize("kind", EVERY_KIND, ids=str)
def test_slew_rate(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """The steepest part of the answer to a step that steers the whole pair, from balance, with a large load.

    The definitions differ: the catalogue takes tail current and capacitance at rest (I over C; Gray, Hurst, Lewis and
    Meyer, Analysis and Design of Analog Integrated Circuits, ch. 6, from memory), while in the transient the tail
    current follows the tail node, the mirror's the output, and a resistor takes its part as soon as the output moves.
    """
    process = load_process("handbook")
    where = conditions(kind, process)
    where = type(where)(where.supply, where.common_mode, SLEWING)
    a = Analysis(size_circuit(kind.topology, process, where, {n: SLEWED[n] for n in kind.topology.size_names}))
    assert (a.room > 0.0).all()
    step = 0.6 if kind.input == "nmos" else -0.6

    def sources(k: int) -> list[str]:
        middle = where.middle
        rise = f"pulse({middle!r} {middle + step!r} 1n {STEP_TIME} {STEP_TIME} 1 2)"
        return [f"v_inp_{k} inp_{k} 0 {rise}", f"v_inn_{k} inn_{k} 0 {middle!r}"]

    looser = "option reltol=1e-5 abstol=1e-12 vntol=1e-8"  # currents of capacitors are no better than that
    bench = simulated(ngspice, tmp_path, a, spice.level1, sources, {"tran": [looser, "tran 1n 200n 0 1n"]})
    time, output = bench.plots["tran"]["time"], bench.output("tran")
    assert time[-1] > 199e-9
    at = np.linspace(60e-9, 190e-9, 66)  # after the step has fed through and the bias node has come to rest again
    answer = np.array([np.interp(at, time, row) for row in output])
    steepest = np.abs(np.diff(answer, axis=1)).max(axis=1) / (at[1] - at[0])
    assert_same(CATALOGUE["slew_rate"].function(a), steepest, SLEW)


@pytest.mark.parametrize("kind", [k for k in KINDS if k.input == "pmos" or k.tail == "ideal"], ids=str)
def test_designs_that_are_given_up_have_no_operating_point(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """Where the kernel finds none, the simulator puts a node far beyond the rails, where only junctions conduct."""
    process = load_process("handbook")
    sizes = draw(kind, process, 12_000, seed=3)
    every = Analysis(size_circuit(kind.topology, process, conditions(kind, process), sizes))
    given_up = np.flatnonzero(~every.converged)[:20]
    assert len(given_up) >= 5
    a = Analysis(every.circuit.take(given_up))
    bench = simulated(ngspice, tmp_path, a, spice.level1, at_rest(a), {"op": ["op"]})
    v = np.array([bench.voltage("op", node)[:, 0] for node in kind.topology.unknown])
    beyond = np.maximum(-v, v - a.circuit.conditions.supply).max(axis=0)
    assert beyond.min() > 0.4
