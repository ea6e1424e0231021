"""Figures: the record of what is shown, and files that are whole."""

from __future__ import annotations

import errno
import os
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure

from optisize.errors import OptisizeError
from optisize.front.run import Run, load_run
from optisize.problem.evaluate import Limit
from optisize.show.figures import drawable, write_figures
from optisize.show.history import history
from optisize.show.plots import LINE, axis_of, heading
from optisize.show.trade_offs import trade_offs
from optisize.stage.measures import CATALOGUE
from tests.conftest import Cli
from tests.problem.test_bad_input import refused

NOISE = ["noise low (input noise at 10 Hz)"]
MAGIC = {"png": b"\x89PNG", "svg": b"<?xml", "pdf": b"%PDF"}


@pytest.fixture
def run(finished_run: Path) -> Run:
    return load_run(finished_run)


def _with_goals(run: Run, count: int) -> Run:
    """The run with its first goals only."""
    return replace(run, problem=replace(run.problem, goals=run.problem.goals[:count]))


def test_every_pair_of_goals_is_a_trade_off_with_the_third_as_colour(run: Run) -> None:
    shown = trade_offs(run)
    names = [[x.label.split(" [")[0].split(" (")[0] if x else None for x in (t.x, t.y, t.colour)] for t in shown]
    assert names == [
        ["cmrr", "gain", "supply current"],
        ["supply current", "gain", "cmrr"],
        ["supply current", "cmrr", "gain"],
    ]
    assert [t.colour for t in trade_offs(_with_goals(run, 2))] == [None]
    assert trade_offs(_with_goals(run, 1)) == []


def test_an_axis_shows_the_values_of_the_front_in_a_readable_unit(run: Run) -> None:
    current = axis_of(run, 2)
    assert current.label == "supply current [uA]"
    assert current.better == "min"
    assert current.logarithmic
    np.testing.assert_allclose(current.values * 1e-6, run.front["supply_current [A]"], rtol=1e-12)
    gain = axis_of(run, 0)
    assert (gain.label, gain.better, gain.logarithmic, gain.bounds) == ("gain [dB]", "max", False, ())
    np.testing.assert_array_equal(gain.values, run.front["gain [dB]"])


@pytest.mark.usefixtures("humming")
def test_an_axis_says_how_its_measure_is_taken(run: Run) -> None:
    wideband = CATALOGUE["hum"].at("wide_band", {"frequency": 1e5})
    goal, limit = replace(run.problem.goals[2], measure=wideband), Limit(wideband, None, 4e-8)
    problem = replace(run.problem, goals=(goal,), limits=(limit,))
    front = pd.DataFrame({"wide_band [V/Hz^0.5]": [1e-8, 2e-8, 3e-8]})
    shown = axis_of(replace(run, problem=problem, front=front), 0)
    assert shown.label == "wide band (hum at 100 kHz) [nV/√Hz]"
    np.testing.assert_allclose(shown.values, [10.0, 20.0, 30.0])
    assert [(name, pytest.approx(40.0)) for name, _ in shown.bounds] == [*shown.bounds]


def test_a_limit_on_a_goal_is_part_of_its_axis(run: Run) -> None:
    limit = next(x for x in run.problem.limits if x.measure.name == "power")
    goal = replace(run.problem.goals[2], measure=limit.measure)
    shown = axis_of(replace(run, problem=replace(run.problem, goals=(goal,))), 0)
    assert shown.label == "power [uW]"
    assert [(name, pytest.approx(60.0)) for name, _ in shown.bounds] == [*shown.bounds]


def test_the_history_is_that_of_the_run(run: Run, finished_run: Path) -> None:
    record, table = history(run), pd.read_csv(finished_run / "history.csv")
    np.testing.assert_array_equal(record.evaluations, table["evaluations"])
    np.testing.assert_allclose(record.hypervolume, table["hypervolume"], rtol=1e-15)
    assert (np.diff(record.hypervolume) >= 0).all()
    assert ((record.feasible_share >= 0) & (record.feasible_share <= 1)).all()


@pytest.mark.parametrize("kind", MAGIC)
def test_figures_are_drawn_in_every_format(cli: Cli, run_copy: Path, kind: str) -> None:
    Path("elsewhere").mkdir()
    words = ("--design", "3", "--samples", "100", "--quiet")
    result = cli("plot", "run", "--format", kind, "--to", "elsewhere", "--dpi", "60", *words)
    assert (result.exit_code, result.stderr) == (0, "")
    names = ("trade-offs", "parallel", "history", "mismatch-3")
    assert result.stdout.split() == [f"elsewhere/{name}.{kind}" for name in names]
    for path in Path("elsewhere").iterdir():
        assert path.read_bytes().startswith(MAGIC[kind])
    assert len(list(Path("elsewhere").iterdir())) == 4


def test_only_the_figures_that_are_asked_for_are_drawn(cli: Cli, run_copy: Path) -> None:
    Path("elsewhere").mkdir()
    words = ("--only", "history", "--only", "trade-offs", "--format", "png", "--format", "svg", "--format", "png")
    result = cli("plot", "run", "--to", "elsewhere", "--dpi", "50", *words)
    paths = [f"elsewhere/{name}.{kind}" for name in ("trade-offs", "history") for kind in ("png", "svg")]
    assert result.stdout.split() == paths
    result = cli("plot", "run", "--only", "mismatch", "--design", "1", "--samples", "50", "--dpi", "50")
    assert result.stdout.split() == ["run/mismatch-1.png"]


def test_a_png_has_the_dots_that_are_asked_for(run: Run, tmp_path: Path) -> None:
    from matplotlib.image import imread

    sizes = [imread(write_figures(run, tmp_path, dpi=dpi, names=["history"])[0]).shape[:2] for dpi in (100, 300)]
    assert [3 * n for n in sizes[0]] == [*sizes[1]]


def test_a_design_that_is_marked_changes_the_figures_that_have_designs(run: Run, tmp_path: Path) -> None:
    for name, changes in (("trade-offs", True), ("parallel", True), ("history", False)):
        plain, marked = (
            write_figures(run, tmp_path, dpi=50, names=[name], design=design)[0].read_bytes() for design in (None, 3)
        )
        assert (plain != marked) is changes


def test_one_goal_has_no_trade_off_and_many_goals_have_all_pairs(run: Run, tmp_path: Path) -> None:
    assert [p.name for p in write_figures(_with_goals(run, 1), tmp_path, dpi=50)] == ["parallel.png", "history.png"]
    more = replace(run.problem.goals[0], measure=run.problem.limits[3].measure)
    four = replace(run, problem=replace(run.problem, goals=(*run.problem.goals, more)))
    assert len(trade_offs(four)) == 6
    assert len(write_figures(four, tmp_path, dpi=50)) == 3
    with pytest.raises(OptisizeError, match=r"--only: found trade-offs; .* one goal only, gain"):
        drawable(_with_goals(run, 1), ["history", "trade-offs"])


def test_a_run_without_a_design_has_a_history_only(run: Run, tmp_path: Path) -> None:
    nothing = replace(run, front=run.front.iloc[:0])
    assert [p.name for p in write_figures(nothing, tmp_path)] == ["history.png"]


def test_a_full_disk_leaves_no_part_of_a_figure(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def half(self: Figure, path: Path, **_: object) -> None:
        path.write_bytes(b"\x89PNG half")
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Figure, "savefig", half)
    with pytest.raises(OptisizeError, match=r"trade-offs\.png: cannot be written: No space left"):
        write_figures(run, tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_a_run_whose_figures_fail_is_kept_and_said(
    cli: Cli, finished_run: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(self: Figure, path: Path, **_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Figure, "savefig", full)
    result = cli("search", str(finished_run.parent / "stage.toml"), "--to", "run", "--quiet")
    assert result.exit_code == 1
    assert result.stderr.count("\n") == 1
    assert "run: is written, but not all of its figures: trade-offs.png" in result.stderr
    assert sorted(p.name for p in Path("run").iterdir()) == sorted(p.name for p in finished_run.iterdir())


def test_a_directory_is_made_where_there_is_none(cli: Cli, run_copy: Path) -> None:
    assert run_copy.is_dir()
    result = cli("plot", "run", "--only", "history", "--to", "new/place")
    assert result.exit_code == 0, result.stderr
    assert Path("new/place/history.png").is_file()
    result = cli("plot", "run", "--only", "history", "--to", "run/front.csv")
    assert result.exit_code == 1
    assert result.stderr.startswith("optisize: history.png: cannot be written: ")


def test_a_format_or_name_that_is_not_there_is_refused(cli: Cli, run_copy: Path) -> None:
    refused(cli, "--format", '"jpg"', "png, svg, pdf", words=("plot", "run", "--format", "jpg"))
    refused(cli, "--only", '"paralel"', 'mean "parallel"?', words=("plot", "run", "--only", "paralel"))
    refused(cli, "--only", "needs a design", words=("plot", "run", "--only", "mismatch"))
    refused(cli, "--design: found 999", "its designs are 1 to", words=("plot", "run", "--design", "999"))


@pytest.mark.parametrize(
    ("label", "better", "lines"),
    [
        ("gain [dB]", "max", ["gain [dB], higher is better"]),
        ("unity gain frequency [MHz]", "max", ["unity gain frequency [MHz],", "higher is better"]),
        ("noise low (input noise at 10 Hz) [nV/√Hz]", "min", [*NOISE, "[nV/√Hz], lower is better"]),
    ],
)
def test_a_heading_is_broken_where_it_is_read_best(label: str, better: str, lines: list[str]) -> None:
    assert heading(label, better).splitlines() == lines
    assert max(map(len, lines)) <= LINE
