"""Linear algebra over populations, against numpy; crossings against analytic transfer functions (derived)."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage.linear import Transfer, crossing, elimination, solve
from tests.stage.stages import KINDS, Kind, analysed, named


@pytest.mark.parametrize("size", [1, 2, 3, 5, 7])
@pytest.mark.parametrize("complex_", [False, True])
def test_solve_against_numpy(size: int, complex_: bool) -> None:
    rng = np.random.default_rng(size)
    matrix = rng.normal(size=(size, size, 50)) + 3.0 * size * np.eye(size)[:, :, None]
    right = rng.normal(size=(size, 3, 50))
    if complex_:
        matrix, right = matrix + 1j * rng.normal(size=matrix.shape), right + 1j * rng.normal(size=right.shape)
    kept = matrix.copy(), right.copy()
    matrix.setflags(write=False)
    right.setflags(write=False)
    reference = np.linalg.solve(matrix.transpose(2, 0, 1), right.transpose(2, 0, 1)).transpose(1, 2, 0)
    np.testing.assert_allclose(solve(matrix, right), reference, rtol=1e-10, atol=1e-13)
    np.testing.assert_array_equal(matrix, kept[0])
    np.testing.assert_array_equal(right, kept[1])


def test_solve_with_a_pattern() -> None:
    """Zeros that are known are skipped, with the same result whatever their places."""
    rng = np.random.default_rng(5)
    for _ in range(30):
        size = int(rng.integers(2, 8))
        known = rng.random((size, size)) < 0.4
        np.fill_diagonal(known, True)
        matrix = np.where(known[:, :, None], rng.normal(size=(size, size, 9)), 0.0)
        matrix += 3.0 * size * np.eye(size)[:, :, None]
        right = rng.normal(size=(size, 2, 9))
        pattern = tuple(tuple(bool(x) for x in row) for row in known)
        np.testing.assert_allclose(solve(matrix, right, pattern), solve(matrix, right), rtol=1e-10, atol=1e-13)


def test_a_singular_system_spoils_only_its_own_design() -> None:
    matrix = np.repeat(np.eye(3)[:, :, None], 4, axis=2)
    matrix[1, :, 2] = 0.0
    with np.errstate(all="ignore"):
        solution = solve(matrix, np.ones((3, 1, 4)))
    assert np.isfinite(solution[:, :, [0, 1, 3]]).all()
    assert not np.isfinite(solution[:, :, 2]).all()


def test_a_controlled_node_comes_after_what_it_acts_on() -> None:
    """A row without its own diagonal, as that of an ideal amplifier, is solved without exchange of rows: random
    conductances between three nodes, the last of which a control sets so that the mean of the others is given."""
    rng = np.random.default_rng(3)
    matrix = rng.uniform(0.2, 1.0, (3, 3, 40))
    matrix[0, 0] += 2.0
    matrix[1, 1] += 2.0
    matrix[2] = np.array([0.5, 0.5, 0.0])[:, None]
    pattern = ((True, True, True), (True, True, True), (True, True, False))
    assert elimination(pattern).order[-1] == 2
    right = rng.normal(size=(3, 2, 40))
    found = solve(matrix, right, pattern)
    np.testing.assert_allclose(np.einsum("ijn,jkn->ikn", matrix, found), right, atol=1e-12)
    np.testing.assert_allclose(0.5 * (found[0] + found[1]), right[2], atol=1e-12)


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_nodal_matrices(kind: Kind) -> None:
    """Of real stages, through their sparsity, against numpy with exchange of rows; and what is left of the equations is
    rounding of their terms. Stacked cascodes make high resistances, so their voltages carry more of that rounding."""
    a = analysed(kind, input_width=np.geomspace(20e-6, 300e-6, 20))
    reference = np.linalg.solve(a.matrix.transpose(2, 0, 1), -a.pulls.transpose(2, 0, 1)).transpose(1, 2, 0)
    close = {"rtol": 1e-6, "atol": 1e-9} if a.topology.delicate else {"rtol": 1e-8, "atol": 1e-12}
    np.testing.assert_allclose(a.responses, reference, **close)
    left = np.einsum("ijn,jkn->ikn", a.matrix, a.responses) + a.pulls
    terms = np.einsum("ijn,jkn->ikn", np.abs(a.matrix), np.abs(a.responses) + 1.0)
    assert (np.abs(left) <= 1e-13 * terms).all()


def poles(*times: Array) -> Transfer:
    """Return buffered stages in a row, each one pole of a time constant (N,): H = product of 1/(1 + s t)."""
    n, k = len(times[0]), len(times)
    conductance = np.repeat((np.eye(k) - np.eye(k, k=-1))[:, :, None], n, axis=2)
    capacitance = np.zeros((k, k, n))
    for i, time in enumerate(times):
        capacitance[i, i] = time
    pull = np.zeros((k, n))
    pull[0] = -1.0
    return Transfer(conductance, capacitance, pull, np.zeros((k, n)), np.eye(k)[-1])


TIMES = np.geomspace(1e-12, 1e-3, 40)


@pytest.mark.parametrize("guess", [1.0, 0.01, 30.0])
@pytest.mark.parametrize("level", [1.0, 0.1, 1e4, 1e8])
def test_crossing_of_one_pole(guess: float, level: float) -> None:
    found = crossing(poles(TIMES), np.full(40, level), guess * np.sqrt(level) / TIMES)
    np.testing.assert_allclose(found, np.sqrt(level) / TIMES, rtol=1e-5)


@pytest.mark.parametrize("guess", [1.0, 0.05, 20.0])
def test_crossing_of_two_and_three_poles(guess: float) -> None:
    """-3 dB of k equal poles: sqrt(2^(1/k) - 1) / t."""
    for k in (2, 3):
        exact = np.sqrt(2.0 ** (1.0 / k) - 1.0) / TIMES
        np.testing.assert_allclose(crossing(poles(*[TIMES] * k), np.ones(40), guess * exact), exact, rtol=1e-5)


def test_crossing_of_spread_poles() -> None:
    """Two poles a factor apart: the root of (1 + w^2 a^2)(1 + w^2 b^2) = 1 + level."""
    factor = np.geomspace(1.0, 1e4, 40)
    slow, fast = np.full(40, 1e-6), 1e-6 / factor
    for level in (1.0, 99.0, 1e6):
        total, product = slow**2 + fast**2, slow**2 * fast**2
        exact = np.sqrt((-total + np.sqrt(total**2 + 4.0 * product * level)) / (2.0 * product))
        found = crossing(poles(slow, fast), np.full(40, level), np.sqrt(level) / slow)
        np.testing.assert_allclose(found, exact, rtol=2e-5)


def test_no_crossing() -> None:
    """A path around the pole keeps the response above the level for ever: H = (1 + s z)/(1 + s t), z > t/sqrt(2)."""
    t = np.full(3, 1e-6)
    z = t * np.array([0.1, 0.5, 0.9])
    transfer = Transfer(np.ones((1, 1, 3)), t[None, None], -np.ones((1, 3)), -z[None], np.ones(1))
    found = crossing(transfer, np.ones(3), 1.0 / t)
    assert np.isnan(found).tolist() == [False, False, True]
    exact = 1.0 / np.sqrt(t**2 - 2.0 * z**2, where=t**2 > 2.0 * z**2, out=np.full(3, 1.0))
    np.testing.assert_allclose(found[:2], exact[:2], rtol=2e-5)


def test_each_crossing_stands_alone() -> None:
    """Easy and hopeless ones in one batch give what they give alone."""
    rng = np.random.default_rng(2)
    times = [1e-6 * 1e3 ** rng.random(30) for _ in range(3)]
    start = 1e6 * 1e-4 ** rng.random(30)
    every = poles(*times)
    together = crossing(every, np.ones(30), start)
    alone = [crossing(every.take(np.array([k])), np.ones(1), start[k : k + 1])[0] for k in range(30)]
    np.testing.assert_allclose(together, alone, rtol=1e-12)
