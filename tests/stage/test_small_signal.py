"""Gains of the stages against hand analysis: Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated
Circuits, ch. 3 and 4 (formulas derived, or from memory where it says so)."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process, thermal_voltage
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import build
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import KINDS, analysed, driven_point, middle, random_sizes, without

INPUTS = ("nmos", "pmos")
PROCESSES = ("handbook", "generic-180", "generic-65")
SIZES = {"width": (1e-5, 2e-4), "length": (5e-7, 4e-6), "resistance": (3e3, 4e4), "current": (5e-7, 1e-5)}


def figure(a: Analysis, transistor: str, name: str):
    return getattr(a.drain, name)[a.wiring.rows[transistor]]


def saturated(kind: tuple[str, ...], process: str, count: int = 60, bulk: str = "rail") -> tuple[Analysis, np.ndarray]:
    """Return random sizings, and which of them have every transistor saturated."""
    p, topology = load_process(process), build(*kind, bulk=bulk)
    common = middle(kind[0], p.nominal.supply)
    conditions = Conditions(p.nominal.supply, (common, common), 1e-12)
    a = Analysis(size_circuit(topology, p, conditions, random_sizes(topology, count, 10, SIZES)))
    good = a.converged & (a.room_at_rest > 0.02)
    assert good.sum() > 10
    return a, good


@pytest.mark.parametrize("input", INPUTS)
def test_resistor_load_half_circuit(input: str) -> None:
    """Adm/Acm = 1 + 2 gm Rss with half-circuit gains (row of the differential output); half of it for one output per
    full differential input. Long input transistors, bulk at the source, so that gds and gmb do not blur it."""
    process = without("handbook", body_effect=0.0)
    changes = {"input_length": 40e-6, "input_width": 1500e-6, "tail_length": 1e-6, "tail_width": 12e-6}
    for output, part in (("differential", 1.0), ("single-ended", 0.5)):
        a = analysed((input, "resistor", "single", output), process, "source", **changes)
        assert a.room_at_rest > 0.0
        predicted = 1.0 + 2.0 * figure(a, "input.n", "gm") / figure(a, "tail", "gds")
        np.testing.assert_allclose(np.abs(a.adm / a.acm), part * predicted, rtol=0.01)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("input", INPUTS)
def test_resistor_load_exactly(input: str, process: str) -> None:
    """With everything in: Adm = gm R / (1 + gds R), Acm = -gm R / (1 + gds R + 2 gms Rss); derived by hand."""
    a, good = saturated((input, "resistor", "single", "differential"), process)
    gm, gds, gms = (figure(a, "input.n", name) for name in ("gm", "gds", "gms"))
    r, rss = a.circuit.sizes["load.resistance"], 1.0 / figure(a, "tail", "gds")
    np.testing.assert_allclose(a.adm[good], (gm * r / (1.0 + gds * r))[good], rtol=1e-7)
    np.testing.assert_allclose(a.acm[good], (-gm * r / (1.0 + gds * r + 2.0 * gms * rss))[good], rtol=1e-7)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("input", INPUTS)
def test_one_output_shows_half(input: str, process: str) -> None:
    """Of the differential gain, less what the swinging tail takes; and all of the common-mode gain."""
    both, good = saturated((input, "resistor", "single", "differential"), process)
    one, _ = saturated((input, "resistor", "single", "single-ended"), process)
    np.testing.assert_allclose(one.adm[good], 0.5 * both.adm[good], rtol=1e-7)
    np.testing.assert_allclose(one.acm[good], both.acm[good], rtol=1e-7)
    rejection = CATALOGUE["cmrr"].function
    np.testing.assert_allclose((rejection(both) - rejection(one))[good], 20.0 * np.log10(2.0), atol=1e-6)


@pytest.mark.parametrize("input", INPUTS)
def test_real_tail_makes_a_negative_common_mode_gain(input: str) -> None:
    """About -R / (2 Rss) with resistor loads (common practice, no source)."""
    process = without("handbook", body_effect=0.0)
    a = analysed((input, "resistor", "single", "differential"), process, "source")
    r, rss = a.circuit.sizes["load.resistance"], 1.0 / figure(a, "tail", "gds")
    np.testing.assert_allclose(a.acm, -r / (2.0 * rss), rtol=0.03)
    for name in PROCESSES:
        every, good = saturated((input, "resistor", "single", "differential"), name)
        assert (every.acm[good] < 0.0).all()


@pytest.mark.parametrize("input", INPUTS)
def test_mirror_load(input: str) -> None:
    """Adm = gm1 (ro2 parallel ro4), CMRR about 2 gm1 gm3 Rss (ro2 parallel ro4); ch. 4 (from memory).

    The gain of the mirror itself is a little below one, which the formula leaves out; the rejection is that of the
    textbook where the output resistance is the load's, hence the long input transistors.
    """
    process = without("handbook", body_effect=0.0)
    a = analysed((input, "mirror", "single"), process, "source")
    gm1, gm3 = figure(a, "input.n", "gm"), figure(a, "load.p", "gm")
    output = 1.0 / (figure(a, "input.n", "gds") + figure(a, "load.n", "gds"))
    np.testing.assert_allclose(a.adm, gm1 * output, rtol=0.02)
    long = analysed((input, "mirror", "single"), process, "source", input_length=40e-6, input_width=1500e-6)
    gm1, gm3 = figure(long, "input.n", "gm"), figure(long, "load.p", "gm")
    output = 1.0 / (figure(long, "input.n", "gds") + figure(long, "load.n", "gds"))
    rejection = 2.0 * gm1 * gm3 / figure(long, "tail", "gds") * output
    np.testing.assert_allclose(np.abs(long.adm / long.acm), rejection, rtol=0.15)
    assert (long.acm < 0.0).all()


@pytest.mark.parametrize("input", INPUTS)
@pytest.mark.parametrize("bulk", ["rail", "source"])
def test_tail_node_follows_the_common_mode(input: str, bulk: str) -> None:
    """Of an ideal tail: with slope gm/(gm + gmb), one with the bulk at the source (common practice, no source)."""
    a = analysed((input, "resistor", "ideal", "differential"), without("handbook", channel_modulation=0.0), bulk)
    follows = a.responses[a.wiring.index["tail"], 1]
    gm, gmb = figure(a, "input.n", "gm"), figure(a, "input.n", "gmb")
    slope = gm / (gm + gmb) if bulk == "rail" else np.ones(1)
    np.testing.assert_allclose(follows, slope, rtol=1e-12)
    assert (slope < 0.95).all() or bulk == "source"
    # and so it does when the inputs are really moved
    base, step = a.circuit.conditions.middle, 1e-3
    high, low = (driven_point(a.circuit, np.array([base + s]), np.array([base + s])) for s in (step, -step))
    tail = a.wiring.index["tail"]
    np.testing.assert_allclose((high.v - low.v)[tail] / (2.0 * step), follows, rtol=1e-5)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_gains_are_slopes_of_the_operating_point(process: str, kind: tuple[str, ...]) -> None:
    """Small-signal gains against small differences of the inputs (common practice, no source)."""
    a, good = saturated(kind, process)
    n, base, step = a.circuit.designs, np.full(a.circuit.designs, a.circuit.conditions.middle), 1e-5
    moves = {"adm": (0.5, -0.5), "acm": (1.0, 1.0)}
    for name, (p, m) in moves.items():
        ends = [driven_point(a.circuit, base + s * p * step, base + s * m * step) for s in (1.0, -1.0)]
        assert (ends[0].converged & ends[1].converged)[good].all()
        difference = (ends[0].v - ends[1].v) / (2.0 * step)
        if name == "adm":
            slope = a.wiring.output(difference)
        else:
            slope = np.mean([difference[a.wiring.index[node]] for node, _ in a.topology.output], axis=0)
        assert slope.shape == (n,)
        np.testing.assert_allclose(getattr(a, name)[good], slope[good], rtol=1e-3, atol=2e-5)


@pytest.mark.parametrize("process", ["generic-180", "generic-65"])
@pytest.mark.parametrize("input", INPUTS)
def test_weak_inversion_limit(input: str, process: str) -> None:
    """gm/I never exceeds 1/(n ut), hence the resistive gain never (I R)/(n ut), I being the current of one side; it
    follows from the exponential law."""
    p, topology = load_process(process), build(input, "resistor", "single", "differential")
    common = middle(input, p.nominal.supply)
    conditions = Conditions(p.nominal.supply, (common, common), 1e-12)
    sizes = random_sizes(topology, 500, 1, SIZES | {"width": (1e-5, 5e-3), "current": (1e-9, 1e-6)})
    sizes["load.resistance"] = 0.4 * p.nominal.supply / (sizes["tail.units"] * sizes["bias.current"])
    a = Analysis(size_circuit(topology, p, conditions, sizes))
    good = a.converged
    assert good.mean() > 0.9
    row = a.wiring.rows["input.n"]
    card = p.nmos if input == "nmos" else p.pmos
    gate = common if input == "nmos" else p.nominal.supply - common
    root = np.sqrt(gate - card.threshold + (card.surface_potential**0.5 + 0.5 * card.body_effect) ** 2)
    limit = (1.0 - 0.5 * card.body_effect / root) / float(thermal_voltage(conditions.temperature))
    share = (a.drain.gm / a.drain.id)[row][good] / limit
    assert share.max() <= 1.0
    assert share.max() > 0.95
    drop = (a.drain.id[row] * sizes["load.resistance"])[good]
    gain = np.abs(a.adm)[good] / (drop * limit)
    assert gain.max() <= 1.0
    assert gain.max() > 0.9


@pytest.mark.parametrize("input", INPUTS)
def test_bandwidth_of_a_single_pole(input: str) -> None:
    """1/(2 pi R C) into a large load capacitor, R parallel to ro; gain times bandwidth is gm/(2 pi C) (standard)."""
    topology = build(input, "resistor", "ideal", "differential")
    a = analysed((input, "resistor", "ideal", "differential"))
    big = Conditions(3.3, (a.circuit.conditions.middle,) * 2, 1e-9)
    a = Analysis(size_circuit(topology, load_process("handbook"), big, a.circuit.sizes))
    conductance = 1.0 / a.circuit.sizes["load.resistance"] + figure(a, "input.n", "gds")
    pole = conductance / (2.0 * np.pi * 1e-9)
    np.testing.assert_allclose(CATALOGUE["bandwidth"].function(a), pole, rtol=5e-3)
    unity = figure(a, "input.n", "gm") / (2.0 * np.pi * 1e-9)
    gain = np.abs(a.adm)
    np.testing.assert_allclose(
        CATALOGUE["unity_gain_frequency"].function(a), unity * np.sqrt(1.0 - gain**-2), rtol=5e-3
    )


@pytest.mark.parametrize("input", INPUTS)
def test_slew_rate_is_current_over_capacitance(input: str) -> None:
    """All of the tail current into a mirror's output, half of it for each side with resistors (ch. 6, from memory)."""
    for load, output, part in (
        ("mirror", "single-ended", 1.0),
        ("resistor", "single-ended", 0.5),
        ("resistor", "differential", 1.0),
    ):
        topology = build(input, load, "ideal", output)
        sizes = analysed((input, load, "ideal", output)).circuit.sizes
        common = middle(input)
        circuit = size_circuit(topology, load_process("handbook"), Conditions(3.3, (common, common), 1e-9), sizes)
        found = CATALOGUE["slew_rate"].function(Analysis(circuit))
        np.testing.assert_allclose(found, part * sizes["tail.current"] / 1e-9, rtol=2e-3)
