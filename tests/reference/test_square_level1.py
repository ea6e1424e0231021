"""The square law against the level-1 model of a circuit simulator: operating point and every small-signal measure.

Source: Shichman and Hodges, "Modeling and simulation of insulated-gate field-effect transistor switching circuits",
IEEE JSSC 3, 1968, as ngspice computes its level-1 model, with capacitances after Meyer, "MOS models and circuit
simulation", RCA Review 32, 1971 (value from memory). Both are the same equations, so they agree far better than the
bounds below say. The definitions of the measures are those of Gray, Hurst, Lewis and Meyer, Analysis and Design of
Analog Integrated Circuits, ch. 3 (from memory), as the catalogue has them.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage.measures import CATALOGUE
from tests.reference import small_signal, spice
from tests.reference.bench import assert_same, at_rest, simulated
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind, sized
from tests.reference.small_signal import FIGURES, HIGH, NOISE, SmallSignal, ordinary

SIZINGS = 44
TRIODE_SIZINGS = 10
SAME = 1e-3
SAME_CROSSING = 2e-3
SAME_PHASE = 0.2  # deg
SAME_TOTAL = 5e-3  # of an integral over a band
ROUNDED = 1e-14  # of the differential gain: what two sums of terms that cancel may differ by (280 dB)
NOTHING = 1e-10  # the same, of what the simulator's gmin of 1e-16 S leaves of a zero beside an ideal tail (200 dB)
KINDS = EVERY_KIND + SOURCE_TIED + DEGENERATED


@pytest.fixture(scope="module", params=KINDS, ids=str)
def bench(request: pytest.FixtureRequest, ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> SmallSignal:
    return small_signal.solved(ngspice, tmp_path_factory.mktemp("level1"), ordinary(request.param, SIZINGS))


def measure(bench: SmallSignal, name: str, *settings: float | tuple[float, float]) -> Array:
    return CATALOGUE[name].function(bench.a, *settings)


def decibels(ratio: Array) -> Array:
    return 20.0 * np.log10(np.abs(ratio))


def test_node_voltages(bench: SmallSignal) -> None:
    for node in bench.topology.unknown:
        assert_same(bench.a.point.v[bench.a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)


def test_transistors(bench: SmallSignal) -> None:
    drain, vdsat = bench.a.drain, bench.a.saturation.vdsat
    own = {"id": drain.id, "gm": drain.gm, "gds": drain.gds, "gmbs": drain.gmb, "vdsat": vdsat}
    for figure in FIGURES:
        assert_same(own[figure], np.abs(bench.figures(figure)), SAME)


def test_supply_current(bench: SmallSignal) -> None:
    assert_same(measure(bench, "supply_current"), bench.supply_current(), SAME)
    assert_same(measure(bench, "power"), bench.supply_current() * bench.a.circuit.conditions.supply, SAME)


def test_differential_gain(bench: SmallSignal) -> None:
    """Within 0.1 %, or 0.01 dB."""
    reference = bench.at("rest")[0].real
    assert_same(bench.a.adm, reference, SAME)
    assert_same(measure(bench, "gain"), decibels(reference), absolute=0.01)


def test_common_mode_gain(bench: SmallSignal) -> None:
    """Of a differential output: to the mean of its sides. Unlimited rejection is the business of the next test."""
    reference = bench.at("common", mean=True)[0].real
    rounding = ROUNDED * np.abs(bench.a.adm)
    assert_same(bench.a.acm, np.where(bench.a.acm == 0.0, 0.0, reference), SAME, rounding)
    assert_same(measure(bench, "common_mode_gain"), bench.a.acm)
    if bench.topology.tail == "ideal" or bench.topology.controls:
        assert (bench.a.acm == 0.0).all()


@pytest.mark.parametrize(
    ("name", "drive"), [("cmrr", "common"), ("supply_rejection", "supply"), ("ground_rejection", "ground")]
)
def test_rejection(bench: SmallSignal, name: str, drive: str) -> None:
    """At DC and at 1 MHz, within 0.1 % or 0.01 dB; of a differential output to the mean of its sides.

    A control holds that mean at every frequency, and an ideal tail lets neither the common mode nor its rail through
    at DC. There rejection is unlimited, and the simulator reads next to nothing.
    """
    tail_rail = "ground" if bench.topology.input == "nmos" else "supply"
    reference = np.abs(bench.at(drive, mean=True) / bench.at("rest"))
    for point, frequency in enumerate([0.0, HIGH]):
        rejection = measure(bench, name, frequency)
        unlimited = np.isposinf(rejection)
        ideal = bench.topology.tail == "ideal" and drive in ("common", tail_rail) and frequency == 0.0
        assert (unlimited == (ideal or bool(bench.topology.controls))).all()
        assert (reference[point][unlimited] < NOTHING).all()
        assert_same(10.0 ** (-rejection / 20.0), np.where(unlimited, 0.0, reference[point]), SAME, ROUNDED)


def test_bandwidth(bench: SmallSignal) -> None:
    reference, _ = bench.crossing(np.abs(bench.at("rest")[0]) / np.sqrt(2.0))
    assert_same(measure(bench, "bandwidth"), reference, SAME_CROSSING)


def test_unity_gain(bench: SmallSignal) -> None:
    """Frequency and phase."""
    reference, phase = bench.crossing(np.ones(SIZINGS))
    amplifies = np.abs(bench.at("rest")[0]) > 1.0
    assert amplifies.any()
    own = measure(bench, "unity_gain_frequency")
    assert (own[~amplifies] == 0.0).all()
    assert_same(own[amplifies], reference[amplifies], SAME_CROSSING)
    assert np.isnan(measure(bench, "phase")[~amplifies]).all()
    assert_same(measure(bench, "phase")[amplifies], phase[amplifies], absolute=SAME_PHASE)


def test_output_resistance(bench: SmallSignal) -> None:
    assert_same(measure(bench, "output_resistance"), bench.at("into")[0].real, SAME)


def test_input_capacitance(bench: SmallSignal) -> None:
    for point, frequency in enumerate([0.0, HIGH]):
        own = measure(bench, "input_capacitance", frequency)
        assert_same(own, bench.input_capacitance(point), SAME)


def test_input_noise(bench: SmallSignal) -> None:
    """At the ends of the band, where flicker and white noise have most of it, and over all of it."""
    points, white, flicker = bench.input_noise
    total = white + flicker
    assert (flicker[:, 0] / total[:, 0]).min() > 0.9
    assert np.median(white[:, -1] / total[:, -1]) > 0.8
    for point in (0, -1):
        assert_same(measure(bench, "input_noise", points[point]), np.sqrt(total[:, point]), SAME)
    assert_same(measure(bench, "input_noise_total", NOISE[1:]), bench.input_noise_total(), SAME_TOTAL)


@pytest.mark.parametrize("kind", KINDS, ids=str)
def test_triode(kind: Kind, ngspice: str, tmp_path: Path) -> None:
    """Voltages, currents and slopes where a transistor that ought to be saturated is not.

    Sources below the bulk are among them, so gmb is not compared; see `small_signal.ordinary`.
    """
    a = sized(kind, "handbook", TRIODE_SIZINGS, saturated=False)
    bench = simulated(ngspice, tmp_path, a, spice.level1, at_rest(a), {"op": ["op"]}, FIGURES)
    for node in kind.topology.unknown:
        assert_same(a.point.v[a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)
    assert_same(a.drain.id, np.abs(bench.figures("id")), SAME)
    assert_same(a.drain.gm, bench.figures("gm"), SAME)
    assert_same(a.drain.gds, bench.figures("gds"), SAME)
