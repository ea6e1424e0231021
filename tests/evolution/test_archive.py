"""The archive holds what brute force finds, whenever it is merged; its thinned front is a well-spread part of it."""

import math

import moocore
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from optisize.evolution.archive import Archive, Front, spread
from optisize.evolution.genetic import run

from .problems import begin, bnh, coarse, dtlz2, sphere_volume


def brute_force(losses):
    """Positions of the non-dominated columns; of equal ones the first."""
    no_worse = (losses[:, :, None] <= losses[:, None, :]).all(axis=0)
    better = no_worse & (losses[:, :, None] < losses[:, None, :]).any(axis=0)
    first = no_worse & no_worse.T & (np.arange(losses.shape[1])[:, None] < np.arange(losses.shape[1]))
    return np.flatnonzero(~(better | first).any(axis=0))


@settings(max_examples=50, deadline=None)
@given(
    st.integers(0, 2**32 - 1), st.integers(1, 5), st.lists(st.integers(0, 30), min_size=1, max_size=6), st.booleans()
)
def test_merging_at_any_time_gives_what_brute_force_gives(seed, goals, sizes, rough):
    random = np.random.default_rng(seed)
    blocks = [Front(random.random((2, n)), random.random((goals, n)).round(1 if rough else 9)) for n in sizes]
    lazy = eager = Archive.empty(2, goals)
    for block in blocks:
        lazy, eager = lazy.add(block), eager.add(block).merged()
    vectors = np.concatenate([block.vectors for block in blocks], axis=1)
    losses = np.concatenate([block.losses for block in blocks], axis=1)
    expected = brute_force(losses)
    for archive in (lazy.merged(), eager):
        np.testing.assert_array_equal(archive.front.losses, losses[:, expected])
        np.testing.assert_array_equal(archive.front.vectors, vectors[:, expected])
        assert archive.gathered == sum(sizes), "looking at the archive does not change when it is next due"


@pytest.mark.parametrize(
    ("evaluate", "dimensions", "goals"),
    [(dtlz2(2), 4, 2), (dtlz2(3), 5, 3), (dtlz2(4), 5, 4), (bnh, 2, 2), (coarse(6, 3), 3, 3)],
)
def test_front_is_the_non_dominated_part_of_everything_ever_evaluated(evaluate, dimensions, goals):
    seen = []

    def remember(vectors):
        seen.append(evaluate(vectors))
        return seen[-1]

    state = run(begin(remember, dimensions, goals, population=40, generations=25, patience=0), remember)
    feasible = np.concatenate([part.violation for part in seen]) == 0.0
    losses = np.concatenate([part.losses for part in seen], axis=1)[:, feasible]
    vectors = np.concatenate([part.vectors for part in seen], axis=1)[:, feasible]
    expected = brute_force(losses)
    front = state.front
    np.testing.assert_array_equal(np.unique(front.losses, axis=1), np.unique(losses[:, expected], axis=1))
    known = {column.tobytes() for column in np.concatenate((vectors, losses)).T}
    assert all(column.tobytes() in known for column in np.concatenate((front.vectors, front.losses)).T)
    assert front.size == len(expected)


def test_hypervolume_of_the_documented_example():
    """{(5,5), (4,6), (2,7), (7,4)} from (10, 10): 38. Source: moocore documentation."""
    losses = np.array([[5.0, 4.0, 2.0, 7.0], [5.0, 6.0, 7.0, 4.0]])
    front = Front(losses, losses)
    assert front.hypervolume(np.zeros(2), np.full(2, 10.0)) == pytest.approx(0.38, rel=1e-12)
    assert front.hypervolume(np.array([0.0, 5.0]), np.full(2, 10.0)) == pytest.approx(0.76, rel=1e-12)
    assert front.hypervolume(np.zeros(2), np.full(2, 1.0)) == 0.0, "nothing lies inside the box"


def test_hypervolume_of_one_goal_is_the_share_of_the_range():
    front = Front(np.zeros((1, 2)), np.array([[3.0, 7.0]]))
    assert front.hypervolume(np.zeros(1), np.full(1, 10.0)) == pytest.approx(0.7)
    assert Archive.empty(1, 1).front.hypervolume(np.zeros(1), np.ones(1)) == 0.0


@pytest.mark.parametrize("goals", [5, 7])
def test_hypervolume_beyond_four_goals_is_close_and_repeatable(goals):
    losses = np.abs(np.random.default_rng(1).standard_normal((goals, 60)))
    losses /= np.linalg.norm(losses, axis=0)
    front = Front(losses, losses)
    exact = moocore.hypervolume(losses.T.copy(), ref=np.full(goals, 1.1)) / 1.1**goals
    value = front.hypervolume(np.zeros(goals), np.full(goals, 1.1))
    assert value == pytest.approx(exact, rel=0.01)
    assert value == front.hypervolume(np.zeros(goals), np.full(goals, 1.1))
    assert exact * 1.1**goals < sphere_volume(goals, 1.1)


@settings(max_examples=50, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4), st.integers(1, 60), st.integers(1, 70))
def test_spread_is_a_subset_with_the_best_of_each_goal(seed, goals, size, count):
    losses = np.random.default_rng(seed).random((goals, size))
    losses = losses[:, brute_force(losses)]
    chosen = spread(losses, count)
    assert (np.diff(chosen) > 0).all()
    assert len(chosen) <= count
    if count >= goals:
        np.testing.assert_array_equal(losses[:, chosen].min(axis=1), losses.min(axis=1))
    if count >= losses.shape[1]:
        assert len(chosen) == losses.shape[1]


def test_spread_leaves_no_gap_twice_as_large_as_needed():
    """Gonzalez, Clustering to minimize the maximum intercluster distance, Theor. Comput. Sci. 38, 1985: factor two.

    A quarter circle of length pi / 2 needs gaps of pi / 4 / k to be covered by k designs.
    """
    angles = np.sort(np.random.default_rng(2).random(4000)) * np.pi / 2
    losses = np.stack((np.cos(angles), np.sin(angles)))
    chosen = spread(losses, 20)
    assert len(chosen) == 20
    nearest = np.abs(angles[:, None] - angles[chosen]).min(axis=1)
    assert nearest.max() <= 2.05 * math.pi / 4 / 20


def test_thinned_front_keeps_vectors_with_their_losses():
    losses = np.stack((np.arange(50.0), np.arange(50.0)[::-1]))
    front = Front(losses + 1.0, losses)
    front.vectors.flags.writeable = front.losses.flags.writeable = False
    thin = front.thinned(7)
    assert thin.size == 7
    np.testing.assert_array_equal(thin.vectors, thin.losses + 1.0)
    assert front.thinned(99).size == 50
