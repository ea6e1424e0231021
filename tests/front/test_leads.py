"""Where a front is ahead: lines that cross at a known point, against a plain reading, and round levels."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from optisize.front.fronts import compare
from optisize.front.leads import LEVELS, SAME, WINDOW, bands_of, best_within, levels_of, round_levels, smoothed
from optisize.problem.evaluate import Goal, Problem
from optisize.stage.measures import CATALOGUE
from tests.front.lines import crossing_lines, goals, run_of
from tests.problem.texts import RESISTOR, loaded


@pytest.fixture
def problem(tmp_path: Path) -> Problem:
    return loaded(tmp_path, RESISTOR)


@pytest.mark.parametrize("sense", ["min", "max"])
def test_lines_that_cross_change_the_lead_where_they_cross(problem: Problem, sense: str) -> None:
    """They differ by 0.25 - 0.5 x, so they are alike within 2 SAME of the crossing, on either side of it."""
    sign, near = (1.0 if sense == "min" else -1.0), 2.0 * SAME["linear"]
    runs = [run_of(problem, sign * line, (sense, sense)) for line in crossing_lines()]
    level = levels_of(compare(["steep", "flat"], runs))[0]
    bands = level.bands["second"]
    assert [(b.ahead, b.alone_to) for b in bands] == [((1,), None), ((0, 1), None), ((0,), None)]
    np.testing.assert_allclose([sign * b.start for b in bands], [0.0, 0.5 - near, 0.5 + near], atol=1.2 / LEVELS)
    assert [b.end for b in bands] == [bands[1].start, bands[2].start, None]
    assert level.together == ()
    x = sign * level.levels[:-1]
    assert x.tolist() == sorted(x)
    assert math.isinf(level.levels[-1])
    np.testing.assert_allclose(sign * level.best["second"][0], [*(1.0 - x), 0.0], atol=1e-9)
    np.testing.assert_allclose(sign * level.best["second"][1], [*(0.75 - 0.5 * x), 0.25], atol=1e-9)


def test_a_run_that_alone_reaches_the_strict_levels_is_said_to(problem: Problem) -> None:
    steep, flat = crossing_lines()
    for drop, ends in ((0.4, [0.3, None]), (-0.2, [None])):  # the late one is ahead wherever it is, or never
        late = flat[:, flat[0] >= 0.3] - np.array([[0.0], [drop]])
        level = levels_of(compare("ab", [run_of(problem, steep), run_of(problem, late)]))[0]
        bands = level.bands["second"]
        assert bands[0].ahead == (0,)
        assert bands[0].alone_to == pytest.approx(0.3, abs=1e-9)
        assert [b.end for b in bands] == [None if x is None else pytest.approx(x, abs=1e-9) for x in ends]
        assert all(b.alone_to is None for b in bands[1:])
        assert np.isnan(level.best["second"][1][level.levels < 0.3]).all()
        assert not np.isnan(level.best["second"][0]).any()


@pytest.mark.parametrize(("start", "alone"), [(0.055, True), (0.5 * SAME["linear"], False)])
def test_a_narrow_first_band_goes_only_to_a_run_that_reaches_it(problem: Problem, start: float, alone: bool) -> None:
    early, late = np.array([[0.0, 2.0], [0.9, 0.8]]), np.array([[start, 2.0], [0.5, 0.4]])
    found = levels_of(compare("ab", [run_of(problem, early), run_of(problem, late)]))[0].bands["second"]
    expected = [((0,), start), ((1,), None)] if alone else [((1,), None)]
    assert [(b.ahead, b.alone_to) for b in found] == expected


def test_together_is_the_hypervolume_of_the_other_goals(problem: Problem) -> None:
    """Of planes x + y + z = 1 and 1.2 the near one is ahead at every level; where only the far one is, it is alone."""
    x, y = (part.ravel() for part in np.meshgrid(np.linspace(0.3, 0.9, 25), np.linspace(0.0, 0.9, 25)))
    near = np.array([x, y, 1.0 - x - y])[:, x + y <= 1.0]
    far = np.array([x - 0.2, y, 1.4 - x - y])[:, x + y <= 1.4]
    senses = ("min", "min", "min")
    levels = levels_of(compare("ab", [run_of(problem, near, senses), run_of(problem, far, senses)]))
    assert [level.goal.measure.name for level in levels] == ["first", "second", "third"]
    assert [b.ahead for b in levels[0].together] == [(1,), (0,)]
    assert levels[0].together[0].alone_to == levels[0].together[1].start == pytest.approx(0.3, abs=1e-9)
    assert [set(level.best) for level in levels] == [{"second", "third"}, {"first", "third"}, {"first", "second"}]


def test_the_best_within_a_level_is_that_of_a_plain_reading() -> None:
    random = np.random.default_rng(1)
    losses, others, levels = np.round(random.random(50), 1), random.random(50), np.linspace(-0.2, 1.2, 29)
    expected = [min((o for x, o in zip(losses, others, strict=True) if x <= at), default=math.inf) for at in levels]
    np.testing.assert_array_equal(best_within(losses, others, levels), expected)


def test_scatter_of_two_searches_of_one_front_is_no_lead(problem: Problem) -> None:
    """Of one line, whose designs lie between each other: by turns 0.0625 ahead at a level, alike on the mean."""
    line = crossing_lines(81)[0] * np.array([[1.0], [5.0]])
    runs = [run_of(problem, line[:, start::2]) for start in (0, 1)]
    bands = levels_of(compare("ab", runs))[0].bands["second"]
    assert [b.ahead for b in bands] == [(0, 1)]


def test_scores_are_means_over_one_window_for_every_run_that_reaches_the_level() -> None:
    levels = np.linspace(0.0, 2.0, 201)
    scores = np.array([3.0 * levels, np.where(levels < 1.0, -np.inf, 1.0 + levels), np.full(201, 7.0)])
    found = smoothed(levels, scores)
    np.testing.assert_array_equal(np.isfinite(found), np.isfinite(scores))
    np.testing.assert_allclose(found[2], 7.0)
    inside = (abs(levels - 1.0) > WINDOW) & (levels > WINDOW) & (levels < 2.0 - WINDOW)
    np.testing.assert_allclose(found[:, inside], scores[:, inside], atol=1e-9)  # straight lines are as before
    start = levels.searchsorted(1.0)
    assert found[0, start] / 3.0 == pytest.approx(found[1, start] - 1.0)  # both over the window from 1.0
    assert found[0, start] > scores[0, start]


def test_narrow_bands_are_scatter_but_the_last_one_stays() -> None:
    goal, levels = goals("min")[0], np.linspace(0.0, 1.0, 101)
    scores = np.array([np.where(levels < 0.5, 1.0, 0.0), np.full(101, 0.5)])
    scores[1, [0, 1, 20]], scores[1, 70] = 2.0, -1.0
    assert [(b.start, b.ahead) for b in bands_of(goal, levels, scores, 0.1)] == [(0.0, (0,)), (0.5, (1,))]
    scores[0, 100] = 3.0
    found = [(b.start, b.ahead, b.end) for b in bands_of(goal, levels, scores, 0.1)]
    assert found == [(0.0, (0,), 0.5), (0.5, (1,), 1.0), (1.0, (0,), None)]


def test_a_run_that_is_alike_between_two_leads_is_ahead_throughout() -> None:
    goal, levels = goals("min")[0], np.linspace(0.0, 1.0, 101)
    scores = np.array([np.ones(101), np.where(abs(levels - 0.5) < 0.2, 0.95, 0.0)])
    assert [b.ahead for b in bands_of(goal, levels, scores, 0.1)] == [(0,)]
    assert [b.ahead for b in bands_of(goal, levels[:60], scores[:, :60], 0.1)] == [(0,), (0, 1)]
    scores[1] = np.where(abs(levels - 0.5) < 0.2, 1.2, 0.0)
    assert [b.ahead for b in bands_of(goal, levels, scores, 0.1)] == [(0,), (1,), (0,)]


@pytest.mark.parametrize(
    ("name", "sense", "low", "high", "expected"),
    [
        ("gain", "max", 12.17, 21.38, [20.0, 18.0, 16.0, 14.0]),
        ("gain", "max", 48.0, 73.7, [70.0, 65.0, 60.0, 55.0, 50.0]),
        ("supply_current", "min", 2.04e-6, 8.27e-6, [3e-6, 4e-6, 5e-6, 6e-6, 7e-6, 8e-6]),
        ("supply_current", "min", 1.2e-6, 43e-6, [2e-6, 5e-6, 10e-6, 20e-6]),
        ("supply_current", "min", 1.2e-6, 43e-3, [1e-5, 1e-4, 1e-3, 1e-2]),
        ("headroom", "max", 0.12, 0.12, [0.12]),
    ],
)
def test_levels_are_round_figures_between_the_ends_strictest_first(
    name: str, sense: str, low: float, high: float, expected: list[float]
) -> None:
    goal = Goal(CATALOGUE[name], sense)  # type: ignore[arg-type]
    best, worst = sorted(float(goal.loss(np.array([x]))[0]) for x in (low, high))
    np.testing.assert_allclose(round_levels(goal, best, worst), expected, rtol=1e-9)


def test_a_run_beside_its_copy_is_alike_everywhere(problem: Problem) -> None:
    line = run_of(problem, crossing_lines()[0])
    for level in levels_of(compare("ab", [line, replace(line)])):
        (bands,) = level.bands.values()
        assert [(b.ahead, b.alone_to, b.end) for b in bands] == [((0, 1), None, None)]
