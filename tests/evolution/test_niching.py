"""NSGA-III survival: its directions, and its niches filled as pymoo's loop fills them."""

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pymoo.algorithms.moo.nsga3 import niching

from optisize.evolution.niching import directions, filled, survivors
from optisize.evolution.ranking import ranks


@pytest.mark.parametrize("goals", [4, 5, 8, 10, 15])
@pytest.mark.parametrize("population", [1, 20, 200])
def test_directions_lie_on_the_simplex_and_fit_the_population(goals, population):
    points = directions(goals, population)
    np.testing.assert_allclose(points.sum(axis=1), 1.0)
    assert (points >= 0.0).all()
    assert len(points) <= max(population, goals)
    assert len(np.unique(points.round(12), axis=0)) == len(points)


def test_numbers_of_directions_are_those_of_the_paper():
    """Deb, Jain, 2014, table I: 210 for five goals (6 partitions), 156 for eight and 275 for ten (3 and 2)."""
    assert len(directions(5, 210)) == 210
    assert len(directions(8, 156)) == 156
    assert len(directions(10, 275)) == 275


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 12), st.integers(1, 60))
def test_niches_are_filled_as_by_the_loop_of_pymoo(seed, niches, size):
    """Blank, Deb, 2020, pymoo's niching takes one design after the other: the same counts, whatever the lottery."""
    random = np.random.default_rng(seed)
    niche, distance = random.integers(0, niches, size), random.random(size)
    taken = random.integers(0, 4, niches)
    count = int(random.integers(1, size + 1))
    ours = filled(niche, distance, taken, count, random)
    theirs = niching(niche, count, taken.copy(), niche, distance, random_state=random)
    assert len(set(ours)) == count
    assert np.array_equal(*(np.sort(taken + np.bincount(niche[which], minlength=niches)) for which in (ours, theirs)))
    for empty in np.flatnonzero(taken == 0):
        if (niche[ours] == empty).any():
            members = np.flatnonzero(niche == empty)
            assert members[distance[members].argmin()] in ours, "an empty niche takes its closest design"


@pytest.mark.parametrize("share", [0.0, 0.3, 1.0])
def test_survivors_are_whole_fronts(share):
    random = np.random.default_rng(1)
    losses = random.random((4, 120)).round(1)
    violation = np.where(random.random(120) < share, 0.0, random.random(120))
    rank = ranks(losses, violation)
    for count in (5, 60, 119, 120):
        chosen, _ = survivors(losses, violation == 0.0, rank, count, None, random)
        assert len(set(chosen)) == count
        assert (np.diff(rank[chosen]) >= 0).all()
        left_out = np.setdiff1d(np.arange(120), chosen)
        assert not left_out.size or rank[left_out].min() >= rank[chosen].max()


def test_the_filters_of_warnings_are_left_alone():
    """pymoo's nadir estimate silences all warnings for good; ours must not."""
    before = list(warnings.filters)
    losses = np.random.default_rng(1).random((4, 30))
    survivors(losses, np.ones(30, dtype=bool), np.zeros(30, dtype=np.intp), 10, None, np.random.default_rng(1))
    assert warnings.filters == before
