"""Fronts beside each other: lines that cross at a known point, hypervolumes by hand, goals that are shared."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.front.differences import differences, stage_in_words
from optisize.front.fronts import MARGIN, MOST, compare, covered, hypervolume, names_of, shared_goals
from optisize.front.run import Run
from optisize.problem.evaluate import Goal, Problem
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.front.lines import crossing_lines, run_of
from tests.problem.test_bad_input import refused
from tests.problem.texts import MIRROR, RESISTOR, changed, loaded

SIDE = 1.0 + MARGIN  # of the box around the two lines


@pytest.fixture
def problem(tmp_path: Path) -> Problem:
    return loaded(tmp_path, RESISTOR)


def test_a_hypervolume_is_that_of_a_published_example() -> None:
    """38 of {(5, 5), (4, 6), (2, 7), (7, 4)} at (10, 10), from the documentation of moocore."""
    points = np.array([[5.0, 4.0, 2.0, 7.0], [5.0, 6.0, 7.0, 4.0]])
    assert hypervolume(points, np.zeros(2), np.full(2, 10.0)) == pytest.approx(0.38, rel=1e-12)


@pytest.mark.parametrize("sense", ["min", "max"])
def test_lines_that_cross_share_the_joint_front_and_the_box_as_integrals_say(problem: Problem, sense: str) -> None:
    sign = 1.0 if sense == "min" else -1.0
    steep, flat = (run_of(problem, sign * line, (sense, sense)) for line in crossing_lines())
    found = compare(["steep", "flat"], [steep, flat])
    x = crossing_lines()[0][0]
    np.testing.assert_array_equal(found.joint[0], x >= 0.5)
    np.testing.assert_array_equal(found.joint[1], x <= 0.5)
    np.testing.assert_allclose(found.coverage, [[1.0, 501 / 1001], [501 / 1001, 1.0]])
    np.testing.assert_allclose(found.ideal, [0.0, 0.0], atol=1e-12)
    np.testing.assert_allclose(found.reference, [SIDE, SIDE])
    np.testing.assert_allclose(found.hypervolumes * SIDE**2, [0.6025, 0.59], atol=6e-4)  # areas above the lines
    assert found.hypervolume * SIDE**2 == pytest.approx(0.665, abs=6e-4)
    np.testing.assert_allclose(found.alone * SIDE**2, [0.075, 0.0625], atol=6e-4)


@pytest.mark.parametrize("goals", [2, 3, 4])
def test_the_joint_front_and_coverage_are_those_of_a_plain_comparison_of_all_designs(
    problem: Problem, goals: int
) -> None:
    random = np.random.default_rng(goals)
    values = [np.round(random.random((goals, count)), 2) for count in (40, 60, 50)]
    found = compare("abc", [run_of(problem, v, ("min",) * goals) for v in values])
    every = np.concatenate(values, axis=1).T
    for own, joint in zip(values, found.joint, strict=True):
        beaten = [any((other <= d).all() and (other < d).any() for other in every) for d in own.T]
        assert [not b for b in beaten] == joint.tolist()
    for i, a in enumerate(values):
        for j, b in enumerate(values):
            plain = np.mean([any((p <= q).all() for p in a.T) for q in b.T])
            assert found.coverage[i, j] == pytest.approx(plain)
            assert covered(a, b) == pytest.approx(plain)
    assert found.hypervolume >= found.hypervolumes.max()
    assert found.alone.sum() <= found.hypervolume


def test_a_run_beside_its_copy_gains_and_loses_nothing(problem: Problem) -> None:
    line = run_of(problem, crossing_lines()[0])
    found = compare("ab", [line, line])
    assert found.alone.tolist() == [0.0, 0.0]
    assert found.hypervolumes[0] == found.hypervolumes[1] == found.hypervolume
    assert all(joint.all() for joint in found.joint)
    np.testing.assert_array_equal(found.coverage, 1.0)


def _with(problem: Problem, *goals: Goal) -> Run:
    return replace(run_of(problem, np.ones((2, 1))), problem=replace(problem, goals=goals))


def test_goals_are_shared_that_are_alike_in_name_settings_and_sense(problem: Problem) -> None:
    gain, cmrr, current = problem.goals
    fast = Goal(CATALOGUE["cmrr"].at("cmrr", {"frequency": 1e6}), "max")
    shared, left_out = shared_goals(
        ["a", "b", "c"],
        [
            _with(problem, gain, cmrr, current),
            _with(problem, current, gain, fast, replace(gain, measure=CATALOGUE["area"], sense="min")),
            _with(problem, gain, cmrr, current),
        ],
    )
    assert [g.measure.name for g in shared] == ["gain", "supply_current"]
    assert left_out == {
        "cmrr": "max at DC in a, c, max at 1 MHz in b",
        "area": "min in b",
    }
    assert [g.measure.name for g in shared_goals("ab", [_with(problem, fast), _with(problem, fast)])[0]] == ["cmrr"]
    assert shared_goals("ab", [_with(problem, gain), _with(problem, replace(gain, sense="min"))])[0] == ()


def test_runs_that_cannot_be_compared_are_refused(problem: Problem) -> None:
    gain, cmrr, current = problem.goals
    with pytest.raises(InputError, match=r"share only gain; two .* cmrr: max at DC in a; supply_current: min in b"):
        compare("ab", [_with(problem, gain, cmrr), _with(problem, gain, current)])
    with pytest.raises(InputError, match="share no goal"):
        compare("ab", [_with(problem, cmrr), _with(problem, gain)])
    line = run_of(problem, crossing_lines()[0])
    with pytest.raises(InputError, match="b: its front is empty"):
        compare("ab", [line, replace(line, front=line.front.iloc[:0])])
    endless = run_of(problem, np.array([[0.0, np.inf], [1.0, 0.0]]))
    with pytest.raises(InputError, match="b: the run is damaged: first has a figure that is not finite"):
        compare("ab", [line, endless])


def test_runs_are_called_by_their_directories_or_by_paths_where_these_are_alike() -> None:
    assert names_of([Path("results/a"), Path("other/b/")]) == ["a", "b"]
    assert names_of([Path("x/a"), Path("y/a"), Path("y/b")]) == ["x/a", "y/a", "b"]
    assert names_of([Path(".")]) == [Path.cwd().name]


def test_what_differs_is_said_of_every_problem(problem: Problem, tmp_path: Path) -> None:
    assert differences([problem, problem]) == {}
    text = changed(MIRROR, ("supply", 'supply = "1.2 V"'), ("common_mode", 'common_mode = "0.6 V"'), ("area", ""))
    other = loaded(tmp_path, text.replace("generic-180", "generic-65"), "other.toml")
    assert differences([problem, other]) == {
        "stage": [
            "nmos pair, resistor load, single tail, single-ended",
            "nmos pair, mirror load, single tail, single-ended",
        ],
        "process": ["generic-180", "generic-65"],
        "supply": ["1.8 V", "1.2 V"],
        "common_mode": ["900 mV to 1.1 V", "600 mV"],
        "limit output_swing": ["min 600 mV", "min 300 mV"],
        "limit area": ["max 6000 um^2", "none"],
        "limit bandwidth": ["min 1 MHz", "min 20 kHz"],
    }
    assert stage_in_words(other) == differences([problem, other])["stage"][1]


def test_processes_of_one_name_are_told_apart(problem: Problem) -> None:
    other = replace(problem, hashes={**problem.hashes, "process": "0123456789abcdef"})
    first, second = differences([problem, other])["process"]
    assert (first, second) == (f"generic-180 ({problem.hashes['process'][:8]})", "generic-180 (01234567)")


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (("run",), ["found one run", "two to 8"]),
        (("run", "run"), ["run: found twice"]),
        (("run", "run/../run/."), ["found twice"]),
        (("run", *(f"run{i}" for i in range(MOST))), ["found 9 runs", "two to 8"]),
        (("run", "rum"), ["rum: there is no such run", 'did you mean "run"?']),
        (("run", "run/front.csv"), ["run/front.csv: is not a directory"]),
        (("run", ".", "--to", "x.jpg"), ["--to", '"x.jpg"', ".png, .svg, .pdf"]),
    ],
)
def test_runs_that_are_none_are_refused(cli: Cli, run_copy: Path, words: tuple[str, ...], expected: list[str]) -> None:
    refused(cli, *expected, words=("compare", *words))
