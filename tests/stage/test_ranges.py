"""Large inputs: the two closed forms of a pair's curve, and the ends of the input range solved again.

With channel modulation and body effect left out and both drains held, an ideal tail gives tanh(vid / (2 n ut)) in weak
inversion (follows from the exponential law; standard) and x sqrt(1 - x^2/4), x = vid/vov, for the square law: Gray,
Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3 (derived).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.optimize import brentq

from optisize.process.law import Array
from optisize.stage import mismatch, ranges
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import KINDS, UT, Kind, analysed, driven_point, figure, named, saturated, under, without

HELD = [
    ("resistor", "single-ended"),
    ("resistor", "differential"),
    ("diode", "differential"),
    ("mirror", "single-ended"),
    ("source", "differential"),
]
# A load of transistors needs a little output conductance, or nothing says where the output stands at rest.
LITTLE = {"body_effect": 0.0, "early_voltage": 1e13, "vertical_field": 0.0, "critical_field": 1e15}


def square_pair(input: str, load: str, output: str, **changes: float | Array) -> tuple[Analysis, Array]:
    """Return a square-law pair with an ideal tail, and the overdrive [V] at which one transistor carries all of it."""
    process = without("handbook", body_effect=0.0, channel_modulation=1e-13)
    a = analysed((input, load, "ideal", output), process, **changes)
    assert (a.room_at_rest > 0.0).all()
    card = process.nmos if input == "nmos" else process.pmos
    sizes = a.circuit.sizes
    return a, np.sqrt(sizes["tail.current"] * sizes["input.length"] / sizes["input.width"] / card.current_factor)


def weak_pair(input: str, load: str, output: str, **changes: float | Array) -> Analysis:
    """Return a pair deep in weak inversion, slope factor one."""
    sizes = {
        "input_width": 4e-3,
        "input_length": 1e-6,
        "tail_current": 1e-9,
        "load_resistance": 1e8,
        "load_width": 2e-6,
    }
    return analysed((input, load, "ideal", output), without("generic-180", **LITTLE), **(sizes | changes))


def departing(curve: Callable[[float], float], departure: float, highest: float) -> float:
    """Return the argument at which a curve of unit slope lies below its tangent by a relative departure."""
    return brentq(lambda x: 1.0 - curve(x) / x - departure, 1e-6, highest, xtol=1e-14)


def square_curve(x: float) -> float:
    return x * np.sqrt(1.0 - 0.25 * x * x)


@pytest.mark.parametrize("departure", [1e-3, 0.01, 0.1])
@pytest.mark.parametrize(("load", "output"), HELD)
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_linear_range_of_the_square_law(input: str, load: str, output: str, departure: float) -> None:
    """Departure 1 - sqrt(1 - x^2/4): x = 2 sqrt(1 - (1 - d)^2), 0.28213 for 1 %."""
    a, vov = square_pair(input, load, output, input_width=np.array([50e-6, 100e-6, 400e-6]))
    x = departing(square_curve, departure, 1.4)
    assert x == pytest.approx(2.0 * np.sqrt(1.0 - (1.0 - departure) ** 2))
    np.testing.assert_allclose(ranges.linear_range(a, departure), x * vov, rtol=1e-3)
    assert departure != 0.01 or x == pytest.approx(0.28213, abs=1e-5)


@pytest.mark.parametrize("departure", [1e-3, 0.01, 0.1])
@pytest.mark.parametrize(("load", "output"), [x for x in HELD if x[0] != "diode"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_linear_range_in_weak_inversion(input: str, load: str, output: str, departure: float) -> None:
    """tanh(x) / x = 1 - d with x = vid / (2 n ut)."""
    a = weak_pair(input, load, output)
    x = departing(np.tanh, departure, 5.0)
    np.testing.assert_allclose(ranges.linear_range(a, departure), 2.0 * UT * x, rtol=4e-3)


@pytest.mark.parametrize("departure", [0.01, 0.1])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_linear_range_grows_with_degeneration(input: str, departure: float) -> None:
    """A resistance R in each source adds R (i1 - i2) to the input: with y the steered part of the tail current I,
    vid = vov (sqrt(1 + y) - sqrt(1 - y)) + R I y, and the tangent is y = vid / (vov + R I); where all is steered before
    it departs that far, y stays at one (derived)."""
    resistance = np.array([1e-3, 1e3, 3e3, 8e3])
    a, vov = square_pair(input, "resistor", "differential", input_degeneration=resistance, tail_current=60e-6)
    y = np.linspace(0.0, 1.0, 200001)[1:, None]
    straight = vov + resistance * 60e-6
    vid = vov * (np.sqrt(1.0 + y) - np.sqrt(1.0 - y)) + resistance * 60e-6 * y
    gone = 1.0 - y * straight / vid
    expected = [
        np.interp(departure, gone[:, k], vid[:, k]) if gone[-1, k] > departure else straight[k] / (1.0 - departure)
        for k in range(4)
    ]
    np.testing.assert_allclose(ranges.linear_range(a, departure), expected, rtol=3e-3)
    assert (np.diff(CATALOGUE["linear_range"].of(a)) > 0.0).all()


@pytest.mark.parametrize(("load", "output"), HELD)
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_steering_voltage_of_the_square_law(input: str, load: str, output: str) -> None:
    """One per cent left of the current I: vov (sqrt(2 * 0.99) - sqrt(2 * 0.01)), 1.26570 vov; sqrt(2) vov for all."""
    a, vov = square_pair(input, load, output, input_width=np.array([50e-6, 100e-6, 400e-6]))
    np.testing.assert_allclose(CATALOGUE["steering_voltage"].of(a), (np.sqrt(1.98) - np.sqrt(0.02)) * vov, rtol=2e-3)


@pytest.mark.parametrize(("load", "output"), [x for x in HELD if x[0] != "diode"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_steering_voltage_in_weak_inversion(input: str, load: str, output: str) -> None:
    """99 to 1 is n ut ln 99 = 4.5951 n ut (a difference of 98 %; one of 99 % would be 5.2933 n ut)."""
    assert 2.0 * np.arctanh(0.99) == pytest.approx(5.29330, abs=1e-5)
    a = weak_pair(input, load, output)
    np.testing.assert_allclose(CATALOGUE["steering_voltage"].of(a), UT * np.log(99.0), rtol=5e-3)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_steering_voltage_grows_with_degeneration(input: str) -> None:
    """By the drop of what is steered, 0.98 R I (derived)."""
    resistance = np.geomspace(100.0, 8e3, 6)
    a, vov = square_pair(input, "resistor", "differential", input_degeneration=resistance, tail_current=60e-6)
    expected = (np.sqrt(1.98) - np.sqrt(0.02)) * vov + 0.98 * resistance * 60e-6
    np.testing.assert_allclose(CATALOGUE["steering_voltage"].of(a), expected, rtol=2e-3)


@pytest.mark.parametrize("kind", [KINDS[4], KINDS[14], KINDS[19], KINDS[20]], ids=named)
def test_degenerated_pairs_are_steered_somewhere(kind: Kind) -> None:
    """Whatever the resistance, up to one that takes more than a volt: each design has its voltage, and it grows."""
    a = analysed(kind, input_degeneration=np.geomspace(200.0, 6e3, 20))
    found = CATALOGUE["steering_voltage"].of(a)[a.converged]
    assert np.isfinite(found).all()
    assert (np.diff(found) > 0.0).all()


def test_the_nearer_direction_counts() -> None:
    """A pair whose current factors differ, at its nulled output: with y steered and a_k = sqrt(I/beta_k), the input is
    a1 (sqrt(1 + y) - 1) + a2 (1 - sqrt(1 - y)), and the tangent y = 2 vid / (a1 + a2). It bends one way at first, so
    the departures of both directions are met at different inputs; the smaller one counts (derived)."""
    a, vov = square_pair("nmos", "resistor", "differential")
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    one = mismatch.Deviations(np.zeros((t, 1)), np.zeros((t, 1)), np.zeros((r, 1)))
    one.factor[a.wiring.pair] = np.array([[0.15], [-0.15]])
    unlike = mismatch.Sampled(mismatch.varied(a.circuit, one), a)
    a1, a2 = (float(vov[0]) / np.sqrt(1.0 + x) for x in (0.15, -0.15))

    def departure(y: float) -> tuple[float, float]:
        vid = a1 * (np.sqrt(1.0 + y) - 1.0) + a2 * (1.0 - np.sqrt(1.0 - y))
        return abs(y * 0.5 * (a1 + a2) / vid - 1.0), abs(vid)

    each = []
    for sign in (1.0, -1.0):
        y = brentq(lambda y, sign=sign: departure(sign * y)[0] - 0.03, 1e-3, 0.9)
        each.append(departure(sign * y)[1])
    assert max(each) > 1.2 * min(each)
    np.testing.assert_allclose(ranges.linear_range(unlike, 0.03), min(each), rtol=1e-4)
    steered = [x * (np.sqrt(1.98) - 1.0) + y * (1.0 - np.sqrt(0.02)) for x, y in ((a1, a2), (a2, a1))]
    np.testing.assert_allclose(ranges.steering_voltage(unlike), min(steered), rtol=3e-3)


def third_over_first(curve: Callable[[Array], Array], amplitude: float) -> float:
    """Return the ratio of harmonics of a curve by the mean over a fine grid of a period."""
    angle = (np.arange(4096) + 0.5) * 2.0 * np.pi / 4096
    y = curve(amplitude * np.cos(angle))
    return abs((y * np.cos(3.0 * angle)).mean() / (y * np.cos(angle)).mean())


@pytest.mark.parametrize("output", ["single-ended", "differential"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_third_harmonic_of_the_square_law(input: str, output: str) -> None:
    """x - x^3/8 + ...: a sine of amplitude A has (A/vov)^2 / 32, for small A; and the curve's own Fourier coefficients
    for larger ones (A^2 |a3/a1| / 4 is standard; derived)."""
    a, vov = square_pair(input, "resistor", output, load_resistance=10e3)
    for x in (0.03, 0.1):
        np.testing.assert_allclose(ranges.third_harmonic(a, x * float(vov[0])), x**2 / 32.0, rtol=0.01)
    for x in (0.3, 0.8, 1.2):
        exact = third_over_first(square_curve, x)
        np.testing.assert_allclose(ranges.third_harmonic(a, x * float(vov[0])), exact, rtol=1e-5)


@pytest.mark.parametrize("output", ["single-ended", "differential"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_third_harmonic_in_weak_inversion(input: str, output: str) -> None:
    """x - x^3/3 + ..., x = vid / (2 n ut): (A / (2 n ut))^2 / 12 for small A, and the curve's own for larger ones."""
    a = weak_pair(input, "resistor", output)
    np.testing.assert_allclose(ranges.third_harmonic(a, 0.1 * 2.0 * UT), 0.1**2 / 12.0, rtol=0.01)
    for x in (0.5, 1.0, 2.0):
        exact = third_over_first(np.tanh, x)
        np.testing.assert_allclose(ranges.third_harmonic(a, x * 2.0 * UT), exact, rtol=2e-3)
    decibels = CATALOGUE["distortion"].at("x", {"amplitude": 0.1 * 2.0 * UT}).of(a)
    np.testing.assert_allclose(decibels, 20.0 * np.log10(0.1**2 / 12.0), atol=0.2)


def test_a_sine_that_clips_has_no_third_harmonic() -> None:
    """Undefined from where the gain would ask for more than the supply; one design's clipping is not another's."""
    amplitude = 0.04
    a, _ = square_pair("nmos", "resistor", "differential", input_width=1e-3, load_resistance=np.array([1e3, 40e3]))
    for beyond, clipped in ((0.05, False), (-0.05, True)):
        supply = amplitude * float(np.abs(a.adm[1])) + beyond
        found = ranges.third_harmonic(under(a, supply=supply, common_mode=(1.8, 1.8)), amplitude)
        assert np.isnan(found).tolist() == [False, clipped]
        alone, _ = square_pair("nmos", "resistor", "differential", input_width=1e-3, load_resistance=1e3)
        np.testing.assert_allclose(found[0], ranges.third_harmonic(alone, amplitude)[0], rtol=1e-6)


@pytest.mark.parametrize("amplitude", [0.2, 0.4])
@pytest.mark.parametrize("process", ["handbook", "generic-180"])
def test_a_fully_steered_pair_is_distorted_not_undefined(process: str, amplitude: float) -> None:
    """A sine that steers the pair fully from side to side, with an output that asks for less than the supply: close to
    a square wave, whose third harmonic is a third (Fourier)."""
    a = saturated(("nmos", "resistor", "single", "single-ended"), process, 30, 3)
    asked = amplitude * np.abs(a.adm) < a.circuit.conditions.supply
    found = ranges.third_harmonic(a, amplitude)[asked]
    assert np.isfinite(found).all()
    assert (found < 0.36).all()


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_degeneration_takes_distortion_away(input: str) -> None:
    """By the fourth power of what it takes of the transconductance from the third-order term, with what is left of a1:
    HD3 = (A/vov)^2 / 32 / (1 + gm R)^3 (feedback of an odd curve; derived)."""
    a, vov = square_pair(input, "resistor", "differential", input_degeneration=np.array([1e-3, 500.0, 2e3]))
    amplitude = 0.05 * float(vov[0])
    loop = 1.0 + figure(a, "input.n", "gm") * a.circuit.sizes["input.degeneration"]
    np.testing.assert_allclose(ranges.third_harmonic(a, amplitude), (amplitude / vov) ** 2 / 32.0 / loop**3, rtol=0.01)


def margins(a: Analysis, common: Array) -> Array:
    """Return what is left at common-mode voltages (N,) of all that ends the range, (K, N): rooms, and the pair's
    current over half of that at rest, less one, as if in volts."""
    point = driven_point(a.circuit, common, common)
    assert point.converged.all()
    at = a.circuit.network.terminals(point.v)
    room = (at.vds - a.circuit.law.saturation(*at.of_law).vdsat)[a.wiring.saturating]
    current = a.circuit.law.drain(*at.of_law).id[a.wiring.pair].sum(axis=0)
    return np.concatenate([room, (current / (0.5 * a.drain.id[a.wiring.pair].sum(axis=0)) - 1.0)[None]])


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_ends_of_the_input_range(kind: Kind, process: str) -> None:
    """Solved again there: one margin is gone and no other is negative (the definition). The ends are known to some
    tenths of a millivolt."""
    a = saturated(kind, process, 6, 31)
    low, high = (CATALOGUE[f"input_range_{end}"].of(a) for end in ("low", "high"))
    common = a.circuit.conditions.middle
    assert (low < common).all()
    assert (high > common).all()
    for end in (low, high):
        limited = np.isfinite(end)
        if limited.any():
            b = a.take(np.flatnonzero(limited))
            left = margins(b, end[limited])
            np.testing.assert_allclose(left.min(axis=0), 0.0, atol=2e-3)
    assert np.isfinite(high if kind[0] == "nmos" else low).all() or kind[1] == "mirror"


@pytest.mark.parametrize("kind", [k for k in KINDS if k[2] == "ideal"], ids=named)
def test_an_ideal_tail_has_no_end(kind: Kind) -> None:
    """It goes on below its rail: no lowest common mode of an n-channel input, no highest of a p-channel one."""
    a = analysed(kind)
    far, near = ranges.input_range(a) if kind[0] == "nmos" else ranges.input_range(a)[::-1]
    assert far == (-np.inf if kind[0] == "nmos" else np.inf)
    assert np.isfinite(near)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_the_end_at_the_load_by_hand(input: str) -> None:
    """A square-law pair with an ideal tail leaves saturation where the common mode stands a threshold beyond the
    drains, which an ideal tail holds: V(drain) + VT (standard)."""
    a, _ = square_pair(input, "resistor", "differential", load_resistance=np.array([5e3, 10e3, 20e3]))
    drain = a.point.v[a.wiring.index["right"]]
    end = ranges.input_range(a)[1 if input == "nmos" else 0]
    sign, card = a.topology.polarity, getattr(a.circuit.process, input)
    np.testing.assert_allclose(end, drain + sign * card.threshold, atol=1e-3)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_a_resistor_tail_ends_at_half_its_current(input: str) -> None:
    """Without a transistor in the tail, the low end is where the pair carries half of what it does in the middle: by
    hand, half of the drop of the resistor, a gate drive of vov / sqrt(2) for half of the current (derived)."""
    process = without("handbook", body_effect=0.0, channel_modulation=0.0)
    a = analysed((input, "resistor", "resistor", "differential"), process, load_resistance=5e3)
    current = a.drain.id[a.wiring.pair].sum(axis=0)
    drop, vov = current * a.circuit.sizes["tail.resistance"], a.saturation.vdsat[a.wiring.rows["input.p"]]
    lower = a.circuit.conditions.middle - a.topology.polarity * (0.5 * drop + vov * (1.0 - np.sqrt(0.5)))
    np.testing.assert_allclose(ranges.input_range(a)[0 if input == "nmos" else 1], lower, atol=1e-3)


@pytest.mark.parametrize("kind", [KINDS[1], KINDS[5], KINDS[14]], ids=named)
def test_out_of_saturation_there_is_no_range(kind: Kind) -> None:
    """Both ends are the middle; the design beside it keeps its own."""
    a = analysed(kind, tail_length=3e-6, tail_width=30e-6, input_length=np.array([2e-6, 2e-6]))
    a = under(a, common_mode=(1.2, 1.2)) if kind[0] == "nmos" else a
    wide = ranges.input_range(a)
    poor = under(a, common_mode=(0.7, 0.7))
    assert (poor.room_at_rest < 0.0).all()
    assert (np.array(ranges.input_range(poor)) == 0.7).all()
    assert (wide[1] - wide[0] > 0.1).all()
    mixed = analysed(("nmos", "resistor", "single", "differential"), load_resistance=np.array([20e3, 60e3]))
    low, high = ranges.input_range(mixed)
    assert (mixed.room_at_rest > 0.0).tolist() == [True, False]
    assert low[0] < mixed.circuit.conditions.middle < high[0]
    assert low[1] == high[1] == mixed.circuit.conditions.middle


def test_the_range_does_not_depend_on_where_it_starts() -> None:
    """The same ends from another common mode inside, for a stage whose current does not follow the common mode: a
    cascoded tail."""
    a = analysed(("nmos", "mirror", "cascode", "single-ended"))
    low, high = (float(x[0]) for x in ranges.input_range(a))
    for part in (0.3, 0.7):
        inside = low + part * (high - low)
        again = ranges.input_range(under(a, common_mode=(inside, inside)))
        np.testing.assert_allclose(np.array(again)[:, 0], [low, high], atol=2e-3)
