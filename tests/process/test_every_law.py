"""What holds for every transistor law: derivatives, symmetry, bulk, arrays. Common practice, no source."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.law import Array, Law
from optisize.process.laws import LAWS
from optisize.process.table import TableLaw
from tests.process.law_cases import CASES, Case, arrays, voltages

STEP = 5e-4  # V
TERMINALS = {"gm": 0, "gds": 1, "gms": 2}


def test_every_law_is_tried() -> None:
    assert {case.law_name for case in CASES} == set(LAWS)


def moved(v: tuple[Array, Array, Array], terminal: int, by: float) -> tuple[Array, Array, Array]:
    """Return terminal voltages with one terminal moved."""
    vg, vd, vs = (x + by if i == terminal else x for i, x in enumerate(v))
    return vg, vd, vs


def slope(function, v: tuple[Array, Array, Array], terminal: int) -> Array:
    """Return the derivative by central differences of fourth order."""
    at = {k: function(*moved(v, terminal, k * STEP)) for k in (-2, -1, 1, 2)}
    return (at[-2] - 8.0 * at[-1] + 8.0 * at[1] - at[2]) / (12.0 * STEP)


def smooth(law: Law, v: tuple[Array, Array, Array]) -> Array:
    """Tell where a law has no kink within the differences: the square law has them at its borders.

    Beyond its ends a table goes on as its tangent, whose slope is known to first order only; below them it is off.
    """
    vg, vd, vs = v
    if law.outside(vg, vd, vs) is not None:
        inside = (np.abs(vd - vs) > 3e-3) & (np.abs(law.drain(vg, vd, vs).id) > 1e-14)
        for terminal in TERMINALS.values():
            for k in (-2, 2):
                inside &= ~law.outside(*moved(v, terminal, k * STEP))
        return inside & away_from_knots(law, v)
    if not hasattr(law, "modulation"):
        return np.ones(vg.shape, dtype=bool)
    low, vds = np.minimum(vd, vs), np.abs(vd - vs)
    vov = law.saturation(vg, np.maximum(vd, vs), low).vdsat
    near = 3.0 * STEP * 2.0
    return (np.abs(vds - vov) > near) & (vov > near) & (vds > near) & (np.abs(low) > near)


def away_from_knots(law: TableLaw, v: tuple[Array, Array, Array]) -> Array:
    """Tell where the differences lie in one cell of the table: at its knots a spline has a jump in some derivative."""
    at = law._point(*v)
    away = np.ones(v[0].shape, dtype=bool)
    grids = law.surfaces.grids
    for x, axis in zip(at[:3] * 2, (*grids.current.axes, *grids.vdsat.axes), strict=True):
        steps, rate = axis.locate(np.clip(x, axis.low, axis.high))
        beside = steps + 0.5 if axis.degree == 2 else steps
        away &= np.abs(beside - np.rint(beside)) > 4.0 * STEP * rate
    return away


@pytest.mark.parametrize("case", CASES, ids=str)
@pytest.mark.parametrize("name", list(TERMINALS))
def test_derivatives_of_the_current(case: Case, name: str) -> None:
    law, v = case.random(), voltages()
    drain = law.drain(*v)
    sign = -1.0 if name == "gms" else 1.0
    reference = sign * slope(lambda *x: law.drain(*x).id, v, TERMINALS[name])
    scale = np.abs(drain.gms) + np.abs(drain.gds) + np.abs(drain.gm) + 1e-18
    checked = smooth(law, v)
    assert checked.mean() > 0.25
    assert (np.abs(getattr(drain, name) - reference) / scale)[checked].max() < 1e-6


@pytest.mark.parametrize("case", CASES, ids=str)
@pytest.mark.parametrize(("name", "terminal"), [("by_gate", 0), ("by_source", 2)])
def test_derivatives_of_the_saturation_voltage(case: Case, name: str, terminal: int) -> None:
    law, v = case.random(), voltages()
    reference = slope(lambda *x: law.saturation(*x).vdsat, v, terminal)
    # A table is left where drain and source have changed roles, since it is looked up at another vsb there.
    checked = smooth(law, v) & ((v[1] > v[2]) if law.outside(*v) is not None else True)
    assert np.abs(getattr(law.saturation(*v), name) - reference)[checked].max() < 1e-5


@pytest.mark.parametrize("case", CASES, ids=str)
def test_bulk_transconductance(case: Case) -> None:
    """Lowering the bulk is raising the other three: gmb is the slope of the current over the bulk voltage."""
    law, (vg, vd, vs) = case.random(), voltages()
    drain = law.drain(vg, vd, vs)
    at = {k: law.drain(*(x - k * STEP for x in (vg, vd, vs))).id for k in (-2, -1, 1, 2)}
    reference = (at[-2] - 8.0 * at[-1] + 8.0 * at[1] - at[2]) / (12.0 * STEP)
    scale = np.abs(drain.gms) + np.abs(drain.gds) + 1e-18
    checked = smooth(law, (vg, vd, vs))
    assert (np.abs(drain.gmb - reference) / scale)[checked].max() < 1e-6
    forward = checked & (vd > vs)
    assert (drain.gmb / scale)[forward].min() > -1e-12


@pytest.mark.parametrize("case", CASES, ids=str)
def test_drain_and_source_change_roles(case: Case) -> None:
    law, (vg, vd, vs) = case.random(), voltages()
    one, other = law.drain(vg, vd, vs), law.drain(vg, vs, vd)
    np.testing.assert_allclose(other.id, -one.id, rtol=1e-12)
    np.testing.assert_allclose(other.gm, -one.gm, rtol=1e-9, atol=1e-16)
    np.testing.assert_allclose(other.gds, one.gms, rtol=1e-9, atol=1e-16)


@pytest.mark.parametrize("case", CASES, ids=str)
def test_no_voltage_no_current(case: Case) -> None:
    law, (vg, vd, _) = case.random(), voltages()
    drain = law.drain(vg, vd, vd)
    assert (drain.id == 0.0).all()
    assert (drain.gm == 0.0).all()
    np.testing.assert_allclose(drain.gds, drain.gms, rtol=1e-12)


@pytest.mark.parametrize("case", CASES, ids=str)
def test_current_rises_with_gate_and_drain(case: Case) -> None:
    law, (vg, vd, vs) = case.random(), voltages()
    drain = law.drain(vg, np.maximum(vd, vs + 1e-3), vs)
    assert (drain.id >= 0.0).all()
    assert (drain.gm >= 0.0).all()
    assert (drain.gds >= 0.0).all()
    assert (drain.gms >= drain.gm).all()


@pytest.mark.parametrize("case", CASES, ids=str)
def test_noise_is_the_same_whichever_end_is_the_source(case: Case) -> None:
    law, (vg, vd, vs) = case.random(), voltages()
    noise = law.noise_conductance(vg, vd, vs)
    np.testing.assert_allclose(law.noise_conductance(vg, vs, vd), noise, rtol=1e-9)
    conducting = law.drain(vg, vd, vs).id != 0.0
    assert (noise[conducting] > 0.0).all()
    assert conducting.mean() > 0.3


@pytest.mark.parametrize("case", CASES, ids=str)
def test_wider_is_noisier(case: Case) -> None:
    """Devices in parallel: their noise currents add as powers."""
    width, length = np.array([[10e-6]]), np.array([[2e-6]])
    v = (np.array([[0.7, 1.0]]), np.array([[0.2, 1.2]]), np.array([[0.1, 0.1]]))
    one = case.bind(width, length).noise_conductance(*v)
    assert one.shape == (1, 2)
    np.testing.assert_allclose(case.bind(3.0 * width, length).noise_conductance(*v), 3.0 * one, rtol=1e-12)


@pytest.mark.parametrize("case", CASES, ids=str)
def test_arrays_and_single_transistors_agree(case: Case) -> None:
    law, (vg, vd, vs) = case.random(), voltages()
    whole = law.drain(vg, vd, vs), law.saturation(vg, vd, vs), law.capacitances(vg, vd, vs)
    noise = law.noise_conductance(vg, vd, vs)
    assert noise.shape == vg.shape
    for row, column in ((0, 0), (1, 17), (2, 399)):
        one = law.take(slice(row, row + 1), np.array([column]))
        at = [x[row : row + 1, column : column + 1] for x in (vg, vd, vs)]
        alone = one.drain(*at), one.saturation(*at), one.capacitances(*at)
        for record, single in zip(whole, alone, strict=True):
            for field, value in arrays(single).items():
                wanted = np.broadcast_to(getattr(record, field), vg.shape)[row, column]
                np.testing.assert_allclose(np.broadcast_to(value, (1, 1))[0, 0], wanted, rtol=1e-12)
        np.testing.assert_allclose(one.noise_conductance(*at), noise[row, column], rtol=1e-12)


@pytest.mark.parametrize("case", CASES, ids=str)
def test_inputs_are_left_alone(case: Case) -> None:
    law, v = case.random(), voltages()
    for x in v:
        x.setflags(write=False)
    law.drain(*v)
    law.saturation(*v)
    law.capacitances(*v)
    law.noise_conductance(*v)
    law.gate_voltage(np.full(v[0].shape, 1e-6), v[2])
    law.source_voltage(np.full(v[0].shape, 1e-6), v[0])


@pytest.mark.parametrize("case", CASES, ids=str)
def test_far_voltages_stay_finite(case: Case) -> None:
    """Newton may look anywhere; nothing may overflow or warn there."""
    law = case.random((1, 300))
    rng = np.random.default_rng(3)
    vg, vd, vs = rng.uniform(-60.0, 60.0, (3, 1, 300))
    for record in (law.drain(vg, vd, vs), law.saturation(vg, vd, vs), law.capacitances(vg, vd, vs)):
        for field, value in arrays(record).items():
            assert np.isfinite(value).all(), field
    noise = law.noise_conductance(vg, vd, vs)
    assert np.isfinite(noise).all()
    assert (noise >= 0.0).all()


@pytest.mark.parametrize("case", CASES, ids=str)
def test_wider_is_more_and_longer_is_less(case: Case) -> None:
    width, length = np.array([[10e-6]]), np.array([[2e-6]])
    v = (np.array([[1.0]]), np.array([[1.2]]), np.array([[0.1]]))
    one = case.bind(width, length).drain(*v).id
    np.testing.assert_allclose(case.bind(3.0 * width, length).drain(*v).id, 3.0 * one, rtol=1e-12)
    assert case.bind(width, 2.0 * length).drain(*v).id < one


@pytest.mark.parametrize("case", CASES, ids=str)
def test_estimates_for_newton_invert_each_other(case: Case) -> None:
    """Inside the law's own approximation: the source under a gate at the estimated voltage is where it was."""
    law = case.random()
    rng = np.random.default_rng(9)
    current, vs = 1e-9 * 1e5 ** rng.random((3, 400)), rng.uniform(0.0, 1.0, (3, 400))
    vg = law.gate_voltage(current, vs)
    outside = law.outside(vg, vs + 0.5, vs)
    known = np.ones(vg.shape, dtype=bool) if outside is None else ~outside
    assert known.mean() > 0.9
    np.testing.assert_allclose(law.source_voltage(current, vg)[known], vs[known], atol=1e-9)


@pytest.mark.parametrize("case", CASES, ids=str)
def test_estimated_gate_voltage_carries_about_the_current(case: Case) -> None:
    """Within 80 mV of the gate voltage at which the whole law carries it, for long channels at moderate overdrive."""
    rng = np.random.default_rng(9)
    shape = (1, 300)
    length = np.full(shape, 5e-6)
    law = case.bind(2e-6 * 100.0 ** rng.random(shape), length)
    vs = rng.uniform(0.0, 0.5, shape)
    current = 1e-9 * 1e4 ** rng.random(shape)
    vg = law.gate_voltage(current, vs)
    moderate = law.saturation(vg, vs + 1.5, vs).vdsat < 0.4
    assert moderate.sum() > 100
    low, high = (law.drain(vg + by, vs + 0.6, vs).id for by in (-0.08, 0.08))
    assert ((low < current) & (current < high))[moderate].all()
