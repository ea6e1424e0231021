"""The first moves from a poor sizing towards the front: made one by one here, and measured."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from optisize.front.moves import Gap, first_moves, size_distances
from optisize.front.run import load_run
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem, load_sizing
from tests.conftest import Cli, call
from tests.front.test_assess import POOR
from tests.problem.texts import MIRROR, RESISTOR

ROOT = Path(__file__).parents[2]
SAMPLE = ROOT / "results" / "sample"
POOR_MIRROR = POOR.replace('load.resistance = "60 kohm"', 'load.width = "20 um"\nload.length = "0.4 um"').replace(
    '"6 uA"', '"4 uA"'
)


@pytest.fixture(scope="module")
def mirror_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    place = tmp_path_factory.mktemp("mirror")
    (place / "stage.toml").write_text(MIRROR, encoding="utf-8")
    result = call("search", str(place / "stage.toml"), "--to", str(place / "run"), "--no-figures", "--quiet")
    assert result.exit_code == 0, result.stderr
    return place / "run"


def _case(name: str, mirror_run: Path) -> tuple[Path, Path, str]:
    if name == "mirror":
        return mirror_run / "problem.toml", mirror_run, POOR_MIRROR
    problem = ROOT / "problems" / "thermopile-preamplifier.toml"
    by_hand = (ROOT / "problems" / "sizings" / "thermopile-by-hand.toml").read_text(encoding="utf-8")
    return problem, SAMPLE, POOR if name == "poor" else by_hand


def _losses(problem: Problem, values: dict[str, np.ndarray]) -> np.ndarray:
    return np.array([g.loss(values[g.measure.name])[0] for g in problem.goals])


@pytest.mark.parametrize("name", ["poor", "by hand", "mirror"])
def test_the_moves_when_they_are_made_recover_most_of_the_gap(cli: Cli, mirror_run: Path, name: str) -> None:
    """Each move is applied to the sizing by hand; goals count in ranges of the front, each up to the design's own."""
    file, run, text = _case(name, mirror_run)
    Path("hand.toml").write_text(text, encoding="utf-8")
    result = cli("assess", str(file), "hand.toml", "--against", str(run), "--json")
    assert result.exit_code == 0, result.stderr
    report = json.loads(result.stdout)
    problem, front, nearest = load_problem(file), load_run(run).front, report["nearest"]
    assert nearest["design"] in [d["design"] for d in report["dominated_by"]]

    row = front[front["design"] == nearest["design"]].iloc[0]
    headings = [f"{g.measure.name} [{g.measure.unit}]" for g in problem.goals]
    design = np.array([g.loss(np.array([row[h]]))[0] for g, h in zip(problem.goals, headings, strict=True)])
    ranges = np.array([np.ptp(g.loss(front[h].to_numpy())) for g, h in zip(problem.goals, headings, strict=True)])
    sizes = load_sizing("hand.toml", problem)
    start = problem.measure(sizes)
    own = _losses(problem, start)
    assert (design <= own).all()
    assert (design < own).any()

    seen = set()
    for move in nearest["moves"]:
        assert move["size"] not in seen  # single changes, each of another size
        seen.add(move["size"])
        assert float(sizes[move["size"]][0]) == move["from"]
        sizes[move["size"]] = np.array([move["to"]])
        assert problem.space.snapped(sizes)[move["size"]][0] == move["to"]  # it can be drawn
        towards = (move["to"] - move["from"]) * (row[_heading(problem, move["size"])] - move["from"])
        assert towards > 0.0
        values = problem.measure(sizes)
        share = (np.minimum(own - _losses(problem, values), own - design) / ranges).sum()
        assert move["recovered"] == pytest.approx(share / ((own - design) / ranges).sum(), abs=1e-6)
        for measure in problem.needed:
            assert move["measures"][measure] == pytest.approx(float(values[measure][0]), rel=1e-6, abs=1e-9)
    assert 1 <= len(seen) < len(sizes)
    assert nearest["recovered"] == nearest["moves"][-1]["recovered"] >= 0.8
    assert (_losses(problem, values) <= own + 1e-9).all()  # no goal is worse than by hand
    assert nearest["moves"][-1]["misses"] == []
    assert (problem.judge(values).violations <= 1e-9).all()


def _heading(problem: Problem, name: str) -> str:
    unit = next(s.unit for s in problem.topology.sizes if s.name == name)
    return f"{name} [{unit}]" if unit else name


def test_the_nearest_is_the_one_whose_sizes_are_nearest_of_those_that_beat_it(cli: Cli, run_copy: Path) -> None:
    Path("hand.toml").write_text(POOR, encoding="utf-8")
    report = json.loads(cli("assess", "run/problem.toml", "hand.toml", "--against", "run", "--json").stdout)
    front, sizes = pd.read_csv("run/front.csv"), tomllib.loads(RESISTOR)["sizes"]
    problem = load_problem("run/problem.toml")
    beating = [d["design"] for d in report["dominated_by"]]
    best: dict[int, float] = {}
    for _, row in front[front["design"].isin(beating)].iterrows():
        total = 0.0
        for r in problem.space.ranges:
            ratio = row[_heading(problem, r.size.name)] / report["sizes"][r.size.name]
            total += (np.log(ratio) / np.log(r.high / r.low)) ** 2
        best[int(row["design"])] = float(np.sqrt(total))
    assert report["nearest"]["design"] == min(best, key=lambda d: best[d])
    assert report["nearest"]["distance"] == pytest.approx(min(best.values()))
    assert len(best) > 3
    assert len(sizes) > 3


def test_what_is_left_on_the_table_is_the_most_that_costs_nothing_else(cli: Cli, run_copy: Path) -> None:
    Path("hand.toml").write_text(POOR, encoding="utf-8")
    report = json.loads(cli("assess", "run/problem.toml", "hand.toml", "--against", "run", "--json").stdout)
    own, front = report["measures"], pd.read_csv("run/front.csv")
    as_good = front[
        (front["gain [dB]"] >= own["gain"])
        & (front["cmrr [dB]"] >= own["cmrr"])
        & (front["supply_current [A]"] <= own["supply_current"])
    ]
    left = report["left_on_the_table"]
    assert left["gain"] == pytest.approx(as_good["gain [dB]"].max() - own["gain"])
    assert left["supply_current"] == pytest.approx(own["supply_current"] - as_good["supply_current [A]"].min())


def test_no_fewer_changes_would_do(run_copy: Path) -> None:
    """All smaller sets of whole changes are tried here one by one."""
    from itertools import combinations

    run = load_run(run_copy)
    problem = run.problem
    Path(run_copy.parent / "hand.toml").write_text(POOR, encoding="utf-8")
    own = load_sizing(run_copy.parent / "hand.toml", problem)
    target = {s.name: run.front[_heading(problem, s.name)].to_numpy()[10:11] for s in problem.topology.sizes}
    a, b = problem.assess(own), problem.assess(target)
    gap = Gap(a.losses, b.losses, np.ones((3, 1)), np.ones(len(problem.limits), dtype=bool))
    moves = first_moves(problem, own, target, gap)
    assert gap.recovered(a.losses)[0] == 0.0
    assert gap.recovered(b.losses)[0] == pytest.approx(1.0)
    for count in range(1, len(moves)):
        for names in combinations(own, count):
            trial = {**own, **{name: target[name] for name in names}}
            assert not gap.closed(problem.assess(trial))[0]


def test_a_sizing_that_nothing_beats_says_so(cli: Cli, run_copy: Path) -> None:
    assert cli("choose", "run", "--save", "knee.toml").exit_code == 0
    shown = cli("assess", "run/problem.toml", "knee.toml", "--against", "run")
    assert "no design of run beats this sizing in its goals" in shown.stdout
    assert "first moves" not in shown.stdout
    report = json.loads(cli("assess", "run/problem.toml", "knee.toml", "--against", "run", "--json").stdout)
    assert (report["dominated_by"], report["nearest"]) == ([], None)
    assert report["left_on_the_table"] == {"gain": 0.0, "cmrr": 0.0, "supply_current": 0.0}


def test_a_sizing_that_nothing_beats_because_it_breaks_a_limit_says_that_too(cli: Cli, run_copy: Path) -> None:
    """More load than the bandwidth allows: more gain than any design of the front."""
    text = POOR.replace('"60 kohm"', '"700 kohm"').replace('"6 uA"', '"1.2 uA"').replace('"4 um"', '"100 um"')
    Path("hand.toml").write_text(text, encoding="utf-8")
    report = json.loads(cli("assess", "run/problem.toml", "hand.toml", "--against", "run", "--json").stdout)
    assert report["measures"]["gain"] > load_run("run").front["gain [dB]"].max()
    shown = cli("assess", "run/problem.toml", "hand.toml", "--against", "run").stdout
    assert "but it misses limits that all of them meet: " in shown
    assert "bandwidth" in shown.split("but it misses limits that all of them meet: ")[1]


def test_a_run_of_another_stage_gives_designs_but_no_moves(cli: Cli, mirror_run: Path) -> None:
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    Path("hand.toml").write_text(POOR, encoding="utf-8")
    result = cli("assess", "stage.toml", "hand.toml", "--against", str(mirror_run), "--json")
    assert result.exit_code == 0, result.stderr
    report = json.loads(result.stdout)
    assert report["dominated_by"]
    assert report["nearest"] is None
    assert "no moves to give" in cli("assess", "stage.toml", "hand.toml", "--against", str(mirror_run)).stdout


def test_limits_that_are_tighter_than_those_of_the_run_are_kept(cli: Cli, run_copy: Path) -> None:
    """The problem of the sizing decides: designs of the run that miss a limit that it meets are no targets."""
    tighter = RESISTOR.replace('area         = { max = "6000 um^2" }', 'area         = { max = "1500 um^2" }')
    Path("stage.toml").write_text(tighter, encoding="utf-8")
    Path("hand.toml").write_text(POOR, encoding="utf-8")
    report = json.loads(cli("assess", "stage.toml", "hand.toml", "--against", "run", "--json").stdout)
    nearest: Any = report["nearest"]
    front = load_run("run").front
    fitting = front[
        (front["area [m^2]"] <= 1500e-12) & front["design"].isin([d["design"] for d in report["dominated_by"]])
    ]
    if len(fitting):
        assert nearest["design"] in set(fitting["design"])
        assert nearest["moves"][-1]["measures"]["area"] <= 1500e-12
    else:
        assert nearest is None


def test_distances_count_ratios_alike_in_either_direction(run_copy: Path) -> None:
    run = load_run(run_copy)
    sizes = {s.name: run.front[_heading(run.problem, s.name)].to_numpy()[:1] for s in run.problem.topology.sizes}
    double = {**sizes, "input.width": sizes["input.width"] * 2.0}
    half = {**sizes, "input.width": sizes["input.width"] / 2.0}
    assert size_distances(run.problem, sizes, sizes)[0] == 0.0
    assert size_distances(run.problem, sizes, double)[0] == pytest.approx(np.log(2.0) / np.log(200.0))
    assert size_distances(run.problem, sizes, half)[0] == size_distances(run.problem, sizes, double)[0]
