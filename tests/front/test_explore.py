"""A search of a problem: the same front for the same seed, one goal or four, and an answer when nothing is feasible."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.errors import InputError, NothingFeasible
from optisize.evolution.state import State
from optisize.front import explore
from optisize.front.run import CHECKPOINT, Run, load_run
from optisize.front.summary import binding_limits, crowded_sizes, extremes
from optisize.front.table import to_csv
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_sizing
from tests.problem.texts import MIRROR, RESISTOR, SIZING, changed, loaded

BROAD = (("population", "population = 200"), ("generations", "generations = 21"))  # 4 generations of 800 at once


@pytest.fixture
def problem(tmp_path: Path) -> Problem:
    return loaded(tmp_path, changed(RESISTOR, *BROAD))


class Interruption:
    """Ctrl-C after some generations."""

    def __init__(self, generation: int) -> None:
        self.generation = generation

    def __call__(self, state: State) -> None:
        if state.generation >= self.generation:
            raise KeyboardInterrupt


def _same(a: Run, b: Run) -> bool:
    known = ("evaluations", "hypervolume", "generations", "archive", "designs", "stopped", "hypervolume_box")
    return to_csv(a.front) == to_csv(b.front) and all(a.info[k] == b.info[k] for k in known)


def test_the_same_seed_gives_the_same_front_whatever_the_threads(problem: Problem) -> None:
    one = explore.search(problem, threads=1)
    assert _same(one, explore.search(problem, threads=2))
    assert one.history.equals(explore.search(problem, threads=3).history)
    other = explore.search(problem, settings=explore.settings_of(problem, seed=2))
    assert to_csv(other.front) != to_csv(one.front)


@pytest.mark.parametrize("generation", [5, 13])
def test_an_interrupted_search_goes_on_bit_for_bit(problem: Problem, tmp_path: Path, generation: int) -> None:
    whole = explore.search(problem, threads=2)
    part = explore.search(problem, watch=Interruption(generation))
    assert part.info["stopped"] == "interrupted"
    assert part.info["generations"] == generation
    part.save(tmp_path / "run")
    assert (tmp_path / "run" / CHECKPOINT).is_file()
    again = explore.resume(load_run(tmp_path / "run"), watch=Interruption(generation + 4))
    again.save(tmp_path / "run", replace=True)
    assert again.info["stopped"] == "interrupted"
    rest = explore.resume(load_run(tmp_path / "run"), threads=1)
    assert _same(whole, rest)
    assert whole.history.equals(rest.history)
    rest.save(tmp_path / "run", replace=True)
    assert not (tmp_path / "run" / CHECKPOINT).exists()


def test_an_interrupted_search_may_be_given_more_generations(problem: Problem, tmp_path: Path) -> None:
    explore.search(problem, watch=Interruption(9)).save(tmp_path / "run")
    longer = explore.resume(load_run(tmp_path / "run"), generations=29)
    assert _same(longer, explore.search(problem, settings=explore.settings_of(problem, generations=29)))


def test_a_finished_run_goes_on_from_its_front_and_gets_no_worse(finished_run: Path) -> None:
    run = load_run(finished_run)
    more = explore.resume(run)
    assert more.info["seed"] == 2
    assert more.info["population"] == run.info["population"]
    for was, now in zip(extremes(run), extremes(more), strict=True):
        goal = next(g for g in run.problem.goals if g.measure.name == was.goal)
        a, b = (goal.loss(np.array([e.values[was.goal]]))[0] for e in (was, now))
        assert b <= a + 1e-9
    assert more.info["evaluations"] == run.info["evaluations"] + more.info["population"] * run.info["generations"]
    assert more.info["generations"] == 2 * run.info["generations"]
    assert (np.diff(more.history["evaluations"]) > 0).all()
    assert more.history["evaluations"].iloc[-1] == more.info["evaluations"]
    pd.testing.assert_frame_equal(more.history.iloc[: len(run.history)], run.history)


def test_a_manual_sizing_is_part_of_the_search(problem: Problem, tmp_path: Path) -> None:
    (tmp_path / "hand.toml").write_text(SIZING, encoding="utf-8")
    sizes = load_sizing(tmp_path / "hand.toml", problem)
    seen: list[State] = []
    settings = explore.settings_of(problem, generations=1, population=8)
    run = explore.search(problem, seeds=sizes, settings=settings, watch=seen.append)
    hand = problem.space.encode(sizes)
    assert (np.abs(seen[0].population.vectors - hand).max(axis=0) < 1e-9).any()
    assert run.info["evaluations"] == 8


def test_one_goal_gives_the_one_best_design(tmp_path: Path) -> None:
    one = loaded(tmp_path, changed(RESISTOR, ("gain", ""), ("cmrr", "")))
    run = explore.search(one)
    assert len(run.front) == 1
    space = one.space.decode(np.random.default_rng(5).random((one.space.dimensions, 1500)))
    values = one.measure(space)
    feasible = one.judge(values).violation <= 0.0
    assert feasible.any()
    assert run.front["supply_current [A]"].iloc[0] <= values["supply_current"][feasible].min()
    assert [e.goal for e in extremes(run)] == ["supply_current"]


def test_four_goals_give_a_front_whose_designs_do_not_beat_each_other(tmp_path: Path) -> None:
    text = changed(MIRROR, ("supply_current", 'supply_current = "min"\narea = "min"\nbandwidth = "max"'))
    four = loaded(tmp_path, changed(text, ("cmrr", "")))
    run = explore.search(four)
    assert len(run.front) > 10
    columns = [f"{g.measure.name} [{g.measure.unit}]" for g in four.goals]
    losses = np.array([g.loss(run.front[c].to_numpy()) for g, c in zip(four.goals, columns, strict=True)])
    better = (losses[:, :, None] <= losses[:, None, :]).all(axis=0) & (losses[:, :, None] < losses[:, None, :]).any(
        axis=0
    )
    assert not better.any()
    assert _same(run, explore.search(four, threads=2))


def test_limits_that_bind_are_named_with_their_share(problem: Problem) -> None:
    run = explore.search(problem)
    found = {(b.name, b.bound_name): b.share for b in binding_limits(run)}
    expected = {}
    for limit in problem.limits:
        m = limit.measure
        values = run.front[f"{m.name} [{m.unit}]"].to_numpy()
        for name, bound in limit.bounds:
            away = np.log2(values / bound) if m.scale == "log" else (values - bound) / m.step
            expected[m.name, name] = np.mean(np.abs(away) <= 0.03)
    assert found == {key: share for key, share in expected.items() if share >= 0.01}
    assert found
    assert list(found.values()) == sorted(found.values(), reverse=True)


def test_a_search_keeps_the_margins_and_the_problem_its_bounds(tmp_path: Path) -> None:
    edits = {"bandwidth": 'bandwidth = { min = "1 MHz", margin = "10 %" }'}
    edits["output_swing"] = 'output_swing = { min = "0.6 V", margin = "0.1 V" }'
    edits["power"] = 'power = { max = "60 uW", margin = "50 %" }'
    problem = loaded(tmp_path, changed(RESISTOR, *edits.items()))
    run = explore.search(problem)
    assert run.front["bandwidth [Hz]"].min() >= 1.1e6 * (1.0 - 1e-9)
    assert run.front["output_swing [V]"].min() >= 0.7 - 1e-9
    assert run.front["power [W]"].max() <= 30e-6 * (1.0 + 1e-9)
    assert {limit.measure.name: limit.low for limit in run.problem.limits}["bandwidth"] == 1e6
    bound = {(b.name, b.bound_name): b.bound for b in binding_limits(run)}
    assert bound["bandwidth", "min"] == pytest.approx(1.1e6)


def test_sizes_at_an_end_of_their_range_are_named_with_their_share(tmp_path: Path) -> None:
    problem = loaded(tmp_path, changed(RESISTOR, ("tail.units", "tail.units = [1, 3]")))
    run = explore.search(problem)
    found = {(c.name, c.end): c.share for c in crowded_sizes(run)}
    expected = {}
    for r in problem.space.free:
        values = run.front[f"{r.size.name} [{r.size.unit}]" if r.size.unit else r.size.name].to_numpy()
        for end in (r.low, r.high):
            expected[r.size.name, end] = np.mean(np.abs(values - end) <= 0.02 * end)
    assert found == {key: share for key, share in expected.items() if share >= 0.25}
    assert found


def test_nothing_feasible_names_the_limits_and_how_near_the_best_design_came(tmp_path: Path) -> None:
    text = changed(RESISTOR, ("bandwidth", 'bandwidth = { min = "1 GHz" }'), ("area", 'area = { max = "1 mm^2" }'))
    with pytest.raises(NothingFeasible) as caught:
        explore.search(loaded(tmp_path, text))
    first, *rest = str(caught.value).splitlines()
    assert caught.value.exit_code == 3
    assert first.startswith("nothing feasible after 1640 evaluations")
    shown = next(line for line in rest if line.startswith("  bandwidth: min 1 GHz wanted, nearest design has "))
    reached = float(re.search(r"has ([\d.]+) MHz", shown).group(1))  # type: ignore[union-attr]
    assert 1.0 < reached < 1000.0
    assert "area" not in str(caught.value)


def test_a_space_without_an_operating_point_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(
        Problem,
        "measure",
        lambda self, sizes, names=None, threads=1: {
            n: np.full(len(next(iter(sizes.values()))), np.nan) for n in self.needed
        },
    )
    with pytest.raises(NothingFeasible, match="no sizing of the space has an operating point"):
        explore.search(loaded(tmp_path, RESISTOR))


def test_an_interruption_before_anything_is_feasible_can_be_resumed(tmp_path: Path) -> None:
    text = changed(RESISTOR, ("bandwidth", 'bandwidth = { min = "1 GHz" }'))
    part = explore.search(loaded(tmp_path, text), watch=Interruption(21))
    assert len(part.front) == 0
    assert extremes(part) == []
    assert binding_limits(part) == []
    part.save(tmp_path / "run")
    again = load_run(tmp_path / "run")
    with pytest.raises(NothingFeasible, match="1640 evaluations"):
        explore.resume(again)
    (tmp_path / "run" / CHECKPOINT).unlink()
    with pytest.raises(InputError, match="no design to go on from"):
        explore.resume(load_run(tmp_path / "run"))
