"""Fronts beside each other, as printed and drawn: one truth in words, JSON and figure, and nothing hostile in it."""

from __future__ import annotations

import json
import math
import shutil
from itertools import combinations
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.front.explore import search, settings_of
from optisize.front.fronts import Fronts, compare, load_fronts
from optisize.front.leads import SAME, Band, levels_of
from optisize.problem.evaluate import Goal
from optisize.problem.load import load_problem
from optisize.show.comparison import bands_in_words, comparison_record, print_comparison
from optisize.show.overlay import MARKS, pictures, stairs
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.front.lines import run_of
from tests.problem.texts import RESISTOR, changed, loaded
from tests.show.test_plots import MAGIC
from tests.show.test_terminal import HOSTILE

PROBLEMS = Path(__file__).parents[2] / "problems"
SHIPPED = (
    "electrode-front-end",
    "fast-comparator-stage",
    "hydrophone-recorder",
    "low-supply-telescopic",
    "thermopile-preamplifier",
)


@pytest.fixture(scope="module")
def low_run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run with a p-channel pair on 1.2 V, searched once; not to be changed."""
    place = tmp_path_factory.mktemp("low")
    text = changed(RESISTOR, ('"nmos"', '"pmos"'), ("supply", 'supply = "1.2 V"'))
    text = changed(text, ("common_mode", 'common_mode = "0.4 V"'), ("output_swing", 'output_swing = { min = "0.3 V" }'))
    (place / "low.toml").write_text(text, encoding="utf-8")
    return search(load_problem(place / "low.toml")).save(place / "low")


@pytest.fixture
def two_runs(cli: Cli, run_copy: Path, low_run: Path) -> tuple[str, str]:
    """Two runs in the test's own directory: with an n-channel pair, and with a p-channel one on 1.2 V."""
    shutil.copytree(low_run, "low")
    run_copy.rename("high")
    return "high", "low"


@pytest.fixture(scope="module")
def shipped() -> Fronts:
    """Small runs of the shipped problems, which share gain and supply current."""
    runs = []
    for name in SHIPPED:
        problem = load_problem(PROBLEMS / f"{name}.toml")
        runs.append(search(problem, settings=settings_of(problem, population=60, generations=31)))
    return compare(SHIPPED, runs)


def test_what_is_printed_is_what_json_says(cli: Cli, two_runs: tuple[str, str]) -> None:
    shown = cli("compare", *two_runs)
    assert (shown.exit_code, shown.stderr) == (0, "")
    record = json.loads(cli("compare", *two_runs, "--json").stdout)
    assert [r["name"] for r in record["runs"]] == ["high", "low"]
    for r in record["runs"]:
        about, reached = (line for line in shown.stdout.splitlines()[:9] if line.startswith(f"{r['name']} "))
        assert f"{r['title']} {r['stage']}" in " ".join(about.split())
        counts = f"{len(r['on_joint_front'])} of {r['designs']}"
        assert reached.split()[1:] == [f"{r['hypervolume']:.4f}", f"{r['alone']:.4f}", *counts.split(), str(1640)]
    assert record["differences"]["supply"] == {"high": "1.8 V", "low": "1.2 V"}
    assert "common_mode" in record["differences"]
    assert "supply" in shown.stdout
    assert [*record["levels"]] == [*record["goals"]] == ["gain", "cmrr", "supply_current"]
    assert shown.stdout.count("\nahead: ") == 6
    assert shown.stdout.count(" together, by hypervolume") == 3
    assert shown.stdout.splitlines()[-1].startswith("A starting point")


def test_the_best_of_each_run_is_that_of_a_plain_reading_of_its_csv(cli: Cli, two_runs: tuple[str, str]) -> None:
    record = json.loads(cli("compare", *two_runs, "--json").stdout)["levels"]["supply_current"]
    assert record["levels"][-1] is None
    for name in two_runs:
        front = pd.read_csv(Path(name) / "front.csv")
        for at, best in zip(record["levels"], record["best"]["gain"][name], strict=True):
            reached = front["gain [dB]"][front["supply_current [A]"] <= (math.inf if at is None else at)]
            assert best == (pytest.approx(reached.max(), abs=1e-7) if len(reached) else None)


def test_designs_on_the_joint_front_are_beaten_by_none_of_the_others(two_runs: tuple[str, str]) -> None:
    fronts = load_fronts([Path(name) for name in two_runs])
    record = comparison_record(fronts, levels_of(fronts))
    signs = np.array([-1.0, -1.0, 1.0])
    names = ["gain [dB]", "cmrr [dB]", "supply_current [A]"]
    values = [entry.run.front[names].to_numpy() * signs for entry in fronts.entries]
    for own, other, entry in ((values[0], values[1], record["runs"][0]), (values[1], values[0], record["runs"][1])):
        beaten = [bool(((other <= d).all(axis=1) & (other < d).any(axis=1)).any()) for d in own]
        assert entry["on_joint_front"] == [i for i, b in enumerate(beaten, start=1) if not b]


def test_small_runs_of_the_shipped_problems_are_compared_in_what_they_share(shipped: Fronts) -> None:
    assert [g.measure.name for g in shipped.goals] == ["gain", "supply_current"]
    assert set(shipped.left_out) == {"headroom", "cmrr", "noise_low", "unity_gain_frequency"}
    assert ((shipped.hypervolumes > 0.0) & (shipped.hypervolumes <= shipped.hypervolume)).all()
    assert shipped.hypervolume <= 1.0
    assert sum(joint.sum() for joint in shipped.joint) > 0
    for level in levels_of(shipped):
        for bands in level.bands.values():
            losses = level.goal.loss(np.array([b.start for b in bands]))
            assert (np.diff(losses) > 0.0).all()
            assert [b.end for b in bands] == [*(b.start for b in bands[1:]), None]
        for name, best in level.best.items():
            of = next(g for g in shipped.goals if g.measure.name == name)
            assert (np.diff(np.nan_to_num(of.loss(best), nan=1e3), axis=1) <= 1e-9).all()  # looser is never worse


def test_the_pictures_hold_every_design_once_and_stairs_that_none_is_beyond(shipped: Fronts) -> None:
    (picture,) = pictures(shipped)
    assert picture.x.label == "supply current [uA]"
    assert picture.y.label == "gain [dB]"
    assert [layer.name for layer in picture.layers] == [*SHIPPED]
    for layer, entry, joint in zip(picture.layers, shipped.entries, shipped.joint, strict=True):
        np.testing.assert_allclose(layer.x * 1e-6, entry.run.front["supply_current [A]"], rtol=1e-12)
        np.testing.assert_array_equal(layer.y, entry.run.front["gain [dB]"])
        np.testing.assert_array_equal(layer.joint, joint)


@pytest.mark.parametrize(("better_x", "better_y"), [("min", "min"), ("max", "min"), ("min", "max"), ("max", "max")])
def test_stairs_go_through_the_designs_that_none_beats(better_x: str, better_y: str) -> None:
    random = np.random.default_rng(7)
    points = np.round(random.random((2, 60)), 2)
    signs = np.array([[1.0 if better == "min" else -1.0] for better in (better_x, better_y)])
    corners = stairs(*points, better_x, better_y)
    losses = signs * points
    front = {
        tuple(p)
        for p in points.T
        if not any((q <= signs[:, 0] * p).all() and (q < signs[:, 0] * p).any() for q in losses.T)
    }
    assert {tuple(p) for p in corners[:, ::2].T} == front
    steps = np.diff(signs * corners, axis=1)
    assert ((steps[0, ::2] > 0) & (steps[1, ::2] == 0)).all()  # along the worse direction of x
    assert ((steps[0, 1::2] == 0) & (steps[1, 1::2] < 0)).all()  # then to what is better in y


@pytest.mark.parametrize("kind", MAGIC)
def test_the_figure_is_drawn_in_every_format(cli: Cli, two_runs: tuple[str, str], kind: str) -> None:
    result = cli("compare", *two_runs, "--to", f"over.{kind}", "--dpi", "60", "--json")
    assert result.exit_code == 0, result.stderr
    json.loads(result.stdout)
    assert Path(f"over.{kind}").read_bytes().startswith(MAGIC[kind])
    assert not list(Path().glob(".over*"))


def test_runs_part_by_marker_and_by_how_dark_they_print() -> None:
    from matplotlib.colors import to_rgb

    assert len({marker for marker, _ in MARKS}) == len(MARKS)
    dark = [float(np.dot(to_rgb(colour), (0.299, 0.587, 0.114))) for _, colour in MARKS]
    assert min(abs(a - b) for a, b in combinations(dark[:3], 2)) > 0.15
    assert max(dark) < 0.75


@pytest.mark.parametrize("name", HOSTILE)
def test_a_hostile_title_is_compared_safely(cli: Cli, run_copy: Path, name: str) -> None:
    shutil.copytree("run", "[red]other$x")
    problem = Path("[red]other$x/problem.toml")
    title = json.dumps(HOSTILE[name], ensure_ascii=False)
    problem.write_text(changed(RESISTOR, ("title", f"title = {title}")), encoding="utf-8")
    result = cli("compare", "run", "[red]other$x", "--to", "over.svg", "--dpi", "50")
    assert (result.exit_code, result.stderr) == (0, "")
    assert all(c.isprintable() or c == "\n" for c in result.stdout)
    assert result.stdout.count("[red]other$x") > 8  # in the headings of every table, and in words


def test_the_best_of_a_level_and_what_is_like_it_have_a_star(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    problem = loaded(tmp_path, RESISTOR)
    like = 0.9 * SAME["linear"]
    values = [np.array([[1.0, 4.0], [9.0, y]]) for y in (5.0, 5.0 + like, 5.0 - like, 5.0 + 3.0 * like)]
    fronts = compare("abcd", [run_of(problem, v) for v in values])
    print_comparison(fronts, levels_of(fronts))
    table = capsys.readouterr().out.split("lowest second with first at most\n")[1].splitlines()
    at_four = next(line for line in table if line.startswith("4 V")).split()
    assert at_four == ["4", "V", "5", "V", "*", "5.045", "V", "4.955", "V", "*", "5.135", "V"]


@pytest.mark.parametrize(
    ("sense", "bands", "words"),
    [
        ("min", [Band(2e-6, None, (1,), None)], "b everywhere"),
        ("min", [Band(2e-6, None, (0, 1), None)], "a and b alike everywhere"),
        ("min", [Band(2e-6, None, (0,), 3e-6)], "a (to 3 uA alone) everywhere"),
        (
            "min",
            [Band(2e-6, 4.1e-6, (0,), 3e-6), Band(4.1e-6, None, (1,), None)],
            "2 uA to 4.1 uA a (to 3 uA alone), above b",
        ),
        ("max", [Band(5e-6, 2e-6, (1,), 2e-6), Band(2e-6, None, (0,), None)], "5 uA to 2 uA b alone, below a"),
    ],
)
def test_bands_are_said_from_the_strictest_level_to_the_loosest(sense: str, bands: list[Band], words: str) -> None:
    goal = Goal(CATALOGUE["supply_current"], sense)  # type: ignore[arg-type]
    assert bands_in_words(goal, bands, ["a", "b"]) == words
