"""The output swing against its own definition, point by point: the operating point is solved at every step of a sweep.

Common practice, no source; the comparison with a circuit simulator's sweep is in tests/reference.
"""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.measures import CATALOGUE
from optisize.stage.assembly import build
from tests.stage.stages import KINDS, driven_point, middle, random_sizes

DESIGNS, POINTS, RATIO = 12, 160, 3000.0
SIZES = {"width": (5e-6, 2e-4), "length": (2e-7, 4e-6), "resistance": (3e3, 6e4), "current": (5e-7, 1e-5)}


def swept(a: Analysis, sign: float, furthest: float) -> Array:
    """Return how far the output goes until the first margin vanishes, (N,), with a drive that grows exponentially."""
    n, circuit = a.circuit.designs, a.circuit.take(np.tile(np.arange(a.circuit.designs), POINTS))
    drive = furthest * (RATIO ** np.linspace(0.0, 1.0, POINTS) - 1.0) / (RATIO - 1.0)
    half = 0.5 * sign * np.repeat(drive, n)
    base = np.full(n * POINTS, a.circuit.conditions.middle)
    point = driven_point(circuit, base + half, base - half)
    terminals = circuit.network.terminals(point.v)
    at = (terminals.gate, terminals.drain, terminals.source)
    room = (terminals.drain - terminals.source - circuit.law.saturation(*at).vdsat)[a.wiring.saturating]
    current = circuit.law.drain(*at).id[a.wiring.pair]
    share = current / np.maximum(current.sum(axis=0), 1e-30)
    margin = np.concatenate([room, share - 0.01]).min(axis=0)
    margin = np.where(point.converged, margin, -1.0).reshape(POINTS, n)
    output = a.wiring.output(point.v).reshape(POINTS, n)
    first = (margin < 0.0).argmax(axis=0)
    assert (first > 0).all()
    k, before = np.arange(n), first - 1
    part = margin[before, k] / (margin[before, k] - margin[first, k])
    return np.abs(output[before, k] + part * (output[first, k] - output[before, k]) - output[0])


@pytest.mark.parametrize(("process", "bulk"), [("generic-180", "rail"), ("generic-65", "source"), ("handbook", "rail")])
@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_output_swing(process: str, kind: tuple[str, ...], bulk: str) -> None:
    p, topology = load_process(process), build(*kind, bulk=bulk)
    supply = p.nominal.supply
    common = middle(kind[0], supply)
    conditions = Conditions(supply, (common, common), 1e-12)
    every = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, 400, 12, SIZES)))
    a = Analysis(every.circuit.take(np.flatnonzero(every.converged & (every.room_at_rest > 0.02))[:DESIGNS]))
    assert a.circuit.designs == DESIGNS
    reached = np.array([swept(a, sign, 1.2 * supply) for sign in (-1.0, 1.0)])
    np.testing.assert_allclose(np.array(a.output_excursions), reached, atol=5e-3)
    np.testing.assert_allclose(CATALOGUE["output_swing"].function(a), 2.0 * reached.min(axis=0), atol=1e-2)


def spread_stages(process: str, kind: tuple[str, ...], supply: float) -> Analysis:
    """Return 400 saturated random stages over a common-mode range of 0.1 V."""
    p, topology = load_process(process), build(*kind)
    common = middle(kind[0], supply)
    conditions = Conditions(supply, (common - 0.05, common + 0.05), 1e-12)
    every = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, 1500, 7, SIZES)))
    return Analysis(every.circuit.take(np.flatnonzero(every.converged & (every.room_at_rest > 0.0))[:400]))


@pytest.mark.parametrize("process", ["generic-180", "generic-65", "handbook"])
@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_single_precision_is_enough(process: str, kind: tuple[str, ...]) -> None:
    """Range ends and excursions in single precision are those of double precision to a small part of a millivolt."""
    supply = load_process(process).nominal.supply
    coarse, fine = (spread_stages(process, kind, supply) for _ in range(2))
    fine.__dict__["coarse"] = np.float64
    assert coarse.moving[1].conductances.dtype == np.float32
    assert fine.moving[1].conductances.dtype == np.float64
    np.testing.assert_allclose(coarse.room, fine.room, atol=2e-5)
    np.testing.assert_allclose(np.array(coarse.output_excursions), np.array(fine.output_excursions), atol=1e-4)


def test_a_high_supply_is_solved_in_double_precision() -> None:
    """exp(v / 2 ut) leaves single precision at 4.5 V and room temperature."""
    a = spread_stages("generic-180", ("nmos", "resistor", "single"), 9.0)
    assert a.moving[1].conductances.dtype == np.float64
    assert np.isfinite(a.room).all()
    assert np.isfinite(np.array(a.output_excursions)).all()
