"""The knee, the balance and the achievement of wishes, on fronts whose answers are known."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.front.preference import achievement, best_of, bulge, imbalance, knee, scaled

ANGLES = np.linspace(0.0, np.pi / 2, 201)


def test_the_knee_of_a_circle_is_at_45_degrees() -> None:
    losses = np.array([1.0 - np.cos(ANGLES), 1.0 - np.sin(ANGLES)])
    at, there_is = knee(losses)
    assert there_is
    assert ANGLES[at] == pytest.approx(np.pi / 4)
    assert bulge(losses)[at] == pytest.approx(1.0 - np.sqrt(0.5))  # from the chord to the arc
    np.testing.assert_allclose(bulge(losses)[[0, -1]], 0.0, atol=1e-12)


@pytest.mark.parametrize(("factor", "offset"), [(1.0, 0.0), (1e-6, 3e-6), (1e6, -5e5)])
def test_the_knee_of_a_hyperbola_is_where_its_slope_is_that_of_the_chord(factor: float, offset: float) -> None:
    """Of f1 f2 = 1 between 1/k and k that is (1, 1), in whatever units a goal is counted."""
    f = np.geomspace(0.1, 10.0, 401)
    at, there_is = knee(np.array([f, factor / f + offset]))
    assert there_is
    assert f[at] == pytest.approx(1.0)


def test_the_knee_of_a_bent_line_is_its_bend() -> None:
    first = np.linspace([0.0, 1.0], [0.2, 0.3], 30)
    second = np.linspace([0.2, 0.3], [1.0, 0.0], 30)[1:]
    at, there_is = knee(np.concatenate([first, second]).T)
    assert there_is
    assert at == 29


def test_the_knee_of_a_sphere_is_on_its_diagonal() -> None:
    a, b = np.meshgrid(ANGLES[::5], np.linspace(0.0, 1.0, 61))
    up = np.array([np.sin(np.arccos(b)) * np.cos(a), np.sin(np.arccos(b)) * np.sin(a), b]).reshape(3, -1)
    up = np.concatenate([up, np.full((3, 1), 1.0 / np.sqrt(3.0))], axis=1)
    at, there_is = knee(1.0 - up)
    assert there_is
    assert at == up.shape[1] - 1


@pytest.mark.parametrize("front", ["concave", "straight"])
def test_a_front_that_does_not_bend_towards_its_ideal_has_no_knee_but_a_balance(front: str) -> None:
    losses = np.array([np.cos(ANGLES), np.sin(ANGLES)]) ** (1 if front == "concave" else 2)
    at, there_is = knee(losses)
    assert not there_is
    assert ANGLES[at] == pytest.approx(np.pi / 4)
    assert at == imbalance(losses).argmin()


def test_the_knee_stays_where_it_is_as_long_as_it_may_be_taken() -> None:
    f = np.geomspace(0.1, 10.0, 401)
    losses = np.array([f, 1.0 / f])
    whole, _ = knee(losses)
    assert knee(losses, f > 0.5)[0] == whole
    assert knee(losses, f > 1.5)[0] == int(np.flatnonzero(f > 1.5)[0])


def test_a_goal_that_does_not_vary_counts_for_nothing_and_a_single_goal_has_its_best() -> None:
    f = np.geomspace(0.1, 10.0, 401)
    with_constant = np.array([f, np.full(401, 7.0), 1.0 / f])
    assert knee(with_constant)[0] == knee(with_constant[[0, 2]])[0]
    assert knee(np.array([[3.0, 1.0, 2.0]])) == (1, True)
    np.testing.assert_array_equal(scaled(np.array([[3.0, 1.0, 2.0]])), [[1.0, 0.0, 0.5]])


def test_achievement_is_that_of_pymoo() -> None:
    """Against `pymoo.decomposition.asf`, with the wishes as its utopian point and the ranges as its weights."""
    from pymoo.decomposition.asf import ASF

    rng = np.random.default_rng(3)
    losses, wished, ranges = rng.normal(size=(3, 500)), rng.normal(size=3), rng.uniform(0.1, 10.0, 3)
    theirs = ASF().do(losses.T, weights=ranges, utopian_point=wished)
    ours = achievement((losses - wished[:, None]) / ranges[:, None])
    np.testing.assert_allclose(ours, theirs, rtol=1e-12)
    assert np.isinf(achievement(np.array([[np.nan], [0.0]]))[0])


def test_the_best_is_the_first_of_the_smallest_and_never_one_without_a_figure() -> None:
    key = np.array([np.nan, 2.0, 1.0, 1.0, 1.0])
    assert best_of(key) == 2
    assert best_of(key, np.array([0.0, 0.0, 3.0, 1.0, 1.0])) == 3
    assert best_of(key, among=np.array([True, True, False, False, False])) == 1
