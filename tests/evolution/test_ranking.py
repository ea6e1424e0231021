"""Ranking, crowding, contributions and survival against their definitions and against pymoo and moocore."""

import moocore
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pymoo.operators.survival.rank_and_crowding.metrics import calc_crowding_distance
from pymoo.util.nds.non_dominated_sorting import NonDominatedSorting

from optisize.evolution.ranking import contributions, crowding, distinct, ranks, survivors


def test_constraint_domination_has_three_cases():
    """Deb, Pratap, Agarwal, Meyarivan, NSGA-II, IEEE TEC 6(2), 2002, definition 1."""
    better, worse = [0.0, 0.0], [9.0, 9.0]
    pair = np.array([worse, better]).T
    assert ranks(pair, np.array([0.0, 0.1])).tolist() == [0, 1], "feasible before infeasible, whatever the losses"
    assert ranks(pair, np.array([0.1, 0.2])).tolist() == [0, 1], "of two infeasible, the smaller violation"
    assert ranks(pair, np.array([0.0, 0.0])).tolist() == [1, 0], "of two feasible, the dominating one"
    trade = np.array([[0.0, 1.0], [1.0, 0.0]]).T
    assert ranks(trade, np.zeros(2)).tolist() == [0, 0], "neither dominates"


def dominates(losses, violation, i, j):
    """Definition 1 of Deb et al., 2002, in words, for two designs."""
    if violation[i] != violation[j]:
        return violation[i] < violation[j]
    if violation[i] > 0.0:
        return False
    return bool((losses[:, i] <= losses[:, j]).all() and (losses[:, i] < losses[:, j]).any())


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4), st.integers(1, 40), st.booleans())
def test_ranks_peel_off_non_dominated_designs(seed, goals, size, rough):
    """Each rank is what no design of the same or a worse rank dominates; ties and equal violations included."""
    random = np.random.default_rng(seed)
    losses = random.random((goals, size))
    violation = np.maximum(random.standard_normal(size), 0.0).round(1 if rough else 9)
    if rough:
        losses = losses.round(1)
    rank = ranks(losses, violation)
    left, expected = set(range(size)), np.empty(size, dtype=int)
    level = 0
    while left:
        best = {j for j in left if not any(dominates(losses, violation, i, j) for i in left)}
        expected[list(best)] = level
        left, level = left - best, level + 1
    np.testing.assert_array_equal(rank, expected)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(2, 5), st.integers(1, 120))
def test_ranks_of_feasible_designs_are_those_of_pymoo(seed, goals, size):
    """Blank, Deb, pymoo: multi-objective optimization in Python, IEEE Access 8, 2020: NonDominatedSorting."""
    losses = np.random.default_rng(seed).random((goals, size)).round(2)
    _, expected = NonDominatedSorting().do(losses.T, return_rank=True)
    np.testing.assert_array_equal(ranks(losses, np.zeros(size)), expected)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4), st.integers(3, 80), st.booleans())
def test_crowding_is_that_of_pymoo(seed, goals, size, flat):
    """Blank, Deb, 2020: calc_crowding_distance, front by front; theirs is the mean over the goals, ours the sum."""
    random = np.random.default_rng(seed)
    losses = random.random((goals, size))
    if flat:
        losses[0] = 0.5
    rank = random.integers(0, 3, size)
    ours = crowding(losses, rank)
    for front in np.unique(rank):
        members = rank == front
        if members.sum() > 2:
            theirs = calc_crowding_distance(losses[:, members].T) * goals
            np.testing.assert_allclose(ours[members], theirs, rtol=1e-9)


def test_crowding_by_hand():
    """Four designs on a line: the ends are infinite, the others the sum of both scaled gaps."""
    losses = np.array([[0.0, 1.0, 3.0, 4.0], [8.0, 6.0, 2.0, 0.0]])
    np.testing.assert_allclose(crowding(losses, np.zeros(4, dtype=np.intp)), [np.inf, 1.5, 1.5, np.inf])


def test_contributions_of_the_documented_example():
    """Contributions 2, 1, 6, 3 of {(5,5), (4,6), (2,7), (7,4)} from (10, 10): moocore documentation."""
    losses = np.array([[5.0, 4.0, 2.0, 7.0], [5.0, 6.0, 7.0, 4.0]])
    assert moocore.hv_contributions(losses.T.copy(), ref=np.full(2, 10.0)).tolist() == [2.0, 1.0, 6.0, 3.0]
    low, span = np.array([[2.0], [4.0]]), np.array([[5.0], [3.0]])
    ends = np.full(2, 1.2)
    whole = moocore.hypervolume(((losses - low) / span).T.copy(), ref=ends)
    for design in (0, 1):  # the others are the best of a goal
        others = np.delete((losses - low) / span, design, axis=1)
        expected = whole - moocore.hypervolume(others.T.copy(), ref=ends)
        assert contributions(losses)[design] == pytest.approx(expected, rel=1e-12)
    assert np.isinf(contributions(losses)[2:]).all()


def test_one_of_two_equal_designs_keeps_its_contribution():
    losses = np.array([[0.0, 1.0, 1.0, 2.0, 3.0], [3.0, 1.5, 1.5, 1.0, 0.0]])
    added = contributions(losses)
    assert added[1] > 0.0
    assert added[2] == 0.0
    np.testing.assert_allclose(added[[0, 1, 3, 4]], contributions(losses[:, [0, 1, 3, 4]]))


def test_survivors_are_whole_fronts_and_the_best_of_the_split_one():
    random = np.random.default_rng(3)
    losses = random.random((3, 100))
    violation = np.where(random.random(100) < 0.3, random.random(100), 0.0)
    rank = ranks(losses, violation)
    for count in (1, 10, 40, 85, 100, 200):
        chosen = survivors(losses, rank, count)
        assert len(set(chosen)) == min(count, 100)
        assert (np.diff(rank[chosen]) >= 0).all(), "best first"
        left_out = np.setdiff1d(np.arange(100), chosen)
        if left_out.size:
            assert rank[left_out].min() >= rank[chosen].max(), "no better design is left out"


def test_survivors_of_one_front_include_the_best_of_each_goal():
    angles = np.random.default_rng(5).random(200) * np.pi / 2
    losses = np.stack((np.cos(angles), np.sin(angles)))
    chosen = survivors(losses, np.zeros(200, dtype=np.intp), 10)
    assert set(losses.argmin(axis=1)) <= set(chosen)


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 4), st.integers(0, 60), st.integers(1, 4))
def test_distinct_keeps_the_first_of_equal_columns(seed, dimensions, size, levels):
    vectors = np.random.default_rng(seed).integers(0, levels, (dimensions, size)) / 3.0
    seen: dict[bytes, int] = {}
    for column in range(size):
        seen.setdefault(vectors[:, column].tobytes(), column)
    assert distinct(vectors).tolist() == sorted(seen.values())


@pytest.mark.parametrize("function", [lambda a, r: crowding(a, r), lambda a, r: survivors(a, r, 3)])
def test_inputs_stay_as_they_are(function):
    losses, rank = np.random.default_rng(1).random((3, 9)), np.zeros(9, dtype=np.intp)
    losses.flags.writeable = rank.flags.writeable = False
    function(losses, rank)
    violation = np.zeros(9)
    violation.flags.writeable = False
    ranks(losses, violation)
    distinct(losses)
    contributions(losses)
