"""Noise referred to the input against hand analysis: Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog
Integrated Circuits, ch. 11 (from memory; formulas derived where it says so)."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.card import BOLTZMANN, ELEMENTARY_CHARGE
from optisize.process.law import Array
from optisize.stage import noise
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from optisize.stage.response import response
from tests.stage.stages import KINDS, Kind, analysed, figure, named, under, without

KT = BOLTZMANN * 300.15
WIDTHS = np.array([50e-6, 100e-6, 200e-6])
QUIET = {"flicker_coefficient": 0.0}
EXACT = {"channel_modulation": 0.0, "body_effect": 0.0}


def density(a: Analysis, frequency: float) -> Array:
    """Return the power density at the input [V^2/Hz], (N,)."""
    return CATALOGUE["input_noise"].at("x", {"frequency": frequency}).of(a) ** 2


@pytest.mark.parametrize("input", ["nmos", "pmos"])
@pytest.mark.parametrize("output", ["single-ended", "differential"])
def test_white_noise_with_resistors(input: str, output: str) -> None:
    """8 k T (Gamma/gm + 1/(gm^2 R)), Gamma = 2/3, of the differential output; with one output the resistor of one side
    stands against half of the gain, so its part is twice that (derived). Without output conductance, exact."""
    a = analysed((input, "resistor", "ideal", output), without("handbook", **EXACT, **QUIET), input_width=WIDTHS)
    gm, load = figure(a, "input.n", "gm"), a.circuit.sizes["load.resistance"]
    part = 1.0 if output == "differential" else 2.0
    expected = 8.0 * KT * (2.0 / 3.0 / gm + part / (gm**2 * load))
    np.testing.assert_allclose(density(a, 10.0), expected, rtol=1e-9)


@pytest.mark.parametrize("tail", ["ideal", "single"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_white_noise_with_a_mirror(input: str, tail: str) -> None:
    """(8 k T Gamma / gm1)(1 + gm3/gm1): the noise of the tail splits alike and the mirror takes it out."""
    process = without("handbook", channel_modulation=1e-10, body_effect=0.0, **QUIET)
    a = analysed((input, "mirror", tail), process, "source", input_width=WIDTHS)
    gm1, gm3 = figure(a, "input.n", "gm"), figure(a, "load.n", "gm")
    np.testing.assert_allclose(density(a, 10.0), 16.0 / 3.0 * KT / gm1 * (1.0 + gm3 / gm1), rtol=1e-3)
    with_everything = analysed((input, "mirror", tail), without("handbook", **QUIET), input_width=WIDTHS)
    gm1, gm3 = figure(with_everything, "input.n", "gm"), figure(with_everything, "load.n", "gm")
    np.testing.assert_allclose(density(with_everything, 10.0), 16.0 / 3.0 * KT / gm1 * (1.0 + gm3 / gm1), rtol=0.01)


@pytest.mark.parametrize("load", ["diode", "source"])
@pytest.mark.parametrize("tail", ["single", "cascode"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_white_noise_with_other_loads(input: str, load: str, tail: str) -> None:
    """The same sum for diodes and current sources, whose own noise meets the same gain; the legs, the tail and what
    biases them are alike on both sides."""
    a = analysed((input, load, tail, "differential"), without("handbook", **QUIET), input_width=WIDTHS)
    gm1, gm3 = figure(a, "input.n", "gm"), figure(a, "load.n", "gm")
    np.testing.assert_allclose(density(a, 10.0), 16.0 / 3.0 * KT / gm1 * (1.0 + gm3 / gm1), rtol=1e-6)


def test_cascodes_add_little_noise() -> None:
    """What a cascode sends out comes back at its source: a telescopic stage has the noise of pair and load."""
    for load, output in (("mirror", "single-ended"), ("source", "differential")):
        kind = ("nmos", load, "single", output, "rail", "telescopic")
        a = analysed(kind, without("handbook", **QUIET), input_width=WIDTHS)
        gm1, gm3 = figure(a, "input.n", "gm"), figure(a, "load.n", "gm")
        np.testing.assert_allclose(density(a, 10.0), 16.0 / 3.0 * KT / gm1 * (1.0 + gm3 / gm1), rtol=0.01)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_degeneration_adds_its_own_noise(input: str) -> None:
    """Referred to the input: 8 k T (Gamma/gm + R) of both sides and the loads over the lower transconductance (derived;
    exact without output conductance, with the bulk at the source)."""
    resistance = np.array([10.0, 1e3, 4e3])
    process = without("handbook", **EXACT, **QUIET)
    a = analysed((input, "resistor", "ideal", "differential"), process, "source", input_degeneration=resistance)
    gm, load = figure(a, "input.n", "gm"), a.circuit.sizes["load.resistance"]
    strong = gm / (1.0 + gm * resistance)
    expected = 8.0 * KT * (2.0 / 3.0 / gm + resistance + 1.0 / (strong**2 * load))
    np.testing.assert_allclose(density(a, 10.0), expected, rtol=1e-9)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_shot_noise_in_weak_inversion(input: str) -> None:
    """Channels in weak inversion have full shot noise, 2 q I each: 4 q I / gm^2 at the input of a pair with I on each
    side, beside the loads (Enz and Vittoz, Charge-Based MOS Transistor Modeling, 2006, from memory)."""
    sizes = {"input_width": 4e-3, "input_length": 1e-6, "tail_current": 1e-8, "load_resistance": 1e7}
    a = analysed((input, "resistor", "ideal", "differential"), without("generic-180", **QUIET), **sizes)
    gm = figure(a, "input.n", "gm")
    loads = 8.0 * KT / (gm**2 * 1e7)
    expected = 4.0 * ELEMENTARY_CHARGE * 5e-9 / gm**2
    np.testing.assert_allclose(density(a, 1.0) - loads, expected, rtol=0.01)


@pytest.mark.parametrize("exponent", [0.9, 1.0, 1.2])
@pytest.mark.parametrize("load", ["resistor", "mirror", "source"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_flicker_noise(input: str, load: str, exponent: float) -> None:
    """Kf / (Cox W L f^Af) of each gate: twice that of the pair, and of mirror or sources (gm3/gm1)^2 of it, all of
    their units together (standard; derived). It falls by f^Af, and what it adds to is the white noise alone."""
    output = "single-ended" if load == "mirror" else "differential"
    process = without("handbook", channel_modulation=1e-10, body_effect=0.0, flicker_exponent=exponent)
    quiet = without("handbook", channel_modulation=1e-10, body_effect=0.0, **QUIET)
    a, still = (analysed((input, load, "ideal", output), p, "source", input_width=WIDTHS) for p in (process, quiet))
    gm1, sizes = figure(a, "input.n", "gm"), a.circuit.sizes
    own, other = (process.nmos, process.pmos) if input == "nmos" else (process.pmos, process.nmos)
    at_one = 2.0 * own.flicker_coefficient / own.oxide_capacitance / (sizes["input.width"] * sizes["input.length"])
    if load != "resistor":
        area = sizes["load.width"] * sizes["load.length"] * sizes.get("load.units", 1.0)
        mirror = 2.0 * other.flicker_coefficient / other.oxide_capacitance / area
        at_one = at_one + mirror * (figure(a, "load.n", "gm") / gm1) ** 2
    for frequency in (0.1, 10.0, 1e3):
        flicker = density(a, frequency) - density(still, frequency)
        np.testing.assert_allclose(flicker * frequency**exponent, at_one, rtol=2e-3)
    white = density(still, 1.0)
    corner = float((at_one / white)[1] ** (1.0 / exponent))
    np.testing.assert_allclose(density(a, corner)[1], 2.0 * white[1], rtol=2e-3)


def test_larger_gates_have_less_flicker() -> None:
    """Four times the gate area at the same shape: a quarter of the density."""
    big = analysed(("nmos", "resistor", "ideal", "differential"), input_width=200e-6, input_length=4e-6)
    small = analysed(("nmos", "resistor", "ideal", "differential"))
    quiet = without("handbook", **QUIET)
    silent = analysed(("nmos", "resistor", "ideal", "differential"), quiet)
    large = analysed(("nmos", "resistor", "ideal", "differential"), quiet, input_width=200e-6, input_length=4e-6)
    parts = [density(a, 1.0) - density(b, 1.0) for a, b in ((big, large), (small, silent))]
    np.testing.assert_allclose(4.0 * parts[0], parts[1], rtol=1e-6)


BANDS = [(1.0, 1e5), (1e-3, 10.0), (100.0, 1e3), (2e4, 2.1e4)]


@pytest.mark.parametrize("band", BANDS)
def test_integral_of_white_and_flicker_noise(band: tuple[float, float]) -> None:
    """Far below the poles: W (b - a) + F ln(b / a)."""
    a = analysed(("nmos", "mirror", "single"), input_width=WIDTHS)
    still = analysed(("nmos", "mirror", "single"), without("handbook", **QUIET), input_width=WIDTHS)
    white = density(still, 1.0)
    flicker = density(a, 1.0) - white
    expected = white * (band[1] - band[0]) + flicker * np.log(band[1] / band[0])
    np.testing.assert_allclose(CATALOGUE["input_noise_total"].at("x", {"band": band}).of(a) ** 2, expected, rtol=1e-6)


@pytest.mark.parametrize("kind", [KINDS[3], KINDS[4], KINDS[13], KINDS[15], KINDS[-2]], ids=named)
@pytest.mark.parametrize("band", [(1.0, 1e5), (1e4, 3e9)])
def test_integral_is_the_sum_of_densities(kind: Kind, band: tuple[float, float]) -> None:
    """The trapezoid of many densities on a logarithmic axis, over the poles of the stage too; and two halves of a band
    add up to the whole."""
    a = analysed(kind, "generic-180", input_width=WIDTHS, bias_current=2e-6)
    frequencies = np.geomspace(*band, 121)
    values = np.array([noise.input_density(response(a, float(f))) * f for f in frequencies])
    step = np.log(frequencies[1] / frequencies[0])
    total = noise.integrated(a, band)
    np.testing.assert_allclose(total, step * (values.sum(axis=0) - 0.5 * (values[0] + values[-1])), rtol=2e-3)
    split = float(np.sqrt(band[0] * band[1]))
    parts = noise.integrated(a, (band[0], split)) + noise.integrated(a, (split, band[1]))
    np.testing.assert_allclose(parts, total, rtol=1e-3)


def test_noise_follows_the_absolute_temperature() -> None:
    """Of resistors alone, in effect: small ones carry nearly all of it, 8 k T / (gm^2 R)."""
    a = analysed(
        ("nmos", "resistor", "ideal", "differential"), without("handbook", **EXACT, **QUIET), load_resistance=20.0
    )
    hot = under(a, temperature=2.0 * 300.15)
    ratio = density(hot, 1.0) * figure(hot, "input.n", "gm") ** 2 / (density(a, 1.0) * figure(a, "input.n", "gm") ** 2)
    np.testing.assert_allclose(ratio, 2.0, rtol=0.01)


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_no_element_is_noiseless_by_name_alone(kind: Kind) -> None:
    """Every transistor and every resistor has a positive white noise, no control has any, and the sum is finite."""
    a = analysed(kind)
    white = noise.white(a)
    t, r = len(a.topology.transistors), len(a.topology.resistors)
    assert white.shape == (t + r + len(a.topology.controls), 1)
    assert (white[: t + r] > 0.0).all()
    assert (white[t + r :] == 0.0).all()
    assert np.isfinite(density(a, 1e6)).all()
