"""The square law by itself; the comparison with a circuit simulator's level-1 model is in tests/reference."""

from __future__ import annotations

import numpy as np
import pytest

from tests.process.law_cases import SQUARE_CASES, Case, voltages


@pytest.mark.parametrize("case", SQUARE_CASES, ids=str)
def test_textbook_current(case: Case) -> None:
    """Shichman and Hodges, IEEE JSSC 3, 1968: beta/2 vov^2 (1 + lambda vds), beta (vov - vds/2) vds in the triode."""
    p = {key: float(value[0, 0]) for key, value in case.parameters.items()}
    width, length = 20e-6, 2e-6
    law = case.bind(np.array([[width]]), np.array([[length]]))
    beta, modulation = p["current_factor"] * width / length, p["channel_modulation"] / length
    vs, vov = 0.4, 0.3
    root = np.sqrt(p["surface_potential"] + vs) - np.sqrt(p["surface_potential"])
    vg = vs + p["threshold"] + p["body_effect"] * root + vov
    for vds in (0.1, 0.9):
        channel = 0.5 * vov**2 if vds > vov else (vov - 0.5 * vds) * vds
        found = law.drain(*(np.array([[x]]) for x in (vg, vs + vds, vs))).id
        np.testing.assert_allclose(found, beta * channel * (1.0 + modulation * vds), rtol=1e-12)


@pytest.mark.parametrize("case", SQUARE_CASES, ids=str)
def test_bulk_over_gate_transconductance(case: Case) -> None:
    """gmb/gm = gamma / (2 sqrt(phi + vsb)); Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated
    Circuits, ch. 1 (from memory)."""
    law = case.bind(np.full((1, 4), 10e-6), np.full((1, 4), 1e-6))
    vs = np.array([[0.0001, 0.3, 0.8, 1.5]])
    drain = law.drain(np.full((1, 4), 3.3), vs + 1.7, vs)
    p = case.parameters
    np.testing.assert_allclose(drain.gmb / drain.gm, p["body_effect"] / (2.0 * np.sqrt(p["surface_potential"] + vs)))


@pytest.mark.parametrize("case", SQUARE_CASES, ids=str)
def test_capacitances(case: Case) -> None:
    """Two thirds of the oxide to the source in saturation, half to each end without drain voltage: Meyer, RCA Review
    32, 1971 (value from memory)."""
    width, length = 10e-6, 1e-6
    law = case.bind(np.full((1, 2), width), np.full((1, 2), length))
    p = {key: float(value[0, 0]) for key, value in case.parameters.items()}
    oxide, overlap = p["oxide_capacitance"] * width * length, p["overlap_capacitance"] * width
    found = law.capacitances(np.full((1, 2), 1.5), np.array([[2.0, 0.0]]), np.zeros((1, 2)))
    np.testing.assert_allclose(found.cgs[0] - overlap, [oxide * 2.0 / 3.0, oxide / 2.0])
    np.testing.assert_allclose(found.cgd[0] - overlap, [0.0, oxide / 2.0], atol=1e-22)


@pytest.mark.parametrize("case", SQUARE_CASES, ids=str)
def test_noise(case: Case) -> None:
    """Two thirds of gm in every region and direction, as SPICE has it; in saturation that is van der Ziel, "Thermal
    noise in field-effect transistors", Proc. IRE 50, 1962 (value from memory)."""
    law, v = case.random(), voltages()
    np.testing.assert_allclose(law.noise_conductance(*v), np.abs(law.drain(*v).gm) * 2.0 / 3.0, rtol=1e-12)
    assert (law.drain(*v).gm < 0.0).any()
