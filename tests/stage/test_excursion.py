"""The output swing against its own definition, point by point: the operating point is solved at every step of a sweep.

Common practice, no source; the comparison with a circuit simulator's sweep is in tests/reference.
"""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import size_circuit
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import (
    KINDS,
    Kind,
    analysed,
    driven_point,
    exposed,
    kinds_in,
    middle,
    named,
    random_sizes,
    saturated,
    stage,
    under,
    without,
)

DESIGNS, POINTS, RATIO = 6, 40, 3000.0
SIZES = {"width": (5e-6, 2e-4), "length": (2e-7, 4e-6), "resistance": (3e3, 6e4), "current": (5e-7, 1e-5)}


def swept(a: Analysis, sign: float, furthest: float) -> Array:
    """Return how far the output goes until the first margin vanishes, (N,), with a drive that grows exponentially and
    is then resolved around the end, twice since stacked cascodes reach it within microvolts."""
    n, k = a.circuit.designs, np.arange(a.circuit.designs)
    circuit = a.circuit.take(np.tile(k, POINTS))
    base = np.full(n * POINTS, a.circuit.conditions.middle)
    rest = a.wiring.output(a.point.v)
    drive = np.repeat(furthest * (RATIO ** np.linspace(0.0, 1.0, POINTS) - 1.0)[:, None] / (RATIO - 1.0), n, axis=1)
    for _ in range(3):
        half = 0.5 * sign * drive.ravel()
        point = driven_point(circuit, base + half, base - half)
        at = circuit.network.terminals(point.v)
        room = (at.vds - circuit.law.saturation(*at.of_law).vdsat)[a.wiring.saturating]
        current = circuit.law.drain(*at.of_law).id[a.wiring.pair]
        share = current / np.maximum(current.sum(axis=0), 1e-30)
        margin = np.concatenate([room, share - 0.01]).min(axis=0)
        margin = np.where(point.converged, margin, -1.0).reshape(POINTS, n)
        output = a.wiring.output(point.v).reshape(POINTS, n)
        first = (margin < 0.0).argmax(axis=0)
        assert (first > 0).all()
        before = first - 1
        drive = np.linspace(drive[before, k], drive[first, k], POINTS)
    part = margin[before, k] / (margin[before, k] - margin[first, k])
    return np.abs(output[before, k] + part * (output[first, k] - output[before, k]) - rest)


@pytest.mark.parametrize(("process", "kind"), kinds_in("handbook", "generic-180", "generic-65"), ids=named)
def test_output_swing(process: str, kind: Kind) -> None:
    """The bulk of the pair stands at its source in one of the processes."""
    a = saturated(kind, process, DESIGNS, 12, "source" if process == "generic-65" else "rail")
    reached = np.array([swept(a, sign, 1.2 * a.circuit.conditions.supply) for sign in (-1.0, 1.0)])
    np.testing.assert_allclose(np.array(a.output_excursions), reached, atol=5e-3)
    np.testing.assert_allclose(CATALOGUE["output_swing"].of(a), 2.0 * reached.min(axis=0), atol=1e-2)


@pytest.mark.parametrize(
    "kind",
    [k for k in KINDS if k[1] in ("resistor", "mirror") and k[2] in ("ideal", "single") and len(k) < 6],
    ids=named,
)
def test_output_swing_far_from_the_sizing_by_hand(kind: Kind) -> None:
    """Over decades of every size, for the kinds of which such sizings work."""
    p, topology = load_process("generic-180"), stage(kind)
    conditions = exposed(topology, 1.8, middle(kind[0], 1.8))
    every = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, 250, 12, SIZES)))
    good = np.flatnonzero(every.converged & (every.room_at_rest > 0.02))[:DESIGNS]
    assert len(good) == DESIGNS
    a = Analysis(every.circuit.take(good))
    steered = np.inf
    if kind[1] == "resistor":
        steered = a.drain.id[a.wiring.pair].sum(axis=0) * a.circuit.sizes["load.resistance"]
    reached = np.array([swept(a, sign, 1.2 * 1.8) for sign in (-1.0, 1.0)])
    wide = (steered > 0.03) & np.ones(DESIGNS, dtype=bool)
    np.testing.assert_allclose(np.array(a.output_excursions)[:, wide], reached[:, wide], atol=5e-3)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_a_swing_of_millivolts(input: str) -> None:
    """Small load resistors: 98 % of the tail current times the resistance is what full steering can do (standard)."""
    process, resistance = without("handbook", channel_modulation=0.0), np.array([20.0, 100.0, 400.0, 2e3])
    a = analysed((input, "resistor", "ideal", "differential"), process, load_resistance=resistance)
    np.testing.assert_allclose(np.array(a.output_excursions), 2 * [0.98 * 100e-6 * resistance], rtol=1e-2)


@pytest.mark.parametrize(("process", "kind"), kinds_in("handbook", "generic-180", "generic-65"), ids=named)
def test_single_precision_is_enough(process: str, kind: Kind) -> None:
    """Range ends and excursions in single precision are those of double precision to a small part of a millivolt; the
    stages that are too delicate for it have double precision."""
    coarse, fine = (saturated(kind, process, 60, 7, half_range=0.05, room=0.0) for _ in range(2))
    fine.__dict__["coarse"] = np.float64
    assert coarse.moving[1].conductances.dtype == (np.float64 if coarse.topology.delicate else np.float32)
    assert fine.moving[1].conductances.dtype == np.float64
    np.testing.assert_allclose(coarse.room, fine.room, atol=2e-5)
    np.testing.assert_allclose(np.array(coarse.output_excursions), np.array(fine.output_excursions), atol=1e-4)


def test_a_high_supply_is_solved_in_double_precision() -> None:
    """exp(v / 2 ut) leaves single precision at 4.5 V and room temperature."""
    usual = saturated(("nmos", "resistor", "single"), "generic-180", 20, 7, room=0.0)
    a = under(usual, supply=9.0, common_mode=(4.95, 5.05))
    assert a.moving[1].conductances.dtype == np.float64
    assert np.isfinite(a.room).all()
    assert np.isfinite(np.array(a.output_excursions)).all()
