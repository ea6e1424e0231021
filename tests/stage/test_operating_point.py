"""The operating point: conservation, large-signal curves of the pair, and what Newton does with hopeless designs."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process, thermal_voltage
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import build
from optisize.stage.bias import settle
from optisize.stage.circuit import Circuit, Conditions, size_circuit
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import KINDS, analysed, by_hand, driven_point, middle, pair_currents, random_sizes, without

PROCESSES = ("handbook", "generic-180", "generic-65")
USUAL = {"width": (2e-6, 1e-4), "length": (5e-7, 5e-6), "resistance": (2e3, 3e4), "current": (1e-6, 3e-5)}
UT = float(thermal_voltage(300.15))


def driven_pair(process, vid: Array, supply: float = 3.3, **changes) -> tuple[Circuit, Array]:
    """Return a pair with an ideal tail under differential inputs, and its two currents over the tail current."""
    topology = build("nmos", "resistor", "ideal", "differential")
    common = middle("nmos", supply)
    sizes = by_hand(topology, **changes)
    sizes = {name: np.repeat(value, len(vid)) for name, value in sizes.items()}
    circuit = size_circuit(topology, process, Conditions(supply, (common, common), 1e-12), sizes)
    point = driven_point(circuit, common + 0.5 * vid, common - 0.5 * vid)
    assert point.converged.all()
    return circuit, pair_currents(circuit, point) / sizes["tail.current"]


def test_weak_inversion_pair() -> None:
    """dI/I = tanh(vid / (2 n ut)), n = 1 without body effect, 99 % of it at 5.2933 ut; follows from the exponential
    law (standard result)."""
    process = without("generic-180", body_effect=0.0, early_voltage=1e15, vertical_field=0.0, critical_field=1e15)
    vid = np.linspace(-8.0, 8.0, 33) * UT
    _, share = driven_pair(process, vid, 1.8, input_width=4e-3, input_length=1e-6, tail_current=1e-9)
    np.testing.assert_allclose(share[0] - share[1], np.tanh(vid / (2.0 * UT)), atol=1e-3)
    _, share = driven_pair(
        process, np.array([5.2933 * UT]), 1.8, input_width=4e-3, input_length=1e-6, tail_current=1e-9
    )
    assert share[0, 0] - share[1, 0] == pytest.approx(0.99, abs=2e-4)


def test_weak_inversion_pair_with_body_effect() -> None:
    """The slope factor widens the curve: vid over n ut, with n that of the gate voltage."""
    process = without("generic-180", early_voltage=1e15, vertical_field=0.0, critical_field=1e15)
    vid = np.linspace(-2.0, 2.0, 17) * UT
    circuit, share = driven_pair(process, vid, 1.8, input_width=4e-3, input_length=1e-6, tail_current=1e-9)
    card = process.nmos
    root = np.sqrt(middle("nmos", 1.8) - card.threshold + (card.surface_potential**0.5 + card.body_effect / 2.0) ** 2)
    n = 1.0 / (1.0 - card.body_effect / (2.0 * root))
    assert 1.1 < n < 1.3
    assert circuit.law.take(slice(0, 1), slice(0, 1)).ut[0, 0] == pytest.approx(UT)
    np.testing.assert_allclose(share[0] - share[1], np.tanh(vid / (2.0 * n * UT)), atol=3e-3)


def test_square_law_pair() -> None:
    """dI/I = x sqrt(1 - x^2/4), x = vid/vov, all of it from sqrt(2) vov on: Gray, Hurst, Lewis and Meyer, Analysis and
    Design of Analog Integrated Circuits, ch. 3 (derived)."""
    process = without("handbook", body_effect=0.0, channel_modulation=0.0)
    vov = np.sqrt(100e-6 / (process.nmos.current_factor * 50.0))
    x = np.linspace(-1.41, 1.41, 48)
    _, share = driven_pair(process, x * vov, load_resistance=5e3)
    np.testing.assert_allclose(share[0] - share[1], x * np.sqrt(1.0 - 0.25 * x**2), atol=1e-9)
    _, share = driven_pair(process, np.array([1.0, 1.4143, 2.0]) * vov, load_resistance=5e3)
    np.testing.assert_allclose(share[0] - share[1], [0.8660254, 1.0, 1.0], atol=1e-6)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize(("input", "load"), [(i, j) for i in ("nmos", "pmos") for j in ("resistor", "mirror")])
def test_ideal_tail_steers_exactly(process: str, input: str, load: str) -> None:
    """The branch currents add up to the tail current at any input (common practice, no source).

    An overdrive below 20 mV, which only the square law knows, is left out: the last step of Newton is 0.3 uV long, and
    its square over that of the overdrive would be seen.
    """
    p = load_process(process)
    supply = p.nominal.supply
    topology = build(input, load, "ideal")
    count = 400
    rng = np.random.default_rng(8)
    sizes = random_sizes(topology, count, 8, USUAL)
    circuit = size_circuit(topology, p, Conditions(supply, (0.5 * supply,) * 2, 1e-12), sizes)
    common = rng.uniform(0.45, 1.1, count) if input == "nmos" else rng.uniform(-0.1, 0.55, count)
    apart = rng.uniform(-1.0, 1.0, count) * supply
    point = driven_point(circuit, common * supply + 0.5 * apart, common * supply - 0.5 * apart)
    assert point.converged.mean() > 0.9
    currents = pair_currents(circuit, point)
    steered = np.abs(currents[0] - currents[1]) > 0.98 * sizes["tail.current"]
    assert steered[point.converged].mean() > 0.2
    terminals = circuit.network.terminals(point.v)
    vdsat = circuit.law.saturation(terminals.gate, terminals.drain, terminals.source).vdsat
    conducting = currents > 1e-3 * sizes["tail.current"]
    checked = point.converged & (np.where(conducting, vdsat[circuit.wiring.pair], 1.0).min(axis=0) > 0.02)
    assert checked.mean() > 0.4
    np.testing.assert_allclose(currents.sum(axis=0)[checked], sizes["tail.current"][checked], rtol=1e-9)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("kind", [k for k in KINDS if k[2] == "ideal"], ids="-".join)
@pytest.mark.parametrize("bulk", ["rail", "source"])
def test_ideal_tail_rejects_everything(process: str, kind: tuple[str, ...], bulk: str) -> None:
    """A common-mode step appears at the tail and not at the outputs; rejection is unlimited (common practice)."""
    topology, p = build(*kind, bulk=bulk), load_process(process)
    supply = p.nominal.supply
    ranges = {"width": (1e-5, 3e-4), "length": (5e-7, 3e-6), "resistance": (1e3, 3e4), "current": (1e-6, 1e-5)}
    base = middle(kind[0], supply)
    circuit = size_circuit(topology, p, Conditions(supply, (base, base), 1e-12), random_sizes(topology, 100, 4, ranges))
    a = Analysis(circuit)
    held = a.converged & (a.room_at_rest > 0.1)
    assert held.mean() > 0.5
    assert (a.acm[held] == 0.0).all()
    assert np.isposinf(CATALOGUE["cmrr"].function(a)[held]).all()
    stepped = driven_point(circuit, np.full(100, base + 0.05), np.full(100, base + 0.05))
    for node in ("left", "right"):
        moved = (stepped.v - a.point.v)[a.wiring.index[node]][held]
        assert np.abs(moved).max() < 1e-6
    tail = (stepped.v - a.point.v)[a.wiring.index["tail"]][held]
    assert (tail > 0.02).all()
    assert (tail < 0.05 + 1e-9).all()


@pytest.mark.parametrize("kind", KINDS, ids="-".join)
@pytest.mark.parametrize("process", PROCESSES)
def test_no_current_is_lost(process: str, kind: tuple[str, ...]) -> None:
    """Kirchhoff at every unknown node, and all that comes from the supply goes to ground.

    An overdrive below 20 mV, which only the square law knows, is left out as above.
    """
    topology, p = build(*kind), load_process(process)
    supply = p.nominal.supply
    base = middle(kind[0], supply)
    sizes = random_sizes(topology, 300, 2, USUAL)
    a = Analysis(size_circuit(topology, p, Conditions(supply, (base, base), 1e-12), sizes))
    assert a.converged.mean() > 0.9
    checked = a.converged & (a.saturation.vdsat.min(axis=0) > 0.02)
    assert checked.mean() > 0.3
    tail = a.drain.id[a.wiring.pair].sum(axis=0)
    polarity = [1.0 if topology.channel(t) == "n" else -1.0 for t in topology.transistors]
    branches = [(t.drain, t.source, s * i) for t, s, i in zip(topology.transistors, polarity, a.drain.id, strict=True)]
    v = dict(zip(a.wiring.nodes, a.point.v, strict=True))
    branches += [(r.a, r.b, (v[r.a] - v[r.b]) / sizes[r.size]) for r in topology.resistors]
    branches += [(s.a, s.b, topology.polarity * sizes[s.size]) for s in topology.sources]
    for node in topology.unknown:
        left = sum(i for a_, _, i in branches if a_ == node) - sum(i for _, b, i in branches if b == node)
        assert (np.abs(left) / tail)[checked].max() < 1e-8
    supplied = sum(i for a_, _, i in branches if a_ == "supply") - sum(i for _, b, i in branches if b == "supply")
    np.testing.assert_allclose(CATALOGUE["supply_current"].function(a), supplied, rtol=1e-9)
    bias = sizes.get("bias.current", 0.0)
    np.testing.assert_allclose(supplied[checked], (tail + bias)[checked], rtol=1e-8)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("kind", KINDS, ids="-".join)
@pytest.mark.parametrize("bulk", ["rail", "source"])
def test_absurd_sizings_stay_finite(process: str, kind: tuple[str, ...], bulk: str) -> None:
    """From nanometres to centimetres and from femtoamperes to amperes: finite voltages, a flag for each design, and
    measures without a warning."""
    topology, p = build(*kind, bulk=bulk), load_process(process)
    supply = p.nominal.supply
    conditions = Conditions(supply, (0.2 * supply, 0.9 * supply), 1e-13)
    a = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, 300, 6)))
    assert np.isfinite(a.point.v).all()
    assert a.converged.dtype == bool
    assert 0.2 < a.converged.mean() < 1.0
    for measure in CATALOGUE.values():
        values = measure.function(a)
        assert values.shape == (300,), measure.name


@pytest.mark.parametrize("kind", KINDS, ids="-".join)
@pytest.mark.parametrize("process", ["generic-180", "handbook"])
def test_a_design_does_not_depend_on_its_neighbours(process: str, kind: tuple[str, ...]) -> None:
    """Alone, in another order, and among absurd designs: the same operating point and measures."""
    topology, p = build(*kind), load_process(process)
    supply = p.nominal.supply
    conditions = Conditions(supply, (0.5 * supply, 0.58 * supply), 1e-12)
    ranges = {"width": (2e-6, 1e-4), "length": (5e-7, 5e-6), "resistance": (5e3, 1e5), "current": (1e-6, 3e-5)}
    good, absurd = random_sizes(topology, 12, 3, ranges), random_sizes(topology, 200, 5)

    def solved(sizes: dict[str, Array]) -> dict[str, Array]:
        a = Analysis(size_circuit(topology, p, conditions, sizes))
        return {m.name: m.function(a) for m in CATALOGUE.values()} | {"converged": a.converged, "v": a.point.v.T}

    together = solved(good)
    among = solved({name: np.concatenate([absurd[name], good[name][::-1]]) for name in good})
    alone = [solved({name: value[k : k + 1] for name, value in good.items()}) for k in range(12)]
    assert together["converged"].any()
    ok = together["converged"]
    for name, values in together.items():
        # What single precision does for, and the third harmonic of a nearly straight curve, carry more rounding.
        rounded = name in ("steering_voltage", "input_range_low", "input_range_high", "output_swing", "distortion")
        close = {"rtol": 2e-5 if rounded else 1e-9, "atol": 1e-12 if name in ("v", "headroom") else 0.0}
        np.testing.assert_allclose(among[name][200:][::-1][ok], values[ok], **close, err_msg=name)
        np.testing.assert_allclose(np.concatenate([x[name] for x in alone])[ok], values[ok], **close, err_msg=name)


@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_inputs_are_left_alone(kind: tuple[str, ...]) -> None:
    """Sizes that cannot be written to go through every measure."""
    topology = build(*kind)
    sizes = by_hand(topology, input_width=np.array([60e-6, 100e-6, 150e-6]))
    for value in sizes.values():
        value.setflags(write=False)
    common = middle(kind[0])
    a = Analysis(
        size_circuit(topology, load_process("handbook"), Conditions(3.3, (common - 0.1, common), 1e-12), sizes)
    )
    a.point.v.setflags(write=False)
    for measure in CATALOGUE.values():
        measure.function(a)
    driven = a.circuit.driven(np.full(3, common), np.full(3, common))
    driven.setflags(write=False)
    again = settle(a.circuit.network, np.concatenate([a.point.v[: a.wiring.unknowns], driven]))
    np.testing.assert_allclose(again.v[: a.wiring.unknowns], a.point.v[: a.wiring.unknowns], atol=0.1)


def test_a_design_without_operating_point_is_flagged() -> None:
    """An ideal tail of 1 A through a transistor of 1 um has none between the rails."""
    a = analysed(("nmos", "resistor", "ideal", "differential"), tail_current=np.array([1e-4, 1.0]))
    assert a.converged.tolist() == [True, False]
    assert np.isfinite(a.point.v).all()
