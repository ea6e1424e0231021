"""Every shipped problem runs, and what its front says holds when it is evaluated again.

With a part of its generations; at their default budget some are held against the best fronts known (`tests/reference`).
"""

import contextlib
from pathlib import Path

import numpy as np
import pytest

from optisize.files import read_toml
from optisize.front.explore import search, settings_of
from optisize.front.run import Run, load_run
from optisize.front.table import sizes_of, values_of
from optisize.problem.load import load_problem, load_sizing
from optisize.problem.schema import ProblemFile

ROOT = Path(__file__).parents[1]
PROBLEMS = sorted((ROOT / "problems").glob("*.toml"))
GENERATIONS = 28


@pytest.fixture(scope="module", params=PROBLEMS, ids=lambda path: path.stem)
def run(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Run:
    """One search of a shipped problem, written and read back."""
    made = ProblemFile.model_validate(read_toml(request.param)).process == "process/open.toml"
    place = request.getfixturevalue("open_process").parents[1] if made else ROOT
    with contextlib.chdir(place):
        problem = load_problem(request.param)
        searched = search(problem, settings=settings_of(problem, generations=GENERATIONS))
    return load_run(searched.save(tmp_path_factory.mktemp("runs") / request.param.stem))


def test_the_front_has_at_least_a_hundred_distinct_designs(run: Run) -> None:
    sizes = np.array(list(sizes_of(run.problem, run.front).values()))
    assert np.unique(sizes, axis=1).shape[1] == len(run.front) >= 100


def test_no_design_violates_a_limit_when_its_row_is_evaluated_again(run: Run) -> None:
    sizes = sizes_of(run.problem, run.front)
    again = run.problem.measure(run.problem.space.snapped(sizes))
    for limit in run.problem.limits:
        assert limit.met(again[limit.measure.name]).all(), limit.measure.name
    written = values_of(run.problem, run.front)
    for name, values in again.items():
        np.testing.assert_allclose(written[name], values, rtol=1e-6, err_msg=name)  # swings are in single precision


def test_no_design_dominates_another(run: Run) -> None:
    losses = run.problem.judge(values_of(run.problem, run.front)).losses
    ahead = (losses[:, :, None] <= losses[:, None, :]).all(axis=0) & (losses[:, :, None] < losses[:, None, :]).any(
        axis=0
    )
    assert not ahead.any()


def test_every_size_lies_in_its_range(run: Run) -> None:
    for size_range in run.problem.space.ranges:
        values = sizes_of(run.problem, run.front)[size_range.size.name]
        assert (values >= size_range.low * (1 - 1e-9)).all()
        assert (values <= size_range.high * (1 + 1e-9)).all()


def test_the_shipped_sizing_is_one_of_its_problem() -> None:
    problem = load_problem(ROOT / "problems" / "thermopile-preamplifier.toml")
    sizes = load_sizing(ROOT / "problems" / "sizings" / "thermopile-by-hand.toml", problem)
    assert problem.assess(sizes).violation[0] == 0.0
