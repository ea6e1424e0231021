"""Goals and limits: the border where maximise becomes minimise."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.problem.evaluate import Goal, Limit
from optisize.stage.measures import CATALOGUE
from tests.problem.texts import RESISTOR, changed, loaded


def test_a_better_figure_is_a_smaller_loss() -> None:
    for m in CATALOGUE.values():
        values = np.array([1.0, 2.0, 5.0])
        assert (np.diff(Goal(m, "max").loss(values)) < 0).all()
        assert (np.diff(Goal(m, "min").loss(values)) > 0).all()
        for sense in ("max", "min"):
            np.testing.assert_allclose(Goal(m, sense).value(Goal(m, sense).loss(values)), values, rtol=1e-12)


def test_a_limit_is_missed_by_factors_or_by_steps() -> None:
    bandwidth = Limit(CATALOGUE["bandwidth"], 1e6, None)
    np.testing.assert_allclose(bandwidth.violation(np.array([2e6, 1e6, 0.5e6, 0.25e6])), [0, 0, 1, 2], atol=1e-12)
    headroom = Limit(CATALOGUE["headroom"], 0.05, None)
    np.testing.assert_allclose(headroom.violation(np.array([0.1, 0.05, 0.0, -0.05])), [0, 0, 1, 2], atol=1e-12)
    both = Limit(CATALOGUE["gain"], 20.0, 40.0)
    np.testing.assert_allclose(both.violation(np.array([14.0, 20.0, 40.0, 52.0])), [1, 0, 0, 2], atol=1e-12)


def test_what_cannot_be_measured_meets_no_limit_and_no_limit_counts_without_end() -> None:
    limit = Limit(CATALOGUE["bandwidth"], 1e6, None)
    missed = limit.violation(np.array([np.nan, 0.0, 1e-9]))
    assert (missed > 0).all()
    assert np.isfinite(missed).all()
    assert not limit.met(np.array([np.nan])).any()


def test_a_limit_is_met_up_to_rounding_only() -> None:
    limit = Limit(CATALOGUE["bandwidth"], 1e6, None)
    assert limit.met(np.array([1e6, 1e6 * (1 - 1e-12)])).all()
    assert not limit.met(np.array([1e6 * (1 - 1e-6)])).any()


def test_limits_on_a_signed_measure_act_on_its_magnitude() -> None:
    limit = Limit(CATALOGUE["common_mode_gain"], None, 0.5)
    np.testing.assert_array_equal(limit.met(np.array([-0.4, 0.4, -0.6, 0.6])), [True, True, False, False])


def test_headroom_is_asked_for_unless_the_problem_says_something(tmp_path: Path) -> None:
    names = {x.measure.name: x for x in loaded(tmp_path, changed(RESISTOR, ("headroom", ""))).limits}
    assert names["headroom"].implied
    assert names["headroom"].low == 0.0
    assert not any(x.implied for x in loaded(tmp_path, RESISTOR).limits)


def test_measures_do_not_depend_on_the_threads_and_nothing_is_changed_in_place(tmp_path: Path) -> None:
    problem = loaded(tmp_path, RESISTOR)
    sizes = problem.space.decode(np.random.default_rng(3).random((problem.space.dimensions, 2500)))
    for values in sizes.values():
        values.flags.writeable = False
    one, two = problem.measure(sizes), problem.measure(sizes, threads=2)
    for name in one:
        np.testing.assert_array_equal(one[name], two[name])


def test_no_sizings_have_no_measures(tmp_path: Path) -> None:
    problem = loaded(tmp_path, RESISTOR)
    nothing = problem.space.decode(np.empty((problem.space.dimensions, 0)))
    assert {len(v) for v in problem.measure(nothing).values()} == {0}


def test_a_goal_that_hardly_varies_cannot_be_traded(tmp_path: Path) -> None:
    problem = loaded(tmp_path, RESISTOR)
    losses = np.random.default_rng(1).random((3, 50))
    problem.check_goals_vary(losses)
    losses[1] = np.nan
    losses[1, :20] = 4.0 + 1e-9 * np.arange(20)
    with pytest.raises(InputError, match=r"goals\.cmrr: is the same for every design"):
        problem.check_goals_vary(losses)
