"""The generations: determinism, stopping, interruption, awkward spaces, and what they refuse."""

import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from optisize.evolution.genetic import extended, run, sample, start, step
from optisize.evolution.state import Evaluated, Settings

from .problems import begin, bnh, coarse, dtlz2, hopeless, same, zdt


def quick(**changes):
    """A short search on DTLZ2."""
    options = {"population": 30, "generations": 30, "patience": 0, "reference": 2.0} | changes
    return begin(dtlz2(3), 7, 3, **options)


def test_the_same_seed_gives_the_same_search():
    assert same(run(quick(), dtlz2(3)), run(quick(), dtlz2(3)))
    assert not same(run(quick(), dtlz2(3)), run(quick(seed=2), dtlz2(3)))


@pytest.mark.parametrize("goals", [2, 4])
def test_a_step_changes_nothing_in_the_state_before(goals):
    """And not in what the evaluator handed over either: all arrays are frozen."""

    def frozen(vectors):
        vectors.flags.writeable = False
        result = dtlz2(goals)(vectors)
        result.losses.flags.writeable = result.violation.flags.writeable = False
        return result

    state = begin(frozen, 6, goals, population=20, generations=9)
    once, again = step(state, frozen), step(state, frozen)
    assert same(once, again)
    assert state.generation == 1


def test_budget_and_records():
    state = run(quick(), dtlz2(3))
    assert state.stopped == "budget"
    assert [record.generation for record in state.records] == list(range(1, 31))
    assert [record.evaluations for record in state.records] == list(range(30, 901, 30))
    volumes = [record.hypervolume for record in state.history]
    assert volumes == sorted(volumes), "an archive never loses hypervolume"
    assert state.history[:-1] == state.records[:-1]
    assert state.history[-1].hypervolume == state.hypervolume
    assert state.history[-1].archive_size == state.front.size
    assert all(record.feasible_share == 1.0 and record.least_violation == 0.0 for record in state.records)


def test_looking_at_a_search_does_not_change_it():
    watched = run(quick(), dtlz2(3), on_generation=lambda state: (state.front, state.history, state.hypervolume))
    assert same(watched, run(quick(), dtlz2(3)))


def test_more_generations_continue_a_finished_search():
    short = run(quick(generations=12), dtlz2(3))
    assert same(run(extended(short, 30), dtlz2(3)), run(quick(), dtlz2(3)))


def test_a_stalled_search_can_be_continued():
    state = run(begin(coarse(3, 2), 2, 2, population=10, generations=50, patience=8), coarse(3, 2))
    assert state.stopped == "stalled"
    more = run(extended(state, 80), coarse(3, 2))
    assert more.stopped == "stalled"
    assert more.generation == state.generation + 8


@pytest.mark.parametrize("when", ["while evaluating", "between generations"])
def test_an_interruption_keeps_the_last_whole_generation(when):
    calls = []

    def interrupting(vectors):
        calls.append(1)
        if len(calls) == 12 and when == "while evaluating":
            raise KeyboardInterrupt
        return dtlz2(3)(vectors)

    def watch(state):
        if state.generation == 12 and when == "between generations":
            raise KeyboardInterrupt

    state = run(
        begin(interrupting, 7, 3, population=30, generations=30, patience=0, reference=2.0),
        interrupting,
        on_generation=watch,
    )
    assert state.stopped == "interrupted"
    assert state.generation == (11 if when == "while evaluating" else 12)
    assert same(run(state, dtlz2(3)), run(quick(), dtlz2(3)))


@pytest.mark.parametrize(
    ("dimensions", "levels", "goals", "population"),
    [(1, 2, 2, 200), (1, 5, 1, 50), (2, 3, 3, 20), (1, 3, 2, 1), (3, 2, 4, 10), (30, 2, 1, 20), (2, 4, 5, 12)],
)
@pytest.mark.parametrize("brood", [1, 3])
def test_spaces_of_few_designs_are_searched_to_the_end(dimensions, levels, goals, population, brood):
    evaluate = coarse(levels, goals)
    settings = {"population": population, "brood": brood, "generations": 200}
    state = run(begin(evaluate, dimensions, goals, reference=dimensions + 1.0, **settings), evaluate)
    assert state.stopped == "stalled"
    assert state.generation > 60
    if dimensions <= 3:
        grid = np.stack(np.meshgrid(*[np.linspace(0.0, 1.0, levels)] * dimensions)).reshape(dimensions, -1)
        best = evaluate(grid).losses.min(axis=1)
    else:
        best = np.zeros(1)
    np.testing.assert_allclose(state.front.losses.min(axis=1), best)
    vectors = state.population.vectors
    assert len(np.unique(vectors, axis=1).T) == vectors.shape[1], "no design twice in the population"


def test_a_space_of_one_design_goes_on_until_the_budget_without_patience():
    def constant(vectors):
        return Evaluated(np.full_like(vectors, 0.5), np.ones((2, vectors.shape[1])), np.zeros(vectors.shape[1]))

    state = run(begin(constant, 3, 2, population=10, generations=20, patience=0), constant)
    assert (state.stopped, state.generation, state.front.size) == ("budget", 20, 1)


def test_nothing_feasible_leaves_the_least_violating_designs():
    state = run(begin(hopeless, 3, 2, population=40, generations=60, patience=0), hopeless)
    assert state.front.size == 0
    assert state.hypervolume == 0.0
    assert state.population.size == 40
    assert (np.diff(state.population.violation) >= 0.0).all(), "best first"
    assert state.population.violation[0] == pytest.approx(0.5, abs=1e-3)
    assert state.records[-1].least_violation == state.population.violation[0]
    assert state.records[-1].feasible_share == 0.0
    least = [record.least_violation for record in state.records]
    assert least == sorted(least, reverse=True)


def test_nothing_feasible_stalls_when_the_violation_no_longer_falls():
    state = run(begin(hopeless, 2, 2, population=40, generations=500, patience=20), hopeless)
    assert state.stopped == "stalled"
    assert state.generation > 25, "not before"
    assert state.population.violation[0] == pytest.approx(0.5, abs=1e-3)


def test_feasible_designs_outside_the_box_do_not_count_as_stalled():
    state = run(begin(dtlz2(2), 3, 2, population=10, generations=40, patience=5, reference=0.1), dtlz2(2))
    assert state.stopped == "budget"


def test_progress_defers_the_stall():
    state = run(begin(zdt(1), 10, 2, population=40, generations=1000, patience=25, reference=1.1), zdt(1))
    assert state.stopped == "stalled"
    assert state.generation > 60
    assert state.hypervolume > 0.95 * 0.8766664 / 1.21
    marked = state.mark.generation
    assert state.generation - marked == 25
    assert state.hypervolume <= state.records[marked - 1].hypervolume * 1.0001


def test_limits_are_found():
    state = run(begin(bnh, 2, 2, population=20, generations=20, reference=140.0), bnh)
    assert 0.0 < state.records[0].feasible_share < 1.0
    assert state.records[-1].feasible_share == 1.0


def test_manual_sizings_are_part_of_the_first_generation():
    seeds = np.full((7, 2), 0.5)
    seeds[0, 1] = 0.0
    seen = []

    def remember(vectors):
        seen.append(vectors)
        return dtlz2(3)(vectors)

    state = begin(remember, 7, 3, population=30, seeds=seeds)
    np.testing.assert_array_equal(seen[0][:, :2], seeds)
    assert seen[0].shape == (7, 30)
    assert state.evaluations == 30
    many = begin(remember, 7, 3, population=4, seeds=np.random.default_rng(1).random((7, 9)))
    assert (many.evaluations, many.population.size) == (9, 4)


def test_the_sample_is_stratified():
    """Every one of 64 equal parts of each axis holds one of 64 Sobol designs (Owen, 1998)."""
    points = sample(5, 64, np.random.default_rng(1))
    assert (np.sort((points * 64).astype(int), axis=1) == np.arange(64)).all()
    assert sample(3, 50, np.random.default_rng(1)).shape == (3, 50)
    assert sample(3, 1, np.random.default_rng(1)).shape == (3, 1)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
@pytest.mark.parametrize("where", ["vectors", "losses", "violation"])
def test_numbers_that_are_not_finite_are_refused(where, bad):
    def broken(vectors):
        result = bnh(vectors)
        array = getattr(result, where).copy()
        array[..., 3] = bad
        return replace(result, **{where: array})

    with pytest.raises(ValueError, match="not finite"):
        begin(broken, 2, 2, population=10)


def test_wrong_shapes_and_negative_violations_are_refused():
    with pytest.raises(ValueError, match="shapes"):
        begin(lambda x: bnh(x[:, 1:]), 2, 2, population=10)
    with pytest.raises(ValueError, match="negative"):
        begin(lambda x: replace(bnh(x), violation=np.full(x.shape[1], -1.0)), 2, 2, population=10)


def test_senseless_starts_are_refused():
    with pytest.raises(ValueError, match="worse than the ideal"):
        begin(bnh, 2, 2, reference=0.0)
    with pytest.raises(ValueError, match="reference and ideal"):
        start(bnh, dimensions=2, goals=2, settings=Settings(), reference=np.ones(3), ideal=np.zeros(3))
    for wrong in ({"population": 0}, {"generations": 0}, {"brood": 0}, {"patience": -1}):
        with pytest.raises(ValueError, match="out of range"):
            Settings(**wrong)


def loaded(module, libraries):
    """Which of these libraries a new interpreter loads with a module."""
    code = f"import sys, {module}; print(*[name for name in {libraries} if name in sys.modules])"
    return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()


def test_imports_are_light():
    assert not loaded("optisize", ["pymoo", "moocore", "scipy", "matplotlib"])
    assert not loaded("optisize.evolution.genetic", ["scipy", "matplotlib", "pandas"])
