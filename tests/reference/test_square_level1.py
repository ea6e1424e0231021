"""The square law against the level-1 model of a circuit simulator: operating point, gains and frequency response.

Source: Shichman and Hodges, "Modeling and simulation of insulated-gate field-effect transistor switching circuits",
IEEE JSSC 3, 1968, as ngspice computes its level-1 model. Both are the same equations, so they have to agree to 0.1 %;
the crossings of the frequency response to 1 %, since the gate capacitances of the simulator follow Meyer, "MOS models
and circuit simulation", RCA Review 32, 1971 (value from memory), with transitions of its own.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage.measures import CATALOGUE
from tests.reference import spice
from tests.reference.bench import Bench, assert_same, at_rest, drive, simulated
from tests.reference.samples import EVERY_KIND, SOURCE_TIED, Kind, sized

SIZINGS = 44
TRIODE_SIZINGS = 12
SAME = 1e-3
SAME_CROSSING = 1e-2
FIGURES = ("id", "gm", "gds", "gmbs", "vdsat")
KINDS = EVERY_KIND + SOURCE_TIED


@pytest.fixture(scope="module", params=KINDS, ids=str)
def bench(request: pytest.FixtureRequest, ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> Bench:
    a = sized(request.param, "handbook", SIZINGS)
    analyses = {
        "op": ["op"],
        "rest": [*drive(a, 0.5, -0.5), "ac lin 1 1e-3 1e-3"],
        "sweep": ["ac dec 40 10 1e12"],
        "common": [*drive(a, 1.0, 1.0), "ac lin 1 1e-3 1e-3"],
    }
    return simulated(ngspice, tmp_path_factory.mktemp("level1"), a, spice.level1, at_rest(a), analyses, FIGURES)


def test_node_voltages(bench: Bench) -> None:
    for node in bench.topology.unknown:
        assert_same(bench.a.point.v[bench.a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)


@pytest.mark.parametrize("figure", ["id", "gm", "gds", "gmbs", "vdsat"])
def test_transistors(bench: Bench, figure: str) -> None:
    drain, vdsat = bench.a.drain, bench.a.saturation.vdsat
    own = {"id": drain.id, "gm": drain.gm, "gds": drain.gds, "gmbs": drain.gmb, "vdsat": vdsat}
    reference = np.abs(bench.figures(figure))
    if figure == "gmbs":
        # Where the source is below the bulk both go on along the tangent of the square root, but the simulator still
        # takes the slope from the root, which is not that of its own current; the kernel's is.
        forward = bench.a.terminals.source < 0.0
        assert forward.mean() < 0.1
        reference = np.where(forward, drain.gmb, reference)
    assert_same(own[figure], reference, SAME)


def test_supply_current(bench: Bench) -> None:
    assert_same(CATALOGUE["supply_current"].function(bench.a), bench.supply_current(), SAME)
    power = CATALOGUE["power"].function(bench.a)
    assert_same(power, bench.supply_current() * bench.a.circuit.conditions.supply, SAME)


def test_differential_gain(bench: Bench) -> None:
    """Within 0.1 %, or 0.01 dB."""
    reference = bench.output("rest")[:, 0].real
    assert_same(bench.a.adm, reference, SAME)
    assert_same(CATALOGUE["gain"].function(bench.a), 20.0 * np.log10(np.abs(reference)), absolute=0.01)


def test_common_mode_gain(bench: Bench) -> None:
    """Of a differential output: to the mean of its sides. With an ideal tail the simulator reads rounding only."""
    sides = [node for node, _ in bench.topology.output]
    reference = np.mean([bench.voltage("common", node)[:, 0].real for node in sides], axis=0)
    rejection = CATALOGUE["cmrr"].function(bench.a)
    if bench.topology.tail == "ideal":
        assert (bench.a.acm == 0.0).all()
        assert np.isposinf(rejection).all()
        assert np.abs(reference).max() < 1e-8
    else:
        assert_same(bench.a.acm, reference, SAME)
        simulated_rejection = 20.0 * np.log10(np.abs(bench.output("rest")[:, 0].real / reference))
        assert_same(rejection, simulated_rejection, absolute=0.02)


def crossings(frequency: Array, magnitude: Array, level: Array) -> Array:
    """Return where each response first falls below its level, straight on logarithmic axes; NaN where it never does."""
    result = np.full(len(level), np.nan)
    x, y = np.log(frequency), np.log(magnitude)
    for k, wanted in enumerate(np.log(level)):
        below = np.flatnonzero(y[k] < wanted)
        if len(below) and below[0] > 0:
            i = below[0]
            part = (wanted - y[k, i - 1]) / (y[k, i] - y[k, i - 1])
            result[k] = np.exp(x[i - 1] + part * (x[i] - x[i - 1]))
    return result


def test_bandwidth(bench: Bench) -> None:
    frequency, magnitude = bench.plots["sweep"]["frequency"].real, np.abs(bench.output("sweep"))
    reference = crossings(frequency, magnitude, np.abs(bench.output("rest")[:, 0]) / np.sqrt(2.0))
    assert_same(CATALOGUE["bandwidth"].function(bench.a), reference, SAME_CROSSING)


def test_unity_gain_frequency(bench: Bench) -> None:
    frequency, magnitude = bench.plots["sweep"]["frequency"].real, np.abs(bench.output("sweep"))
    reference = crossings(frequency, magnitude, np.ones(SIZINGS))
    amplifies = np.abs(bench.output("rest")[:, 0]) > 1.0
    own = CATALOGUE["unity_gain_frequency"].function(bench.a)
    assert (own[~amplifies] == 0.0).all()
    assert (np.isfinite(own[amplifies]) == np.isfinite(reference[amplifies])).all()
    both = amplifies & np.isfinite(reference)
    assert both.sum() > SIZINGS / 2
    assert_same(own[both], reference[both], SAME_CROSSING)


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_triode(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """Voltages and currents where a transistor that ought to be saturated is not."""
    a = sized(kind, "handbook", TRIODE_SIZINGS, saturated=False)
    bench = simulated(ngspice, tmp_path, a, spice.level1, at_rest(a), {"op": ["op"]}, FIGURES)
    for node in kind.topology.unknown:
        assert_same(a.point.v[a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)
    assert_same(a.drain.id, np.abs(bench.figures("id")), SAME)
    assert_same(a.drain.gm, bench.figures("gm"), SAME)
    assert_same(a.drain.gds, bench.figures("gds"), SAME)
