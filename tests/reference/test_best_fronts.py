"""The search on the shipped problems, beside the best fronts known of them (ten runs of ten times the budget)."""

import hashlib
from statistics import median

import pytest

from optisize.front.explore import search, settings_of
from optisize.problem.evaluate import Problem

from .fronts import PROBLEMS, problem, share, stored

SEEDS = (1, 2, 3, 4, 5)


@pytest.mark.parametrize("name", PROBLEMS)
def test_the_stored_front_is_of_the_problem_as_it_stands(name: str) -> None:
    """Whoever changes a problem or a built-in process remakes the front: python -m tests.reference.fronts NAME."""
    best, loaded = stored(name), problem(name)
    assert best["sha256"] == dict(loaded.hashes)
    assert best["goals"] == [goal.measure.name for goal in loaded.goals]
    assert len(loaded.hashes["problem"]) == len(hashlib.sha256().hexdigest())


@pytest.mark.parametrize("name", PROBLEMS)
def test_the_default_budget_reaches_the_best_front(name: str) -> None:
    """99 % of its hypervolume as the median of five seeds, and no seed below 98.5 %."""
    loaded: Problem = problem(name)
    shares = []
    for seed in SEEDS:
        run = search(loaded, threads=1, settings=settings_of(loaded, seed=seed))
        assert run.state is not None
        shares.append(share(run.state.front, stored(name)))
    assert median(shares) >= 0.99, shares
    assert min(shares) >= 0.985, shares
    assert max(shares) <= 1.001, "a search that beats the stored front says that the front has to be remade"
