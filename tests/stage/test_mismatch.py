"""Mismatch to first order against differences of the nonlinear stage, and against handbook formulas."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage import mismatch
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from optisize.stage.mismatch import Deviations, Sampled, varied
from tests.stage.stages import KINDS, Kind, analysed, figure, named, under, without

WIDTHS = np.array([50e-6, 100e-6, 200e-6])
STEP = Deviations(1e-5, 1e-4, 1e-4)  # V, relative, relative: small enough to be straight, large beside rounding


def one_by_one(a: Analysis, sign: float) -> Deviations:
    """Return deviations, one parameter of one element a column, threshold first."""
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    columns = np.eye(2 * t + r) * sign
    return Deviations(
        columns[:t] * STEP.threshold, columns[t : 2 * t] * STEP.factor, columns[2 * t :] * STEP.resistance
    )


def sampled(a: Analysis, deviations: Deviations) -> Sampled:
    count = deviations.threshold.shape[1]
    return Sampled(varied(a.circuit.take(np.zeros(count, dtype=np.intp)), deviations), a)


def differences(a: Analysis) -> tuple[Array, Array]:
    """Return what each deviation does to the input that restores the output and to the common-mode gain, per unit."""
    high, low = (sampled(a, one_by_one(a, sign)) for sign in (1.0, -1.0))
    assert high.converged.all()
    assert low.converged.all()
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    step = np.repeat(STEP, (t, t, r))
    common = [x.wiring.output(x.responses[:, 1]) for x in (high, low)]
    return (high.offset - low.offset) / (2.0 * step), (common[0] - common[1]) / (2.0 * step)


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_first_order_effects_are_the_derivatives(kind: Kind, process: str) -> None:
    """Of every parameter of every element by itself, each sample with its own operating point and offset."""
    a = analysed(kind, process)
    offset, common = differences(a)
    found = mismatch.effects(a)
    by_output = np.concatenate([x[:, 0] for x in found.output])
    scale = np.abs(offset).max()
    np.testing.assert_allclose(-by_output / a.adm[0], offset, rtol=1e-4, atol=1e-6 * scale)
    by_common = np.concatenate([x[:, 0] for x in found.common])
    np.testing.assert_allclose(by_common, common, rtol=2e-3, atol=2e-4 * np.abs(common).max() + 1e-12)


EXACT = {"channel_modulation": 0.0, "body_effect": 0.0}
BELIEVED = {"threshold_matching": 0.0, "factor_matching": 0.0}


def no_deviation(a: Analysis, count: int = 1) -> Deviations:
    t, r = len(a.wiring.transistors), len(a.wiring.resistors)
    return Deviations(np.zeros((t, count)), np.zeros((t, count)), np.zeros((r, count)))


@pytest.mark.parametrize("output", ["single-ended", "differential"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_offset_of_a_resistively_loaded_pair(input: str, output: str) -> None:
    """dVT + (vov/2)(dR/R + dbeta/beta): Gray, Hurst, Lewis and Meyer, ch. 3 (from memory), with the variances of the
    area law, A^2 / (W L), of each difference. One output sees one of the loads only, against half of the gain."""
    a = analysed((input, "resistor", "ideal", output), without("handbook", **EXACT), input_width=WIDTHS)
    card, r, sizes = getattr(a.circuit.process, input), a.circuit.process.resistor, a.circuit.sizes
    area = sizes["input.width"] * sizes["input.length"]
    resistor = r.matching**2 / (r.width * sizes["load.resistance"] / r.sheet_resistance * r.width)
    half = 0.5 * a.saturation.vdsat[a.wiring.rows["input.n"]]
    variance = card.threshold_matching**2 / area + half**2 * (card.factor_matching**2 / area)
    if output == "differential":
        variance = variance + half**2 * resistor
    else:  # vov dR/R of one resistor, whose variance is half of that of a difference
        variance = variance + (2.0 * half) ** 2 * resistor / 2.0
    np.testing.assert_allclose(CATALOGUE["offset_sigma"].of(a), np.sqrt(variance), rtol=1e-9)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_offset_of_a_mirror_loaded_pair(input: str) -> None:
    """dVT1 + (gm3/gm1) dVT3 + (vov1/2)(dbeta1/beta1 + dbeta3/beta3): Gray et al., ch. 4 (from memory)."""
    process = without("handbook", body_effect=0.0, channel_modulation=1e-12)
    a = analysed((input, "mirror", "ideal"), process, input_width=WIDTHS)
    own, other = (process.nmos, process.pmos) if input == "nmos" else (process.pmos, process.nmos)
    sizes = a.circuit.sizes
    pair = sizes["input.width"] * sizes["input.length"]
    mirror = sizes["load.width"] * sizes["load.length"]
    half = 0.5 * a.saturation.vdsat[a.wiring.rows["input.n"]]
    ratio = figure(a, "load.n", "gm") / figure(a, "input.n", "gm")
    variance = own.threshold_matching**2 / pair + ratio**2 * other.threshold_matching**2 / mirror
    variance = variance + half**2 * (own.factor_matching**2 / pair + other.factor_matching**2 / mirror)
    np.testing.assert_allclose(CATALOGUE["offset_sigma"].of(a), np.sqrt(variance), rtol=1e-5)


def test_a_quarter_of_the_area_doubles_the_offset() -> None:
    """The area law, of transistors and resistors: Pelgrom, Duinmaijer and Welbers, IEEE JSSC 24, 1989 (from memory). It
    is an area law and nothing else: wide and short, narrow and long are alike, though foundries find that they are not
    (Drennan and McAndrew, IEEE JSSC 38, 2003)."""
    kind, process = ("nmos", "resistor", "ideal", "differential"), without("handbook", **EXACT)
    alike = process.model_copy(update={"resistor": process.resistor.model_copy(update={"matching": 0.0})})
    sigma = CATALOGUE["offset_sigma"].of(analysed(kind, alike, input_width=100e-6, input_length=2e-6))
    quarter = CATALOGUE["offset_sigma"].of(analysed(kind, alike, input_width=50e-6, input_length=1e-6))
    np.testing.assert_allclose(quarter, 2.0 * sigma, rtol=1e-9)
    shapes = analysed(kind, alike, input_width=np.array([20e-6, 200e-6]), input_length=np.array([10e-6, 1e-6]))
    spread = mismatch.spreads(shapes.circuit).threshold[0]
    np.testing.assert_allclose(spread, 8e-9 / np.sqrt(2.0 * 200e-12))
    resistors = analysed(kind, without("handbook", **EXACT, **BELIEVED), load_resistance=np.array([5e3, 20e3]))
    sigma = CATALOGUE["offset_sigma"].of(resistors)
    np.testing.assert_allclose(sigma[0], 2.0 * sigma[1], rtol=1e-9)


def test_units_average() -> None:
    """Four units have four times the area, and half of the spread, of one."""
    a = analysed(("nmos", "resistor", "single", "differential"))
    spread = mismatch.spreads(a.circuit)
    tail, bias = a.wiring.rows["tail"], a.wiring.rows["bias"]
    np.testing.assert_allclose(spread.threshold[bias], 2.0 * spread.threshold[tail])
    np.testing.assert_allclose(spread.factor[bias], 2.0 * spread.factor[tail])


def test_degeneration_has_an_offset_of_its_own() -> None:
    """A relative difference d of the two resistors is I R d at the input, I being the current of one side (derived)."""
    r = np.array([500.0, 4e3])
    process = without("handbook", **EXACT, **BELIEVED)
    a = analysed(("nmos", "resistor", "ideal", "differential"), process, "source", input_degeneration=r)
    card = process.resistor
    load, own = (card.matching / np.sqrt(card.width**2 * x / card.sheet_resistance) for x in (20e3, r))
    strong = 1.0 / figure(a, "input.n", "gm") + r
    expected = 50e-6 * np.hypot(own * r, load * strong)
    np.testing.assert_allclose(CATALOGUE["offset_sigma"].of(a), expected, rtol=1e-9)


@pytest.mark.parametrize("kind", [KINDS[2], KINDS[3], KINDS[5], KINDS[13], KINDS[14], KINDS[-2], KINDS[-1]], ids=named)
@pytest.mark.parametrize("process", ["handbook", "generic-180"])
def test_samples_have_the_spread_of_first_order(kind: Kind, process: str) -> None:
    """Offset and common-mode gain of 1500 random circuits, each at its own nulled output: their deviation is the one to
    first order, within three times the 1.8 % that so many samples leave open."""
    a = analysed(kind, process)
    count, spread = 1500, mismatch.spreads(a.circuit)
    rng = np.random.default_rng(17)
    shapes = (len(a.wiring.transistors), len(a.wiring.transistors), len(a.wiring.resistors))
    random = Deviations(*(s * rng.normal(size=(n, count)) for s, n in zip(spread, shapes, strict=True)))
    many = sampled(a, random)
    assert many.converged.mean() > 0.995
    good = many.converged
    np.testing.assert_allclose(many.offset[good].std(), CATALOGUE["offset_sigma"].of(a), rtol=0.055)
    common = many.wiring.output(many.responses[:, 1])[good]
    np.testing.assert_allclose(common.std(), CATALOGUE["common_mode_gain_sigma"].of(a), rtol=0.055, atol=1e-12)


def test_rejection_of_a_pair_with_unlike_transconductances() -> None:
    """CMRR = (gm/dgm)(1 + 2 gm Rss): 1 mS, 100 kohm and 2 % make 80.043 dB (standard result). Both factors moved by 1 %
    of gm each way, the output nulled, so that both carry half of 100 uA under 10 V of the tail resistor."""
    process = without("handbook", **EXACT)
    width = 2e-6 / process.nmos.current_factor * (1e-3**2 / 100e-6)
    wide = analysed(("nmos", "resistor", "resistor", "differential"), process, input_width=width, tail_resistance=100e3)
    a = under(wide, supply=14.0, common_mode=(10.7, 10.7))
    np.testing.assert_allclose(figure(a, "input.p", "gm"), 1e-3, rtol=1e-9)
    one = no_deviation(a)
    one.factor[a.wiring.rows["input.p"]] = 1.01**2 - 1.0
    one.factor[a.wiring.rows["input.n"]] = 0.99**2 - 1.0
    unlike = sampled(a, one)
    gm = unlike.drain.gm[unlike.wiring.pair]
    np.testing.assert_allclose((gm[0] - gm[1]) / gm.mean(axis=0), 0.02, rtol=2e-3)
    assert 20.0 * np.log10(50.0 * 201.0) == pytest.approx(80.043, abs=5e-4)
    assert CATALOGUE["cmrr_mismatch"].of(unlike)[0] == pytest.approx(80.043, abs=5e-3)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_rejection_of_unlike_pairs_over_a_transistor(input: str) -> None:
    """The same with the tail's own gds for 1 / Rss and the samples' own gm: current factors of the pair apart by 1 %
    and by 4 %, channels so long that their output conductance takes 3 % of it (standard result)."""
    long = {"input_length": 40e-6, "input_width": 1500e-6, "tail_length": 1e-6, "tail_width": 12e-6}
    a = analysed((input, "resistor", "single", "differential"), without("handbook", body_effect=0.0), "source", **long)
    assert (a.room_at_rest > 0.0).all()
    one = no_deviation(a, 2)
    one.factor[a.wiring.pair] = np.array([[0.005, 0.02], [-0.005, -0.02]])
    unlike = sampled(a, one)
    gm = unlike.drain.gm[unlike.wiring.pair]
    rss = 1.0 / figure(unlike, "tail", "gds")
    expected = gm.mean(axis=0) / (gm[0] - gm[1]) * (1.0 + 2.0 * gm.mean(axis=0) * rss)
    found = CATALOGUE["cmrr_mismatch"].of(unlike)
    np.testing.assert_allclose(found, 20.0 * np.log10(expected), atol=0.4)
    np.testing.assert_allclose(found[0] - found[1], 20.0 * np.log10(4.0), atol=0.02)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_spread_of_the_common_mode_gain(input: str) -> None:
    """Of the difference of two resistively loaded sides, to first order and with the output nulled: of the square law
    gm moves by half of the current factor; of the loads, half of their mismatch is left, since the currents make up for
    it; of the thresholds, nothing. All of it over 1 + 2 gm Rss (derived)."""
    process, rss = without("handbook", **EXACT), np.array([9e3, 20e3, 40e3])
    a = analysed((input, "resistor", "resistor", "differential"), process, "source", tail_resistance=rss)
    gm, load = figure(a, "input.n", "gm"), a.circuit.sizes["load.resistance"]
    card, r = getattr(process, input), process.resistor
    factor = card.factor_matching / np.sqrt(100e-6 * 2e-6)
    relative = r.matching / np.sqrt(r.width * load / r.sheet_resistance * r.width)
    expected = 0.5 * np.hypot(factor, relative) * gm * load / (1.0 + 2.0 * gm * rss)
    np.testing.assert_allclose(CATALOGUE["common_mode_gain_sigma"].of(a), expected, rtol=1e-5)
    three = 20.0 * np.log10(gm * load / (3.0 * expected))
    np.testing.assert_allclose(CATALOGUE["cmrr_mismatch"].of(a), three, atol=1e-3)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_an_ideal_tail_rejects_mismatch_too(input: str) -> None:
    """Without output conductance and body effect the currents are what they are, whatever the common mode."""
    a = analysed((input, "resistor", "ideal", "differential"), without("handbook", **EXACT))
    assert CATALOGUE["cmrr_mismatch"].of(a) > 240.0
    real = analysed((input, "resistor", "ideal", "differential"))
    assert CATALOGUE["cmrr_mismatch"].of(real) < 140.0


@pytest.mark.parametrize("kind", [KINDS[1], KINDS[5], KINDS[14], KINDS[-2]], ids=named)
def test_a_sample_without_deviations_is_the_design(kind: Kind) -> None:
    """Same voltages, no offset, and the same gain; and a part of a population of samples is those samples."""
    a = analysed(kind)
    same = sampled(a, no_deviation(a, 3))
    np.testing.assert_allclose(same.point.v, np.repeat(a.point.v, 3, axis=1), atol=1e-9)
    np.testing.assert_allclose(same.offset, 0.0, atol=1e-12)
    np.testing.assert_allclose(same.adm, a.adm[0], rtol=1e-6)
    one = no_deviation(a, 3)
    one.threshold[0] = [1e-3, -2e-3, 3e-3]
    many = sampled(a, one)
    part = many.take(np.array([2, 0]))
    assert isinstance(part, Sampled)
    np.testing.assert_array_equal(part.offset, many.offset[[2, 0]])
    np.testing.assert_allclose(part.adm, many.adm[[2, 0]], rtol=1e-12)
    np.testing.assert_allclose(many.offset, one.threshold[0] * a.topology.polarity, rtol=2e-3)
    assert CATALOGUE["offset_sigma"].of(many).tolist() == [0.0, 0.0, 0.0]
    assert not many.alike
