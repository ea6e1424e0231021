"""The operating point: conservation, large-signal curves of the pair, and what Newton does with hopeless designs."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.bias import settle
from optisize.stage.circuit import Circuit, Conditions, size_circuit
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import (
    KINDS,
    UT,
    Kind,
    analysed,
    by_hand,
    driven_point,
    exposed,
    has_room,
    kinds_in,
    middle,
    named,
    near_hand,
    pair_currents,
    random_sizes,
    saturated,
    stage,
    without,
)

PROCESSES = ("handbook", "generic-180", "generic-65")
USUAL = {"width": (2e-6, 1e-4), "length": (5e-7, 5e-6), "resistance": (2e3, 3e4), "current": (1e-6, 3e-5)}
IDEAL = [k for k in KINDS if k[2] == "ideal"]
TELESCOPIC = ("rail", "telescopic")
IDEAL_STACKED: list[Kind] = [
    ("nmos", "mirror", "ideal", "single-ended", *TELESCOPIC),
    ("pmos", "source", "ideal", "differential", *TELESCOPIC),
]


def driven_pair(process, vid: Array, supply: float = 3.3, **changes) -> tuple[Circuit, Array]:
    """Return a pair with an ideal tail under differential inputs, and its two currents over the tail current."""
    topology = stage(("nmos", "resistor", "ideal", "differential"))
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
@pytest.mark.parametrize(("input", "load"), [(i, j) for i in ("nmos", "pmos") for j in ("resistor", "mirror", "diode")])
def test_ideal_tail_steers_exactly(process: str, input: str, load: str) -> None:
    """The branch currents add up to the tail current at any input (common practice, no source).

    An overdrive below 20 mV, which only the square law knows, is left out: the last step of Newton is 0.3 uV long, and
    its square over that of the overdrive would be seen.
    """
    p = load_process(process)
    supply = p.nominal.supply
    topology = stage((input, load, "ideal"))
    count = 100
    rng = np.random.default_rng(8)
    sizes = random_sizes(topology, count, 8, USUAL)
    circuit = size_circuit(topology, p, exposed(topology, supply, 0.5 * supply), sizes)
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


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("kind", IDEAL_STACKED, ids=named)
def test_ideal_tail_carries_pair_and_leg(process: str, kind: Kind) -> None:
    """Under cascodes the leg that makes their gate voltage stands on the tail too: pair and leg add up to the tail
    current at any input (common practice, no source). A mirror lets the pair be steered; two sources do not, as both
    sides have to carry what the sources do."""
    p, topology, count = load_process(process), stage(kind), 60
    supply, common = p.nominal.supply, middle(kind[0], p.nominal.supply)
    rng = np.random.default_rng(9)
    sizes = near_hand(topology, p, count, 9)
    circuit = size_circuit(topology, p, exposed(topology, supply, common), sizes)
    apart = rng.uniform(-0.4, 0.4, count) * supply
    point = driven_point(circuit, common + 0.5 * apart, common - 0.5 * apart)
    assert point.converged.mean() > 0.5
    currents = pair_currents(circuit, point)
    total = currents.sum(axis=0) + sizes["bias.current"]
    np.testing.assert_allclose(total[point.converged], sizes["tail.current"][point.converged], rtol=1e-7)
    unlike = (np.abs(currents[0] - currents[1]) / currents.sum(axis=0))[point.converged]
    assert unlike.max() > 0.98 if kind[1] == "mirror" else unlike.max() < 0.02


@pytest.mark.parametrize(
    ("process", "kind", "bulk"),
    [
        (process, kind, bulk)
        for process in PROCESSES
        for kind in (*IDEAL, *IDEAL_STACKED)
        for bulk in ("rail", "source")
        if has_room(kind, process) and (len(kind) < 6 or bulk == "rail")
    ],
    ids=named,
)
def test_ideal_tail_rejects_everything(process: str, kind: Kind, bulk: str) -> None:
    """A common-mode step appears at the tail and not at the outputs; rejection is unlimited (common practice).

    Stacked cascodes have their bulk at the rail: their current feels the tail move, and since the leg that feeds their
    gate does too, the mirror sees it. Rejection is then large, not unlimited.
    """
    a = saturated(kind, process, 20, 4, bulk, room=0.05 if len(kind) < 6 else 0.02)
    exact = len(kind) < 6 or kind[1] == "source"
    if exact:
        assert (a.acm == 0.0).all()
        assert np.isposinf(CATALOGUE["cmrr"].of(a)).all()
    else:
        assert (np.abs(a.acm) < 1e-2).all()
    moved, base = 0.04, np.full(20, a.circuit.conditions.middle)
    stepped = driven_point(a.circuit, base + moved, base + moved)
    assert stepped.converged.all()
    change = stepped.v - a.point.v
    for node in ("left", "right") if exact else ():
        assert np.abs(change[a.wiring.index[node]]).max() < 1e-6
    tail = change[a.wiring.index["tail"]]
    assert (tail > 0.4 * moved).all()
    assert (tail < moved + 1e-9).all()


@pytest.mark.parametrize("kind", [("nmos", "mirror", "single"), ("pmos", "source", "ideal", "differential")], ids=named)
def test_driven_nodes(kind: Kind) -> None:
    """Inputs, supply, ground at zero, and the reference where a control has one."""
    a = analysed(kind)
    driven = dict(zip(a.topology.driven, a.circuit.driven(np.array([1.0]), np.array([0.8]))[:, 0], strict=True))
    expected = {"in+": 1.0, "in-": 0.8, "supply": 3.3, "ground": 0.0}
    assert driven == (expected | {"reference": 1.65} if kind[1] == "source" else expected)


@pytest.mark.parametrize("kind", [k for k in [*KINDS, *IDEAL_STACKED] if k[1] == "source"], ids=named)
def test_common_mode_control_holds_the_mean(kind: Kind) -> None:
    """Whatever the inputs do, as long as there is an operating point: the mean of the outputs is the reference, and no
    common mode reaches it (the definition of an ideal control)."""
    p, topology, count = load_process("handbook"), stage(kind), 60
    rng = np.random.default_rng(5)
    common = middle(kind[0])
    conditions = exposed(topology, 3.3, common)
    circuit = size_circuit(topology, p, conditions, near_hand(topology, p, count, 5))
    common = common + rng.uniform(-0.3, 0.3, count)
    apart = 0.05 * rng.uniform(-1.0, 1.0, count) ** 3
    point = driven_point(circuit, common + 0.5 * apart, common - 0.5 * apart)
    assert point.converged.mean() > 0.8
    left, right = (point.v[circuit.wiring.index[node]] for node in ("left", "right"))
    np.testing.assert_allclose(0.5 * (left + right)[point.converged], conditions.output_common_mode, atol=1e-12)
    assert np.abs(left - right)[point.converged].max() > 1.0
    a = Analysis(circuit)
    assert (a.acm[a.converged] == 0.0).all()


@pytest.mark.parametrize(
    ("process", "kind"), [*kinds_in(*PROCESSES), *(("handbook", k) for k in IDEAL_STACKED)], ids=named
)
def test_no_current_is_lost(process: str, kind: Kind) -> None:
    """Kirchhoff at every unknown node but those that a control sets, and all that comes from the supply goes to ground:
    the current of the pair and of every bias leg, the pair's own leg among them.

    An overdrive below 20 mV, which only the square law knows, is left out as above.
    """
    p, topology = load_process(process), stage(kind)
    sizes = near_hand(topology, p, 60, 2, spread=2.5)
    a = Analysis(
        size_circuit(topology, p, exposed(topology, p.nominal.supply, middle(kind[0], p.nominal.supply)), sizes)
    )
    assert a.converged.mean() > 0.9
    checked = a.converged & (a.saturation.vdsat.min(axis=0) > 0.02)
    assert checked.mean() > 0.3
    pair = a.drain.id[a.wiring.pair].sum(axis=0)
    polarity = [1.0 if topology.channel(t) == "n" else -1.0 for t in topology.transistors]
    branches = [(t.drain, t.source, s * i) for t, s, i in zip(topology.transistors, polarity, a.drain.id, strict=True)]
    v = dict(zip(a.wiring.nodes, a.point.v, strict=True))
    branches += [(r.a, r.b, (v[r.a] - v[r.b]) / sizes[r.size]) for r in topology.resistors]
    branches += [(s.a, s.b, topology.polarity * sizes[s.size]) for s in topology.sources]

    def leaving(node: str) -> Array:
        return sum(i for a_, _, i in branches if a_ == node) - sum(i for _, b, i in branches if b == node)

    set_by_control = {control.node for control in topology.controls}
    for node in topology.unknown:
        if node not in set_by_control:
            assert (np.abs(leaving(node)) / pair)[checked].max() < 1e-7, node
    for control in topology.controls:
        mean = np.mean([v[node] for node in control.senses], axis=0)
        np.testing.assert_allclose(mean[checked], v["reference"][checked], atol=1e-12)
    supplied = CATALOGUE["supply_current"].of(a)
    np.testing.assert_allclose(supplied, leaving("supply"), rtol=1e-9)
    np.testing.assert_allclose(supplied[checked], -leaving("ground")[checked], rtol=1e-7)
    legs = [sizes[s.size] for s in topology.sources if s.name != "tail"]
    np.testing.assert_allclose(supplied[checked], (pair + sum(legs, np.zeros(60)))[checked], rtol=1e-7)


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_everything_moved_together_changes_nothing(kind: Kind) -> None:
    """Rails, inputs, reference and every node raised alike: the same equations (voltages are differences)."""
    p, topology = load_process("generic-180"), stage(kind)
    circuit = size_circuit(topology, p, exposed(topology, 1.8, 0.8), near_hand(topology, p, 5, 1))
    rng = np.random.default_rng(1)
    v = rng.uniform(0.0, 1.8, (len(circuit.wiring.nodes), 5))
    here, there = (circuit.network.terminals(x) for x in (v, v + 0.7))
    residuals = [circuit.network.equations(t, circuit.law.drain(*t.of_law)).residual for t in (here, there)]
    scale = np.abs(residuals[0]).max(axis=0)
    np.testing.assert_allclose(residuals[1] / scale, residuals[0] / scale, atol=1e-12)


@pytest.mark.parametrize(
    ("process", "kind", "bulk"),
    [(PROCESSES[k % 3], kind, ("rail", "source")[k // 3 % 2]) for k, kind in enumerate(KINDS)],
    ids=named,
)
def test_absurd_sizings_stay_finite(process: str, kind: Kind, bulk: str) -> None:
    """From nanometres to centimetres and from femtoamperes to amperes: finite voltages, a flag for each design, and
    measures without a warning."""
    topology, p = stage(kind, bulk), load_process(process)
    supply = p.nominal.supply
    conditions = exposed(topology, supply, 0.2 * supply, 0.9 * supply, 1e-13)
    a = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, 60, 6)))
    assert np.isfinite(a.point.v).all()
    assert a.converged.dtype == bool
    assert 0.0 < a.converged.mean() < (1.0 if kind[2] != "resistor" else 1.1)
    for measure in CATALOGUE.values():
        values = measure.of(a)
        assert values.shape == (60,), measure.name


# What single precision does for, and the third harmonic of a nearly straight curve, carry more rounding.
ROUNDED = ("steering_voltage", "input_range_low", "input_range_high", "output_swing", "distortion")


@pytest.mark.parametrize(
    ("process", "kind"), [(("generic-180", "handbook")[k % 2], kind) for k, kind in enumerate(KINDS)], ids=named
)
def test_a_design_does_not_depend_on_its_neighbours(process: str, kind: Kind) -> None:
    """Alone, in another order, and among absurd designs: the same operating point and measures."""
    topology, p = stage(kind), load_process(process)
    common = middle(kind[0], p.nominal.supply)
    conditions = exposed(topology, p.nominal.supply, common - 0.05, common + 0.05)
    good, absurd = near_hand(topology, p, 6, 3, spread=2.0), random_sizes(topology, 60, 5)

    def solved(sizes: dict[str, Array]) -> dict[str, Array]:
        a = Analysis(size_circuit(topology, p, conditions, sizes))
        return {m.name: m.of(a) for m in CATALOGUE.values()} | {"converged": a.converged, "v": a.point.v.T}

    together = solved(good)
    among = solved({name: np.concatenate([absurd[name], good[name][::-1]]) for name in good})
    alone = [solved({name: value[k : k + 1] for name, value in good.items()}) for k in (0, 5)]
    ok = together["converged"]
    assert ok.mean() > 0.5
    for name, values in together.items():
        rtol = 2e-5 if name in ROUNDED else 1e-6 if topology.delicate else 1e-9
        close = {"rtol": rtol, "atol": {"v": 1e-12, "headroom": 1e-6}.get(name, 0.0)}
        np.testing.assert_allclose(among[name][60:][::-1][ok], values[ok], **close, err_msg=name)
        single = np.concatenate([x[name] for x in alone])
        np.testing.assert_allclose(single[ok[[0, 5]]], values[[0, 5]][ok[[0, 5]]], **close, err_msg=name)


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_inputs_are_left_alone(kind: Kind) -> None:
    """Sizes that cannot be written to go through every measure."""
    topology = stage(kind)
    sizes = by_hand(topology, input_width=np.array([60e-6, 100e-6, 150e-6]))
    for value in sizes.values():
        value.setflags(write=False)
    common = middle(kind[0])
    conditions = exposed(topology, 3.3, common - 0.1, common)
    a = Analysis(size_circuit(topology, load_process("handbook"), conditions, sizes))
    a.point.v.setflags(write=False)
    for measure in CATALOGUE.values():
        measure.of(a)
    driven = a.circuit.driven(np.full(3, common), np.full(3, common))
    driven.setflags(write=False)
    again = settle(a.circuit.network, np.concatenate([a.point.v[: a.wiring.unknowns], driven]))
    np.testing.assert_allclose(again.v[: a.wiring.unknowns], a.point.v[: a.wiring.unknowns], atol=0.1)


def test_a_design_without_operating_point_is_flagged() -> None:
    """An ideal tail of 1 A through a transistor of 1 um has none between the rails."""
    a = analysed(("nmos", "resistor", "ideal", "differential"), tail_current=np.array([1e-4, 1.0]))
    assert a.converged.tolist() == [True, False]
    assert np.isfinite(a.point.v).all()
