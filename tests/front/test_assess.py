"""A manual sizing beside a front."""

from __future__ import annotations

import json
import math
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from optisize.front.compare import dominating
from optisize.front.run import load_run
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import IDEAL, RESISTOR, SIZING, changed

POOR = """\
[sizes]
input.width     = "4 um"
input.length    = "2 um"
load.resistance = "60 kohm"
tail.width      = "20 um"
tail.length     = "0.18 um"
tail.units      = 2
bias.current    = "6 uA"
"""


@pytest.fixture
def assess(cli: Cli, run_copy: Path) -> Any:
    def call(sizing: str, *words: str, problem: str = RESISTOR) -> Any:
        Path("stage.toml").write_text(problem, encoding="utf-8")
        Path("hand.toml").write_text(sizing, encoding="utf-8")
        result = cli("assess", "stage.toml", "hand.toml", "--json", *words)
        assert result.exit_code == 0, result.stderr
        return json.loads(result.stdout)

    return call


def test_the_designs_that_beat_a_poor_sizing_are_those_that_brute_force_finds(assess: Any, run_copy: Path) -> None:
    report = assess(POOR, "--against", "run")
    own = report["measures"]
    front = pd.read_csv(run_copy / "front.csv")
    expected = set()
    for _, row in front.iterrows():
        gains = (
            row["gain [dB]"] - own["gain"],
            row["cmrr [dB]"] - own["cmrr"],
            own["supply_current"] - row["supply_current [A]"],
        )
        if min(gains) >= 0 and max(gains) > 0:
            expected.add(row["design"])
    assert len(expected) >= 3
    assert {d["design"] for d in report["dominated_by"]} == expected
    for better in report["dominated_by"]:
        row = front[front["design"] == better["design"]].iloc[0]
        assert better["better_by"]["gain"] == pytest.approx(row["gain [dB]"] - own["gain"], abs=1e-9)
        assert better["better_by"]["supply_current"] == pytest.approx(
            own["supply_current"] - row["supply_current [A]"], rel=1e-6
        )
    assert report["against"] == "run"


def test_measures_are_si_values_by_name_and_each_bound_is_a_limit(assess: Any) -> None:
    report = assess(SIZING)
    own = report["measures"]
    assert own["supply_current"] == pytest.approx(6e-6, rel=0.05)  # one bias unit of 2 uA, two in the tail
    assert own["power"] == pytest.approx(1.8 * own["supply_current"], rel=1e-9)
    assert own["input.p.id"] == pytest.approx(own["tail.id"] / 2, rel=1e-6)
    assert report["sizes"]["input.width"] == pytest.approx(20e-6, rel=1e-12)
    assert {x["name"]: (x["kind"], x["bound"]) for x in report["limits"]} == {
        "power": ("max", 60e-6),
        "output_swing": ("min", 0.6),
        "headroom": ("min", 0.05),
        "area": ("max", pytest.approx(6000e-12, rel=1e-12)),
        "bandwidth": ("min", 1e6),
    }
    for x in report["limits"]:
        assert x["value"] == own[x["name"]]
        assert x["met"] == (x["value"] <= x["bound"] if x["kind"] == "max" else x["value"] >= x["bound"])
    assert report["feasible"] == all(x["met"] for x in report["limits"])
    assert report["dominated_by"] is None
    assert report["against"] is None


def test_a_range_of_bounds_is_two_limits(assess: Any) -> None:
    text = changed(RESISTOR, ("bandwidth", 'gain = { min = "80 dB", max = "90 dB" }'))
    rows = [x for x in assess(SIZING, problem=text)["limits"] if x["name"] == "gain"]
    assert [(x["kind"], x["met"]) for x in rows] == [("min", False), ("max", True)]


def test_a_design_of_the_front_is_beaten_by_none_of_it(assess: Any, run_copy: Path) -> None:
    row = pd.read_csv(run_copy / "front.csv").iloc[4]
    names = ("input.width [m]", "input.length [m]", "load.resistance [ohm]", "tail.width [m]", "tail.length [m]")
    sizes = {n.split(" ")[0]: float(row[n]) for n in names}
    sizes |= {"tail.units": int(row["tail.units"]), "bias.current": float(row["bias.current [A]"])}
    text = "[sizes]\n" + "\n".join(f"{name} = {value!r}" for name, value in sizes.items())
    report = assess(text, "--against", "run")
    assert report["dominated_by"] == []
    assert report["feasible"] is True
    assert report["measures"]["gain"] == pytest.approx(row["gain [dB]"], rel=1e-9)


def test_an_unlimited_measure_is_a_word_in_json(assess: Any) -> None:
    sizing = SIZING[: SIZING.index("tail.width")] + 'tail.current = "4 uA"\n'
    report = assess(sizing, problem=changed(IDEAL, ("cmrr", "")))
    assert report["measures"]["cmrr"] == "unlimited"
    assert report["measures"]["common_mode_gain"] == 0.0
    assert math.isfinite(report["measures"]["gain"])


def test_the_newest_run_of_the_same_problem_is_taken(cli: Cli, assess: Any, run_copy: Path) -> None:
    shutil.copytree(run_copy, "results/a-run")
    (Path("results") / "junk").mkdir()
    (Path("results") / "junk" / "run.json").write_text("[]", encoding="utf-8")
    assert assess(POOR)["against"] == "results/a-run"
    assert assess(POOR, problem=RESISTOR + "# another file\n")["against"] is None
    Path("stage.toml").write_text(RESISTOR, encoding="utf-8")
    shown = cli("assess", "stage.toml", "hand.toml")
    assert shown.exit_code == 0
    for words in ("designs of results/a-run beat this sizing", "supply_current", "input.p", "better by"):
        assert words in shown.stdout


def test_a_run_for_other_goals_is_refused(cli: Cli, run_copy: Path) -> None:
    Path("stage.toml").write_text(changed(RESISTOR, ("cmrr", "")), encoding="utf-8")
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    refused(cli, "run: ", "other goals", words=("assess", "stage.toml", "hand.toml", "--against", "run"))
    refused(cli, "no such run", words=("assess", "stage.toml", "hand.toml", "--against", "rum"))


def test_a_design_beats_a_sizing_when_it_is_as_good_in_all_goals_and_better_in_one(run_copy: Path) -> None:
    run = load_run(run_copy)
    own = {"gain": np.array([20.0]), "cmrr": np.array([50.0]), "supply_current": np.array([1e-5])}
    rows = {1: (20.0, 50.0, 1e-5), 2: (20.0, 50.0, 0.9e-5), 3: (21.0, 49.9, 1e-6), 4: (22.0, 51.0, 0.5e-5)}
    front = pd.DataFrame(
        [(number, *values) for number, values in rows.items()],
        columns=["design", "gain [dB]", "cmrr [dB]", "supply_current [A]"],
    )
    better = dominating(run.problem, own, front)
    assert [b.design for b in better] == [4, 2]  # the furthest ahead first
    assert better[1].gains == {"gain": 0.0, "cmrr": 0.0, "supply_current": pytest.approx(1e-6)}
