"""Measures of a problem's own through a run: columns, reading back, choosing, and a manual sizing beside the front."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest
from typer.testing import Result

from optisize.front.explore import resume
from optisize.front.run import load_run
from optisize.front.table import measure_names, sizes_of, values_of
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import RESISTOR, SIZING, changed

pytestmark = pytest.mark.usefixtures("humming")

OWN = """\
[measures]
hum      = { frequency = "10 Hz" }
wideband = { of = "hum", frequency = "100 kHz" }
aside    = { of = "unlikeness", sigmas = 2 }

"""
PROBLEM = changed(
    RESISTOR,
    ("[goals]", f"{OWN}[goals]"),
    ("cmrr", 'wideband = "min"'),
    ("power", 'hum = { max = "500 nV/√Hz" }'),
    ("generations", "generations = 21"),
)


@pytest.fixture
def run(cli: Cli) -> Path:
    """A run of that problem in the test's own directory."""
    Path("stage.toml").write_text(PROBLEM, encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "run", "--no-figures", "--quiet")
    assert result.exit_code == 0, result.stderr
    return Path("run")


def _wideband(result: Result) -> list[float]:
    """Return one column of a front that was printed as CSV."""
    assert result.exit_code == 0, result.stderr
    return [float(row["wideband [V/Hz^0.5]"]) for row in csv.DictReader(result.stdout.splitlines())]


def test_a_front_has_a_column_for_every_measure_of_the_problem(run: Path) -> None:
    heading = (run / "front.csv").read_text(encoding="utf-8").splitlines()[0].split(",")
    for name in ("wideband [V/Hz^0.5]", "hum [V/Hz^0.5]", "aside [V/V]", "hum_total [V]", "unlikeness [V/V]"):
        assert heading.count(name) == 1
    assert heading.index("wideband [V/Hz^0.5]") < heading.index("hum [V/Hz^0.5]") < heading.index("aside [V/V]")


def test_a_run_is_read_back_with_its_settings(run: Path) -> None:
    loaded = load_run(run)
    names = measure_names(loaded.problem)
    assert len(names) == len(set(names)) == len(CATALOGUE) + 2
    again = loaded.problem.measure(sizes_of(loaded.problem, loaded.front), names)
    for name, values in values_of(loaded.problem, loaded.front).items():
        np.testing.assert_allclose(values, again[name], rtol=1e-7, err_msg=name)
    np.testing.assert_allclose(again["hum"] / again["wideband"], np.sqrt(101.0 / 1.01), rtol=1e-9)
    assert again["hum"].max() <= 500e-9 * (1 + 1e-9)
    more = resume(loaded)
    assert "wideband [V/Hz^0.5]" in more.front


def test_an_own_measure_is_sorted_and_chosen_by(cli: Cli, run: Path) -> None:
    values = _wideband(cli("front", "run", "--csv", "--sort", "wideband"))
    assert values == sorted(values)
    assert len(values) > 5
    middle = float(np.median(values))
    for unit in ("V/√Hz", "V/Hz^0.5", "V/sqrt(Hz)"):
        chosen = _wideband(cli("front", "run", "--csv", "--where", f"wideband<={middle!r} {unit}"))
        assert sorted(chosen) == [v for v in values if v <= middle * (1 + 1e-9)]
    refused(cli, "--where", '"20 nV/√Hz"', words=("front", "run", "--where", "wideband<=20 nV"))
    refused(cli, '"widband"', '"wideband"?', words=("front", "run", "--sort", "widband"))


def test_a_front_shows_what_the_problem_names_and_in_units_of_noise(cli: Cli, run: Path) -> None:
    lines = cli("front", "run").stdout.splitlines()
    heading = lines[1].split()
    assert heading[:4] == ["design", "gain", "wideband", "supply_current"]
    assert heading[-1] == "aside"  # neither goal nor limit
    assert {"hum"} < set(heading)
    assert "hum_total" not in heading
    assert "V/√Hz" in lines[2]
    rows = json.loads(cli("front", "run", "--json").stdout)
    assert all(row["wideband [V/Hz^0.5]"] < row["hum [V/Hz^0.5]"] for row in rows)


def test_a_front_without_a_column_that_is_neither_goal_nor_limit_is_shown(cli: Cli, run: Path) -> None:
    (run / "front.csv").write_text(_without_column(run / "front.csv", "aside [V/V]"), encoding="utf-8")
    assert "aside" not in cli("front", "run").stdout.splitlines()[1]
    (run / "front.csv").write_text(_without_column(run / "front.csv", "wideband [V/Hz^0.5]"), encoding="utf-8")
    refused(cli, "damaged", "wideband [V/Hz^0.5]", words=("front", "run"))


def _without_column(path: Path, name: str) -> str:
    rows = [line.split(",") for line in path.read_text(encoding="utf-8").splitlines()]
    place = rows[0].index(name)
    return "\n".join(",".join(row[:place] + row[place + 1 :]) for row in rows) + "\n"


def test_a_sizing_is_assessed_in_the_measures_of_the_problem(cli: Cli, run: Path) -> None:
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    report = json.loads(cli("assess", "stage.toml", "hand.toml", "--against", "run", "--json").stdout)
    own = report["measures"]
    assert own["hum"] / own["wideband"] == pytest.approx(np.sqrt(101.0 / 1.01))
    assert [x["bound"] for x in report["limits"] if x["name"] == "hum"] == [5e-7]
    assert all(set(d["better_by"]) == {"gain", "wideband", "supply_current"} for d in report["dominated_by"])
    shown = cli("assess", "stage.toml", "hand.toml", "--against", "run").stdout
    for words in ("wideband (hum at 100 kHz)", "hum (at 10 Hz)", "aside (unlikeness sigmas = 2, at 1 MHz)", "nV/√Hz"):
        assert shown.count(words) >= 1, words
    assert "hum (at 1 kHz)" not in shown


@pytest.mark.parametrize("edit", ['{ of = "hum", frequency = "1 kHz" }', '{ of = "hum_total" }'])
def test_a_run_whose_goal_has_the_name_only_is_one_for_other_goals(cli: Cli, run: Path, edit: str) -> None:
    Path("hand.toml").write_text(SIZING, encoding="utf-8")
    words = ("assess", "stage.toml", "hand.toml", "--against", "run")
    Path("stage.toml").write_text(changed(PROBLEM, ("wideband", f"wideband = {edit}")), encoding="utf-8")
    refused(cli, "run: ", "other goals", words=words)
    same = changed(PROBLEM, ("wideband", 'wideband = { frequency = "0.1 MHz", of = "hum" }'), ("aside", ""))
    Path("stage.toml").write_text(same, encoding="utf-8")
    assert cli(*words).exit_code == 0


def test_nothing_feasible_says_so_in_units_of_noise(cli: Cli) -> None:
    text = changed(RESISTOR, ("[goals]", f"{OWN}[goals]"), ("power", 'wideband = { max = "1 fV/√Hz" }'))
    Path("stage.toml").write_text(text, encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "run", "--generations", "9", "--quiet")
    assert result.exit_code == 3
    assert "wideband: max 1 fV/√Hz wanted, nearest design has" in result.stderr
