"""Gains of the stages against hand analysis: Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated
Circuits, ch. 3 and 4 (formulas derived, or from memory where it says so)."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import (
    UT,
    Kind,
    analysed,
    driven_point,
    figure,
    has_room,
    kinds_in,
    middle,
    named,
    random_sizes,
    saturated,
    stage,
    under,
    without,
)

INPUTS = ("nmos", "pmos")
PROCESSES = ("handbook", "generic-180", "generic-65")
TELESCOPIC = ("rail", "telescopic")


def cascoded(a: Analysis, cascode: str, below: Array | float) -> Array:
    """Return the resistance [ohm] into the drain of a cascode over a resistance, gates and bulks at rest (standard)."""
    return (1.0 + figure(a, cascode, "gms") * below) / figure(a, cascode, "gds")


def tail_resistance(a: Analysis) -> Array:
    """Return the resistance [ohm] of a tail."""
    if a.topology.tail == "resistor":
        return a.circuit.sizes["tail.resistance"]
    single = 1.0 / figure(a, "tail", "gds")
    return single if a.topology.tail == "single" else cascoded(a, "tail.cascode", single)


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
@pytest.mark.parametrize("tail", ["resistor", "single", "cascode"])
@pytest.mark.parametrize("load", ["resistor", "diode"])
@pytest.mark.parametrize("input", INPUTS)
def test_symmetric_loads_exactly(input: str, load: str, tail: str, process: str) -> None:
    """With everything in: Adm = gm R / (1 + gds R), Acm = -gm R / (1 + gds R + 2 gms Rss); derived by hand. A diode is
    a resistor of 1 / (gm + gds), a cascoded tail one of its two output resistances and their product times gms."""
    kind = (input, load, tail, "differential")
    a = saturated(kind if has_room(kind, process) else (input, load, "single", "differential"), process, 10, 10)
    gm, gds, gms = (figure(a, "input.n", name) for name in ("gm", "gds", "gms"))
    diode = figure(a, "load.n", "gm") + figure(a, "load.n", "gds") if load == "diode" else np.nan
    r = a.circuit.sizes["load.resistance"] if load == "resistor" else 1.0 / diode
    rss = tail_resistance(a)
    np.testing.assert_allclose(a.adm, gm * r / (1.0 + gds * r), rtol=1e-7)
    np.testing.assert_allclose(a.acm, -gm * r / (1.0 + gds * r + 2.0 * gms * rss), rtol=1e-6)


@pytest.mark.parametrize("input", INPUTS)
def test_diode_load(input: str) -> None:
    """Adm = -gm1/gm3 = sqrt of the ratio of their current factors, whatever the current; the common mode is divided by
    twice the tail resistance, Acm = -1 / (2 gm3 Rss): Gray et al., ch. 3 (derived; gds and body effect left out)."""
    process = without("handbook", body_effect=0.0, channel_modulation=0.0)
    a = analysed((input, "diode", "resistor", "differential"), process, tail_resistance=np.array([9e3, 20e3, 60e3]))
    card = (process.nmos, process.pmos) if input == "nmos" else (process.pmos, process.nmos)
    ratio = card[0].current_factor * 100.0 / 2.0 / (card[1].current_factor * 60.0 / 4.0)
    np.testing.assert_allclose(a.adm, np.sqrt(ratio), rtol=1e-9)
    rss = a.circuit.sizes["tail.resistance"]
    gm1, gm3 = figure(a, "input.n", "gm"), figure(a, "load.n", "gm")
    np.testing.assert_allclose(a.acm, -gm1 / gm3 / (1.0 + 2.0 * gm1 * rss), rtol=1e-9)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("input", INPUTS)
def test_source_load(input: str, process: str) -> None:
    """Adm = gm1 (ro1 parallel ro3), exactly: under the differential drive neither tail nor load gates move (standard).
    No common mode comes through."""
    a = saturated((input, "source", "single", "differential"), process, 10, 3)
    conductance = figure(a, "input.n", "gds") + figure(a, "load.n", "gds")
    np.testing.assert_allclose(a.adm, figure(a, "input.n", "gm") / conductance, rtol=1e-7)
    assert (a.acm == 0.0).all()
    assert (a.common_to_difference == 0.0).all()


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("input", INPUTS)
def test_telescopic_half_circuit(input: str, process: str) -> None:
    """Adm = Gm (R1 parallel R3): the cascoded resistances of both sides, (gm + gmb) ro^2 in short, and nearly all of
    gm; Gray et al., ch. 4 (derived with everything in). The gates of the cascodes do not move under the drive."""
    a = saturated((input, "source", "single", "differential", *TELESCOPIC), process, 10, 3)
    gm, gds = figure(a, "input.n", "gm"), figure(a, "input.n", "gds")
    down = cascoded(a, "input.cascode.n", 1.0 / gds)
    up = cascoded(a, "load.cascode.n", 1.0 / figure(a, "load.n", "gds"))
    follows = figure(a, "input.cascode.n", "gms")
    np.testing.assert_allclose(a.adm, gm * follows / (follows + gds) / (1.0 / down + 1.0 / up), rtol=1e-5)
    cascode, load = ((f"{x}.cascode.n", f"{x}.n") for x in ("input", "load"))
    strong = [figure(a, c, "gm") + figure(a, c, "gmb") for c in (cascode[0], load[0])]
    squares = [g / figure(a, c, "gds") / figure(a, t, "gds") for g, (c, t) in zip(strong, (cascode, load), strict=True)]
    np.testing.assert_allclose(a.adm, gm / (1.0 / squares[0] + 1.0 / squares[1]), rtol=0.1)


@pytest.mark.parametrize("bulk", ["rail", "source"])
@pytest.mark.parametrize("input", INPUTS)
def test_degeneration(input: str, bulk: str) -> None:
    """Gm = gm / (1 + gm R) with the bulk at the source; with the bulk at the rail the body effect counts as well, so
    gms stands for gm: Gray et al., ch. 3 (derived; gds left out)."""
    process, resistance = without("handbook", channel_modulation=0.0), np.array([1.0, 300.0, 2e3, 5e3])
    a = analysed((input, "resistor", "ideal", "differential"), process, bulk, input_degeneration=resistance)
    assert (a.room_at_rest > 0.0).all()
    gm, feedback = figure(a, "input.n", "gm"), figure(a, "input.n", "gm" if bulk == "source" else "gms")
    expected = gm / (1.0 + feedback * resistance) * a.circuit.sizes["load.resistance"]
    np.testing.assert_allclose(a.adm, expected, rtol=1e-9)
    plain = analysed((input, "resistor", "ideal", "differential"), process, bulk)
    if bulk == "source":  # where the threshold does not move with the source
        np.testing.assert_allclose(figure(a, "input.n", "gm"), figure(plain, "input.n", "gm")[0], rtol=1e-9)
        np.testing.assert_allclose(a.adm[0], plain.adm[0], rtol=2e-3)
    assert (np.diff(a.adm) < 0.0).all()


@pytest.mark.parametrize("input", INPUTS)
def test_degeneration_with_output_conductance(input: str) -> None:
    """Half circuit with everything in: Adm = gm RL / (1 + gds RL + gms R), derived by hand."""
    a = analysed((input, "resistor", "single", "differential"), input_degeneration=np.array([500.0, 2e3]))
    gm, gds, gms = (figure(a, "input.n", name) for name in ("gm", "gds", "gms"))
    r, load = a.circuit.sizes["input.degeneration"], a.circuit.sizes["load.resistance"]
    np.testing.assert_allclose(a.adm, gm * load / (1.0 + gds * load + gms * r), rtol=1e-9)


@pytest.mark.parametrize("process", PROCESSES)
@pytest.mark.parametrize("input", INPUTS)
def test_one_output_shows_half(input: str, process: str) -> None:
    """Of the differential gain, less what the swinging tail takes; and all of the common-mode gain."""
    both, one = (saturated((input, "resistor", "single", x), process, 20, 10) for x in ("differential", "single-ended"))
    np.testing.assert_allclose(one.adm, 0.5 * both.adm, rtol=1e-7)
    np.testing.assert_allclose(one.acm, both.acm, rtol=1e-7)
    rejection = CATALOGUE["cmrr"].of
    np.testing.assert_allclose(rejection(both) - rejection(one), 20.0 * np.log10(2.0), atol=1e-6)


@pytest.mark.parametrize("input", INPUTS)
def test_real_tail_makes_a_negative_common_mode_gain(input: str) -> None:
    """About -R / (2 Rss) with resistor loads (common practice, no source)."""
    process = without("handbook", body_effect=0.0)
    a = analysed((input, "resistor", "single", "differential"), process, "source")
    r, rss = a.circuit.sizes["load.resistance"], 1.0 / figure(a, "tail", "gds")
    np.testing.assert_allclose(a.acm, -r / (2.0 * rss), rtol=0.03)
    for name in PROCESSES:
        assert (saturated((input, "resistor", "single", "differential"), name, 20, 10).acm < 0.0).all()


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


@pytest.mark.parametrize(("process", "kind"), kinds_in(*PROCESSES), ids=named)
def test_gains_are_slopes_of_the_operating_point(process: str, kind: Kind) -> None:
    """Small-signal gains against small differences of the inputs (common practice, no source)."""
    a = saturated(kind, process, 10, 10)
    base = np.full(10, a.circuit.conditions.middle)
    moves = {"adm": (0.5, -0.5, 2e-8 if a.topology.delicate else 1e-5), "acm": (1.0, 1.0, 1e-5)}
    for name, (p, m, step) in moves.items():
        ends = [driven_point(a.circuit, base + s * p * step, base + s * m * step) for s in (1.0, -1.0)]
        assert (ends[0].converged & ends[1].converged).all()
        difference = (ends[0].v - ends[1].v) / (2.0 * step)
        if name == "adm":
            slope = a.wiring.output(difference)
        else:
            slope = np.mean([difference[a.wiring.index[node]] for node, _ in a.topology.output], axis=0)
        np.testing.assert_allclose(getattr(a, name), slope, rtol=1e-3, atol=2e-5)


@pytest.mark.parametrize("process", ["generic-180", "generic-65"])
@pytest.mark.parametrize("input", INPUTS)
def test_weak_inversion_limit(input: str, process: str) -> None:
    """gm/I never exceeds 1/(n ut), hence the resistive gain never (I R)/(n ut), I being the current of one side; it
    follows from the exponential law."""
    p, topology = load_process(process), stage((input, "resistor", "single", "differential"))
    common = middle(input, p.nominal.supply)
    conditions = Conditions(p.nominal.supply, (common, common), 1e-12)
    ranges = {"width": (1e-5, 5e-3), "length": (5e-7, 4e-6), "resistance": (3e3, 4e4), "current": (1e-9, 1e-6)}
    sizes = random_sizes(topology, 300, 1, ranges)
    sizes["load.resistance"] = 0.4 * p.nominal.supply / (sizes["tail.units"] * sizes["bias.current"])
    a = Analysis(size_circuit(topology, p, conditions, sizes))
    good = a.converged
    assert good.mean() > 0.9
    row = a.wiring.rows["input.n"]
    card = p.nmos if input == "nmos" else p.pmos
    gate = common if input == "nmos" else p.nominal.supply - common
    root = np.sqrt(gate - card.threshold + (card.surface_potential**0.5 + 0.5 * card.body_effect) ** 2)
    limit = (1.0 - 0.5 * card.body_effect / root) / UT
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
    a = under(analysed((input, "resistor", "ideal", "differential")), load_capacitance=1e-9)
    conductance = 1.0 / a.circuit.sizes["load.resistance"] + figure(a, "input.n", "gds")
    pole = conductance / (2.0 * np.pi * 1e-9)
    np.testing.assert_allclose(CATALOGUE["bandwidth"].of(a), pole, rtol=5e-3)
    unity = figure(a, "input.n", "gm") / (2.0 * np.pi * 1e-9)
    gain = np.abs(a.adm)
    np.testing.assert_allclose(CATALOGUE["unity_gain_frequency"].of(a), unity * np.sqrt(1.0 - gain**-2), rtol=5e-3)


@pytest.mark.parametrize("input", INPUTS)
def test_slew_rate_is_current_over_capacitance(input: str) -> None:
    """All of the tail current into a mirror's output, half of it for each side with resistors (ch. 6, from memory)."""
    for load, output, part in (
        ("mirror", "single-ended", 1.0),
        ("resistor", "single-ended", 0.5),
        ("resistor", "differential", 1.0),
        ("diode", "single-ended", 0.5),
        ("source", "differential", 1.0),
    ):
        a = under(analysed((input, load, "ideal", output)), load_capacitance=1e-9)
        found = CATALOGUE["slew_rate"].of(a)
        np.testing.assert_allclose(found, part * a.circuit.sizes["tail.current"] / 1e-9, rtol=2e-3)
