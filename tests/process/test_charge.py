"""The charge law by itself: limits, published values of the interpolation, capacitances.

The law holds row by row the interpolation ln^2(1 + exp(v/2)) of Enz, Krummenacher and Vittoz, Analog Integrated
Circuits and Signal Processing 8, 1995; the charge form of Enz and Vittoz, 2006, is another curve.
"""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.law import Law
from tests.process.law_cases import CHARGE_CASES, IDEAL_CHARGE, UT, Case, voltages

LEVELS = np.array([[0.1, 1.0, 10.0, 100.0]])
# (1 - exp(-sqrt(IC))) / sqrt(IC): Enz, Krummenacher and Vittoz 1995, derived from their interpolation
INTERPOLATION = np.array([[0.857314, 0.632121, 0.302842]])
# 2 / (1 + sqrt(1 + 4 IC)): Enz and Vittoz, Charge-Based MOS Transistor Modeling, Wiley, 2006 (value from memory)
CHARGE_FORM = np.array([[0.916080, 0.618034, 0.270156, 0.095125]])


def ideal(case: Case, shape: tuple[int, int], **changes: float) -> Law:
    """Return transistors without second-order effects."""
    return case.bind(np.full(shape, 10e-6), np.full(shape, 1e-6), **(IDEAL_CHARGE | changes))


def pinch_off(case: Case, vg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return pinch-off voltage and slope factor by the published formulas."""
    p = case.parameters
    gamma, root_phi = p["body_effect"], np.sqrt(p["surface_potential"])
    root = np.sqrt(vg - p["threshold"] + (root_phi + gamma / 2.0) ** 2)
    return vg - p["threshold"] - gamma * (root - root_phi - gamma / 2.0), 1.0 / (1.0 - gamma / (2.0 * root))


def saturated_at(case: Case, law: Law, levels: np.ndarray, **changes: float) -> tuple[np.ndarray, ...]:
    """Return terminal voltages at which saturated transistors have forward inversion levels."""
    vg = np.full(levels.shape, 1.2)
    vp = vg - case.parameters["threshold"] if changes.get("body_effect") == 0.0 else pinch_off(case, vg)[0]
    vs = vp - 2.0 * UT * np.log(np.expm1(np.sqrt(levels)))
    return vg, vs + 3.0, vs


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_published_interpolation(case: Case) -> None:
    law = ideal(case, LEVELS.shape)
    v = saturated_at(case, law, LEVELS)
    drain = law.drain(*v)
    np.testing.assert_allclose(law.saturation(*v).inversion, LEVELS, rtol=1e-9)
    np.testing.assert_allclose((drain.gms * UT / drain.id)[:, :3], INTERPOLATION, atol=1e-6)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_gate_transconductance_of_the_published_interpolation(case: Case) -> None:
    """With a slope factor of one gate and source transconductance are the same."""
    law = ideal(case, LEVELS.shape, body_effect=0.0)
    drain = law.drain(*saturated_at(case, law, LEVELS, body_effect=0.0))
    np.testing.assert_allclose((drain.gm * UT / drain.id)[:, :3], INTERPOLATION, atol=1e-6)


def test_the_charge_form_is_another_curve() -> None:
    """At an inversion level of ten they are 12 % apart, so a check has to say which it holds."""
    case = CHARGE_CASES[0]
    law = ideal(case, LEVELS.shape)
    drain = law.drain(*saturated_at(case, law, LEVELS))
    ratio = (drain.gms * UT / drain.id) / CHARGE_FORM
    assert ratio[0, 2] == pytest.approx(1.121, abs=1e-3)
    assert np.abs(ratio - 1.0)[0, [0, 1, 3]].max() < 0.07


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_weak_inversion(case: Case) -> None:
    """I = Ispec exp((vp - vs)/ut) (1 - exp(-vds/ut)): the exponential limit of the same authors."""
    law = ideal(case, (1, 30))
    rng = np.random.default_rng(2)
    vs, vds = rng.uniform(0.0, 0.4, (1, 30)), rng.uniform(0.01, 0.5, (1, 30))
    vg = case.parameters["threshold"] - 0.3 + vs
    vp, n = pinch_off(case, vg)
    specific = 2.0 * n * case.parameters["current_factor"] * 10.0 * UT**2
    limit = specific * np.exp((vp - vs) / UT) * (1.0 - np.exp(-vds / UT))
    np.testing.assert_allclose(law.drain(vg, vs + vds, vs).id, limit, rtol=0.02)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_strong_inversion(case: Case) -> None:
    """I = n beta/2 (vp - vs)^2 in saturation, and n beta (vp - (vd + vs)/2)(vd - vs) without."""
    law = ideal(case, (1, 20))
    rng = np.random.default_rng(2)
    vs, vds = rng.uniform(0.0, 0.2, (1, 20)), rng.uniform(0.02, 0.3, (1, 20))
    vg = np.full((1, 20), 2.5)
    vp, n = pinch_off(case, vg)
    beta = case.parameters["current_factor"] * 10.0
    np.testing.assert_allclose(law.drain(vg, vs + 5.0, vs).id, 0.5 * n * beta * (vp - vs) ** 2, rtol=1e-6)
    triode = n * beta * (vp - vs - 0.5 * vds) * vds
    np.testing.assert_allclose(law.drain(vg, vs + vds, vs).id, triode, rtol=1e-6)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_gate_transconductance_never_exceeds_the_weak_inversion_limit(case: Case) -> None:
    """gm/I <= 1/(n ut), second-order effects and all; it follows from the exponential law."""
    shape = (3, 400)
    law, (vg, vd, vs) = case.random(shape), voltages(shape)
    vd = vs + np.abs(vd) + 1e-3
    drain = law.drain(vg, vd, vs)
    # Below this gate voltage no current flows and the square root of the pinch-off voltage is held.
    valid = vg > case.parameters["threshold"] - 0.5
    limit = 1.0 / (pinch_off(case, np.where(valid, vg, 1.0))[1] * UT)
    share = (drain.gm / drain.id / limit)[valid]
    assert share.max() <= 1.0
    assert share.max() > 0.98


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_saturation_voltage(case: Case) -> None:
    """2 ut sqrt(if) + 4 ut: four thermal voltages in weak inversion, vp - vs and four in strong."""
    law = ideal(case, (1, 2))
    vg, vs = np.array([[-0.3, 2.0]]), np.zeros((1, 2))
    found = law.saturation(vg, vs + 1.0, vs).vdsat
    assert found[0, 0] == pytest.approx(4.0 * UT, abs=1e-4)
    assert found[0, 1] == pytest.approx(pinch_off(case, vg)[0][0, 1] + 4.0 * UT, rel=1e-6)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_second_order_effects(case: Case) -> None:
    """Each by the formula that the law states, alone and far in strong inversion."""
    p = {key: float(value[0, 0]) for key, value in case.parameters.items()}
    length = 1e-6
    vg, vs, vd = np.array([[1.8]]), np.array([[0.0]]), np.array([[1.6]])
    plain = ideal(case, (1, 1)).drain(vg, vd, vs).id
    vp = pinch_off(case, vg)[0]
    modulated = ideal(case, (1, 1), early_voltage=p["early_voltage"]).drain(vg, vd, vs).id
    assert float((modulated / plain - 1.0)[0, 0]) == pytest.approx(
        (np.hypot(1.6, 4.0 * UT) - 4.0 * UT) / (p["early_voltage"] * length), rel=1e-7
    )
    reduced = ideal(case, (1, 1), vertical_field=p["vertical_field"]).drain(vg, vd, vs).id
    np.testing.assert_allclose(plain / reduced - 1.0, p["vertical_field"] * vp, rtol=0.01)
    dragged = ideal(case, (1, 1), critical_field=p["critical_field"]).drain(vg, vd, vs).id
    swing = np.minimum(vp, vd) / (p["critical_field"] * length)
    np.testing.assert_allclose(plain / dragged, np.sqrt(1.0 + swing**2), rtol=0.01)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_capacitances(case: Case) -> None:
    """Strong inversion as in Meyer, RCA Review 32, 1971 (value from memory); in weak inversion only the depletion
    layer is left, (n - 1)/n of the oxide to the bulk."""
    law = ideal(case, (1, 3))
    p = {key: float(value[0, 0]) for key, value in case.parameters.items()}
    oxide, overlap = p["oxide_capacitance"] * 10e-12, p["overlap_capacitance"] * 10e-6
    vg, vd = np.array([[6.0, 6.0, 0.1]]), np.array([[6.0, 0.0, 1.0]])
    found = law.capacitances(vg, vd, np.zeros((1, 3)))
    np.testing.assert_allclose((found.cgs[0, :2] - overlap) / oxide, [2.0 / 3.0, 0.5], atol=0.01)
    np.testing.assert_allclose((found.cgd[0, :2] - overlap) / oxide, [0.0, 0.5], atol=0.01)
    n = pinch_off(case, vg)[1][0, 2]
    np.testing.assert_allclose([found.cgs[0, 2] - overlap, found.cgd[0, 2] - overlap], 0.0, atol=0.01 * oxide)
    assert found.cgb[0, 2] / oxide == pytest.approx((n - 1.0) / n, rel=0.01)


def mean_charge(qs: np.ndarray, qd: np.ndarray) -> np.ndarray:
    """Return the charge of the channel, its mean over the position, by quadrature over the charge.

    The current is q^2 + q between the ends, and where along the channel a charge is follows from its part of it.
    """
    points, weights = np.polynomial.legendre.leggauss(16)
    middle, half = 0.5 * (qs + qd), 0.5 * (qs - qd)
    q = middle + half * points[:, None, None]
    return (weights[:, None, None] * q * (2.0 * q + 1.0)).sum(axis=0) * half / (qs * qs + qs - qd * qd - qd)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_noise_is_that_of_the_charge_in_the_channel(case: Case) -> None:
    """Over gms: the charge in the channel, its mean over the position, over the charge at the source.

    Enz and Vittoz, Charge-Based MOS Transistor Modeling, Wiley, 2006 (value from memory): each part of the channel has
    the noise of its charge, that of a current q^2 + q.
    """
    law = ideal(case, (1, 300))
    rng = np.random.default_rng(4)
    vg, vs, vds = rng.uniform(0.2, 2.0, (1, 300)), rng.uniform(0.0, 0.5, (1, 300)), rng.uniform(0.01, 1.2, (1, 300))
    forward, reverse = (law.saturation(vg, vg, v).inversion for v in (vs, vs + vds))
    qs, qd = (np.sqrt(0.25 + i) - 0.5 for i in (forward, reverse))
    clear = (qs > 1e-6) & (qs - qd > 1e-6)  # or the quadrature is rounding
    gamma = law.noise_conductance(vg, vs + vds, vs) / law.drain(vg, vs + vds, vs).gms
    assert clear.mean() > 0.7
    np.testing.assert_allclose(gamma[clear], (mean_charge(qs, qd) / qs)[clear], rtol=1e-6)
    assert gamma.min() > 0.5 - 1e-12
    assert gamma.max() < 1.0


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_noise_in_saturation(case: Case) -> None:
    """Half of gms in weak inversion and two thirds in strong: the limits of the same authors."""
    levels = np.array([[1e-8, 1e-4, 1.0, 4e4]])
    law = ideal(case, levels.shape)
    vg, _, vs = saturated_at(case, law, levels)
    vd = vg + 3.0  # far beyond the gate, and so the far end of the channel empty
    gamma = law.noise_conductance(vg, vd, vs) / law.drain(vg, vd, vs).gms
    np.testing.assert_allclose(gamma[0, [0, 1, 3]], [0.5, 0.5, 2.0 / 3.0], atol=1e-3)
    assert 0.5 < gamma[0, 2] < 2.0 / 3.0


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_noise_without_drain_voltage_is_that_of_a_resistor(case: Case) -> None:
    """In equilibrium the noise is 4 k T times the conductance: Nyquist, "Thermal agitation of electric charge in
    conductors", Physical Review 32, 1928. Second-order effects and all."""
    law, (vg, vd, _) = case.random(), voltages()
    np.testing.assert_allclose(law.noise_conductance(vg, vd, vd), law.drain(vg, vd, vd).gds, rtol=1e-12)
    near = law.noise_conductance(vg, vd + 1e-9, vd)
    np.testing.assert_allclose(near, law.drain(vg, vd, vd).gds, rtol=1e-6)


@pytest.mark.parametrize("case", CHARGE_CASES, ids=str)
def test_noise_in_weak_inversion_is_shot_noise(case: Case) -> None:
    """2 q (forward + reverse current), that is 4 k T times both over 2 ut: common practice, no source."""
    law = ideal(case, (1, 40))
    rng = np.random.default_rng(2)
    vs, vds = rng.uniform(0.0, 0.4, (1, 40)), rng.uniform(0.005, 0.5, (1, 40))
    vg = case.parameters["threshold"] - 0.35 + vs
    drain = law.drain(vg, vs + vds, vs)
    shot = drain.id / np.tanh(vds / (2.0 * UT)) / (2.0 * UT)
    np.testing.assert_allclose(law.noise_conductance(vg, vs + vds, vs), shot, rtol=0.01)
