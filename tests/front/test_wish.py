"""One design of a front for a wish: against brute force, on a run and on fronts that are made for it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import optisize
from optisize.errors import InputError
from optisize.front.run import Run, load_run
from optisize.problem.load import load_problem, load_sizing
from optisize.quantities import read
from tests.conftest import Cli
from tests.problem.test_bad_input import refused

GOALS = {"gain [dB]": -1.0, "cmrr [dB]": -1.0, "supply_current [A]": 1.0}


@pytest.fixture
def run(run_copy: Path) -> Run:
    return load_run(run_copy)


def _losses(front: pd.DataFrame) -> pd.DataFrame:
    """Return the goals in ranges of the front, 0 best: decibels as they are, the current by its logarithm."""
    raw = pd.DataFrame(
        {
            "gain": -front["gain [dB]"],
            "cmrr": -front["cmrr [dB]"],
            "supply_current": np.log10(front["supply_current [A]"]),
        }
    )
    return (raw - raw.min()) / (raw.max() - raw.min())


@pytest.mark.parametrize(
    ("asked", "heading", "ascending", "met"),
    [
        ({"least": "supply_current", "where": ["gain>=14 dB"]}, "supply_current [A]", True, "`gain [dB]` >= 14"),
        ({"most": "gain", "where": ["supply_current<=5 uA"]}, "gain [dB]", False, "`supply_current [A]` <= 5e-6"),
        ({"least": "area"}, "area [m^2]", True, "design > 0"),
        ({"most": "input.length", "where": ["cmrr>50 dB", "gain<20 dB"]}, "input.length [m]", False,
         "`cmrr [dB]` > 50 and `gain [dB]` < 20"),
        ({"least": "common_mode_gain"}, "size", True, "design > 0"),
    ],
)  # fmt: skip
def test_least_and_most_are_those_of_brute_force(
    run: Run, asked: dict[str, Any], heading: str, ascending: bool, met: str
) -> None:
    front = run.front.assign(size=run.front["common_mode_gain [V/V]"].abs())
    expected = front.query(met).sort_values(heading, ascending=ascending)[heading].iloc[0]
    choice = run.choose(**asked)
    assert choice.met
    assert front[front["design"] == choice.design][heading].iloc[0] == expected
    assert str(len(front.query(met))) in choice.why or "all" in choice.why


def test_the_knee_is_the_smallest_sum_of_the_goals_in_ranges_of_the_front(run: Run) -> None:
    at = int(_losses(run.front).sum(axis=1).to_numpy().argmin())
    choice = run.choose()
    assert (choice.rule, choice.position) == ("knee", at)
    assert run.choose(knee=True).design == choice.design


@pytest.mark.parametrize("gain", [20.0, 25.0, 60.0])
@pytest.mark.parametrize("current", [0.5e-6, 1e-6, 1.5e-6, 3e-6])
def test_conditions_that_none_meets_give_the_nearest_and_what_is_missing(run: Run, gain: float, current: float) -> None:
    """The largest miss is smallest, decibels as they are and currents by their ratios, in ranges of the front."""
    choice = run.choose(where=[f"gain>={gain} dB", f"supply_current<={current * 1e6} uA"], least="area")
    gains, currents = run.front["gain [dB]"].to_numpy(), run.front["supply_current [A]"].to_numpy()
    assert not ((gains >= gain) & (currents <= current)).any()
    miss = np.maximum((gain - gains) / np.ptp(gains), np.log(currents / current) / np.ptp(np.log(currents)))
    assert miss[choice.position] == pytest.approx(miss.min())
    assert not choice.met
    by = {m.name: m.by for m in choice.missing}
    if "gain" in by:
        assert by["gain"] == pytest.approx(gain - choice.row["gain [dB]"])
    if "supply_current" in by:
        assert by["supply_current"] == pytest.approx(choice.row["supply_current [A]"] - current)
    assert set(by) == {m.asked.replace("<", ">").split(">")[0] for m in choice.missing} != set()


@pytest.mark.parametrize("gain", [10.0, 14.0, 17.0, 25.0, 40.0])
@pytest.mark.parametrize("current", [1e-6, 4e-6, 8e-6, 2e-5])
def test_wishes_for_two_goals_are_answered_as_by_brute_force(run: Run, gain: float, current: float) -> None:
    """Met: the best in the goal without a wish. Not met: the largest miss in ranges of the front is smallest."""
    choice = run.choose(wishes={"gain": f"{gain} dB", "supply_current": current})
    front = run.front
    meeting = front[(front["gain [dB]"] >= gain) & (front["supply_current [A]"] <= current)]
    spans = [np.ptp(front["gain [dB]"]), np.ptp(np.log10(front["supply_current [A]"]))]
    misses = [(gain - front["gain [dB]"]) / spans[0], np.log10(front["supply_current [A]"] / current) / spans[1]]
    assert choice.met == (len(meeting) > 0)
    if choice.met:
        assert choice.row["cmrr [dB]"] == meeting["cmrr [dB]"].max()
    else:
        assert np.maximum(*misses)[choice.position] == pytest.approx(np.maximum(*misses).min())


def test_wishes_for_all_goals_that_are_met_are_exceeded_most_evenly(run: Run) -> None:
    middle = {name: float(run.front[name].median()) for name in GOALS}
    wished = {"gain": middle["gain [dB]"] - 3.0, "cmrr": middle["cmrr [dB]"] - 5.0}
    wished["supply_current"] = middle["supply_current [A]"] * 1.5
    choice = run.choose(wishes=wished)
    losses = _losses(run.front)
    raw = run.front[list(GOALS)].set_axis(["gain", "cmrr", "supply_current"], axis=1)
    bound = pd.concat([raw, pd.DataFrame([wished])], ignore_index=True)
    bound["supply_current"] = np.log10(bound["supply_current"])
    spans = bound[:-1].max() - bound[:-1].min()
    over = (bound[:-1] - bound.iloc[-1]) / spans * pd.Series({"gain": 1.0, "cmrr": 1.0, "supply_current": -1.0})
    assert choice.met
    assert over.min(axis=1)[choice.position] == pytest.approx(over.min(axis=1).max())
    assert len(losses) == len(over)


def test_neighbours_lie_a_step_away_on_their_side_and_none_there_is_nearer(run: Run) -> None:
    choice = run.choose()
    losses = _losses(run.front).to_numpy()
    away = losses - losses[choice.position]
    far = np.sqrt((away**2).sum(axis=1))
    names = ["gain", "cmrr", "supply_current"]
    assert len(choice.neighbours) >= 5
    for n in choice.neighbours:
        along = away[:, names.index(n.axis)] * (-1.0 if n.better else 1.0)
        beyond = along >= 0.05
        if beyond.any():
            assert beyond[n.position]
            assert far[n.position] == far[beyond].min()
        else:
            assert along[n.position] == along.max() > 0.0
        for heading, name in zip(GOALS, names, strict=True):
            change = run.front[heading].iloc[n.position] - run.front[heading].iloc[choice.position]
            assert n.changes[name] == pytest.approx(change)


def test_the_steps_say_in_words_what_the_neighbours_give_and_cost(run: Run) -> None:
    best = run.front.loc[run.front["gain [dB]"].idxmax()]
    choice = run.choose(most="gain")
    assert choice.design == best["design"]
    assert choice.steps[0] == "No design of the front has more gain."
    assert choice.steps[1].startswith("Towards less gain, design ")
    assert " less gain" in choice.steps[1].split(" for ")[1]
    bounded = run.choose(least="supply_current", where=["gain>=15 dB"])
    assert any("misses gain>=15 dB" in step for step in bounded.steps)


def test_a_short_list_is_spread_and_holds_the_extremes(run: Run, cli: Cli) -> None:
    front = run.front
    few = run.short_list(8)
    assert len(few) == 8
    for heading, sign in GOALS.items():
        assert (few[heading] * sign).min() == (front[heading] * sign).min()
    losses = _losses(front).to_numpy()

    def gap(rows: Any) -> float:
        apart = np.linalg.norm(losses[:, None] - losses[rows][None], axis=2)
        return float(apart.min(axis=1).max())

    rng = np.random.default_rng(1)
    chance = [gap(rng.choice(len(front), 8, replace=False)) for _ in range(200)]
    assert gap(few.index.to_numpy()) <= np.quantile(chance, 0.05)
    assert list(run.short_list(8)["design"]) == list(few["design"])
    bounded = run.short_list(4, where=["gain>=14 dB"])
    assert (bounded["gain [dB]"] >= 14.0).all()
    assert len(run.short_list(10_000)) == len(front)
    shown = json.loads(cli("choose", "run", "--short", "8", "--json").stdout)
    assert [d["design"] for d in shown] == list(few["design"])
    assert {"best gain", "best cmrr", "best supply_current"} <= {m for d in shown for m in d["mark"].split(", ")}
    assert cli("choose", "run", "--short", "4").stdout.count("best ") >= 3


@pytest.mark.parametrize("design", range(1, 41, 3))
def test_a_saved_design_reads_back_to_exactly_the_same(run: Run, tmp_path: Path, design: int) -> None:
    at = min(design, len(run.front))
    choice = run.choose(where=[f"design={at}"])
    assert choice.design == at
    path = choice.save(tmp_path / f"{at}.toml")
    with pytest.raises(InputError, match="already exists"):
        choice.save(path)
    again = load_sizing(path, run.problem)
    assert {name: float(v[0]) for name, v in again.items()} == choice.sizes
    values = run.problem.measure(again)
    assert float(values["gain"][0]) == pytest.approx(choice.row["gain [dB]"], rel=1e-12)


def test_the_sizing_file_is_what_other_commands_read(cli: Cli, run_copy: Path) -> None:
    result = cli("choose", "run", "--save", "knee.toml", "--json")
    assert result.exit_code == 0, result.stderr
    report = json.loads(result.stdout)
    assert report["saved"] == "knee.toml"
    assessed = json.loads(cli("assess", "run/problem.toml", "knee.toml", "--against", "run", "--json").stdout)
    assert assessed["sizes"] == report["sizes"]
    assert assessed["measures"]["gain"] == pytest.approx(report["measures"]["gain"], rel=1e-12)
    assert assessed["dominated_by"] == []
    assert assessed["nearest"] is None
    deck = cli("deck", "run", "--sizing", "knee.toml")
    other = cli("deck", "run", "--design", str(report["design"]))
    assert deck.exit_code == other.exit_code == 0
    assert deck.stdout.splitlines()[2:] == other.stdout.splitlines()[2:]
    words = ("--to", "again", "--no-figures", "--quiet", "--population", "8", "--generations", "1")
    assert cli("search", "run/problem.toml", "--from", "knee.toml", *words).exit_code == 0


def test_a_file_that_is_there_is_not_overwritten_and_a_place_that_is_not_is_made(cli: Cli, run_copy: Path) -> None:
    Path("there.toml").write_text("mine", encoding="utf-8")
    refused(cli, "there.toml: already exists", words=("choose", "run", "--save", "there.toml"))
    assert Path("there.toml").read_text(encoding="utf-8") == "mine"
    assert cli("choose", "run", "--save", "new/place.toml").exit_code == 0
    assert Path("new/place.toml").is_file()
    result = cli("choose", "run", "--save", "there.toml/x.toml")
    assert result.exit_code == 1
    assert "there.toml/x.toml: cannot be written" in result.stderr


def test_what_nothing_meets_is_exit_code_3_with_the_nearest_design_and_what_is_missing(
    cli: Cli, run_copy: Path
) -> None:
    for words in (("--wish", "gain=90 dB"), ("--where", "gain>=90 dB"), ("--short", "3", "--where", "gain>=90 dB")):
        result = cli("choose", "run", *words)
        assert result.exit_code == 3
        assert "gain>=90 dB is missed by" in result.stdout
        assert "as drawn on the process grid" in result.stdout
        assert result.stderr.startswith("optisize: no design of run meets all that was asked; design ")
        assert result.stderr.count("\n") == 1
    report = json.loads(cli("choose", "run", "--wish", "gain=90 dB", "--json").stdout)
    front = load_run("run").front
    assert report["met"] is False
    assert report["design"] == front.loc[front["gain [dB]"].idxmax(), "design"]
    assert report["missing"][0]["by"] == pytest.approx(90.0 - front["gain [dB]"].max())


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (("--least", "gian"), ['"gian"', 'mean "gain"?']),
        (("--most", "design"), ["--most", '"design"']),
        (("--least", "gain", "--most", "gain"), ["--least and --most"]),
        (("--knee", "--wish", "gain=1 dB"), ["--wish and --knee"]),
        (("--short", "3", "--knee"), ["--short and --knee"]),
        (("--short", "3", "--save", "x.toml"), ["--short and --save"]),
        (("--wish", "gain"), ["--wish", '"gain"', "gain=50 dB"]),
        (("--wish", "gain>=50 dB"), ["--wish", "gain=50 dB"]),
        (("--wish", "gain=50 V"), ["--wish", '"dB"']),
        (("--wish", "gain=1 dB", "--wish", "gain=2 dB"), ["--wish", "gain is wished twice"]),
        (("--wish", "input.width=3 um"), ["--wish", "is a size", "--where"]),
        (("--wish", "gian=3 dB"), ["--wish", 'mean "gain"?']),
        (("--wish", "\x1b[31m=3 dB"), ["--wish"]),
        (("--where", "gain"), ["--where"]),
        (("--least", "simulated gain"), ['"simulated gain" is no column']),
    ],
)
def test_a_question_that_makes_no_sense_is_refused(
    cli: Cli, run_copy: Path, words: tuple[str, ...], expected: list[str]
) -> None:
    refused(cli, *expected, words=("choose", "run", *words))


def test_simulated_columns_can_be_asked_for(run: Run) -> None:
    front = run.front
    simulated = np.where(front["design"] % 2 == 0, front["gain [dB]"] - 0.5, np.nan)
    run.front = front.assign(**{"simulated gain [dB]": simulated})
    assert run.choose(most="simulated gain").row["simulated gain [dB]"] == np.nanmax(simulated)
    bounded = run.choose(least="supply_current", where=["simulated gain>=14 dB"])
    assert bounded.row["simulated gain [dB]"] >= 14.0
    assert run.choose(wishes={"simulated gain": "14 dB"}).row["simulated gain [dB]"] >= 14.0
    missed = run.choose(where=["simulated gain>=90 dB"])
    assert missed.row["simulated gain [dB]"] == np.nanmax(simulated)


def test_an_empty_front_is_said(run: Run) -> None:
    run.front = run.front[:0]
    with pytest.raises(InputError, match="its front is empty"):
        run.choose()
    assert "0 designs" in run._repr_html_()


def test_a_front_of_one_design_is_its_own_answer(run: Run) -> None:
    run.front = run.front[:1].reset_index(drop=True)
    choice = run.choose()
    assert (choice.design, choice.neighbours) == (1, ())
    assert list(run.short_list(3)["design"]) == [1]


def test_the_lines_of_python_work(tmp_path: Path, finished_run: Path) -> None:
    problem = optisize.load(finished_run / "problem.toml")
    run = optisize.load_run(finished_run)
    assert isinstance(run.front, pd.DataFrame)
    choice = run.choose(least="supply_current", where=["gain>=14 dB"])
    assert choice.design in set(run.front["design"])
    assert run.save(tmp_path / "again").is_dir()
    assert problem.title in run._repr_html_()
    assert str(choice.design) in str(choice)


def test_drawn_sizes_are_those_of_the_sizing(cli: Cli, run_copy: Path) -> None:
    report = json.loads(cli("choose", "run", "--json").stdout)
    drawn = {d["devices"]: d for d in report["drawn"]}
    sizes = report["sizes"]
    pair, tail = drawn["input.p, input.n"], drawn["tail"]
    assert pair["fingers"] * pair["finger_width"] == pytest.approx(sizes["input.width"])
    assert tail["units"] == sizes["tail.units"]
    assert tail["units"] * tail["fingers"] * tail["finger_width"] == pytest.approx(tail["total"])
    assert drawn["load.p, load.n"]["total"] == sizes["load.resistance"]
    assert drawn["bias.current"]["total"] == sizes["bias.current"]
    assert {p["transistor"] for p in report["operating_point"]} == {"input.p", "input.n", "tail", "bias"}
    for goal in report["goals"]:
        low, high = sorted([goal["worst"], goal["best"]])
        assert low <= goal["value"] <= high
        assert 0.0 <= goal["place"] <= 1.0
    text = cli("choose", "run").stdout
    fingers = f"{pair['fingers']} fingers of"
    assert fingers in text
    assert "squares" in text
    assert "not a sign-off" in text


def test_a_problem_that_is_read_with_a_sizing_needs_no_run(cli: Cli, run_copy: Path) -> None:
    cli("choose", "run", "--save", "knee.toml")
    problem = load_problem("run/problem.toml")
    sizing = load_sizing("knee.toml", problem)
    text = Path("knee.toml").read_text(encoding="utf-8")
    for size in problem.topology.sizes:
        line = next(x for x in text.splitlines() if x.startswith(f"{size.name} "))
        assert read(line.partition("=")[2].strip().strip('"'), size.unit) == pytest.approx(
            sizing[size.name][0], rel=1e-12
        )
