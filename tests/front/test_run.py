"""A run directory: whole or not at all, read back to the last digit, and one message when it is damaged."""

from __future__ import annotations

import csv
import errno
import json
import os
import random
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from optisize.errors import InputError, OptisizeError
from optisize.evolution import checkpoint
from optisize.front.run import load_run
from optisize.front.table import design_table, sizes_of, to_csv, units
from tests.conftest import Cli
from tests.problem.test_bad_input import refused
from tests.problem.texts import IDEAL, RESISTOR, changed, loaded

FILES = ["front.csv", "history.csv", "problem.toml", "process.toml", "run.json"]


def test_a_run_holds_its_parts_and_nothing_hidden(finished_run: Path) -> None:
    assert sorted(p.name for p in finished_run.iterdir()) == FILES
    assert sorted(p.name for p in finished_run.parent.iterdir()) == ["run", "stage.toml"]
    assert (finished_run / "problem.toml").read_text(encoding="utf-8") == RESISTOR


def test_columns_carry_their_units(finished_run: Path) -> None:
    heading = next(csv.reader((finished_run / "front.csv").open(encoding="utf-8")))
    assert heading[0] == "design"
    for name in (
        "input.width [m]",
        "load.resistance [ohm]",
        "tail.units",
        "gain [dB]",
        "supply_current [A]",
        "area [m^2]",
    ):
        assert name in heading


def test_run_json_says_how_the_front_came_about(finished_run: Path) -> None:
    info = json.loads((finished_run / "run.json").read_text(encoding="utf-8"))
    assert info["seed"] == 1
    assert info["population"] == 40
    assert info["evaluations"] == 40 * 41
    assert info["stopped"] == "budget"
    assert info["designs"] == len(pd.read_csv(finished_run / "front.csv"))
    assert 0.0 < info["hypervolume"] < 1.0
    assert set(info["sha256"]) == {"problem", "process"}
    history = pd.read_csv(finished_run / "history.csv")
    assert history["evaluations"].is_monotonic_increasing
    assert history["hypervolume"].iloc[-1] == info["hypervolume"]


def test_a_front_is_read_back_to_the_last_digit(finished_run: Path, tmp_path: Path) -> None:
    run = load_run(finished_run)
    assert to_csv(run.front) == (finished_run / "front.csv").read_text(encoding="utf-8")
    again = load_run(run.save(tmp_path / "again"))
    pd.testing.assert_frame_equal(again.front, run.front, check_exact=True)
    pd.testing.assert_frame_equal(again.history, run.history, check_exact=True)


def test_every_design_of_a_front_meets_every_limit_and_is_what_it_says(finished_run: Path) -> None:
    run = load_run(finished_run)
    problem, named = run.problem, units(run.problem)
    sizes = sizes_of(problem, run.front)
    snapped = problem.space.snapped(sizes)
    for name in sizes:
        np.testing.assert_array_equal(snapped[name], sizes[name])
    for row in range(len(run.front)):
        one = {name: values[row : row + 1] for name, values in sizes.items()}
        values = problem.measure(one, [name for name in named if name not in sizes])
        for limit in problem.limits:
            assert limit.met(values[limit.measure.name]).all(), (row, limit.measure.name)
        for name, value in values.items():
            heading = f"{name} [{named[name]}]" if named[name] else name
            np.testing.assert_allclose(run.front[heading].iloc[row], value[0], rtol=1e-7, err_msg=name)


def test_no_design_of_a_front_beats_another(finished_run: Path) -> None:
    run = load_run(finished_run)
    losses = np.array([-run.front["gain [dB]"], -run.front["cmrr [dB]"], run.front["supply_current [A]"]])
    for i in range(losses.shape[1]):
        beaten = (losses <= losses[:, [i]]).all(axis=0) & (losses < losses[:, [i]]).any(axis=0)
        assert not beaten.any()


def test_an_unlimited_figure_has_a_word_in_csv_and_json(cli: Cli) -> None:
    Path("stage.toml").write_text(changed(IDEAL, ("cmrr", "")), encoding="utf-8")
    assert cli("search", "stage.toml", "--to", "run", "--no-figures", "--quiet").exit_code == 0
    with Path("run/front.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert {row["cmrr [dB]"] for row in rows} == {"unlimited"}
    assert np.isinf(load_run("run").front["cmrr [dB]"]).all()
    assert {row["cmrr [dB]"] for row in json.loads(cli("front", "run", "--json").stdout)} == {"unlimited"}
    assert cli("front", "run", "--csv").stdout == Path("run/front.csv").read_text(encoding="utf-8")
    assert cli("front", "run", "--sort", "cmrr").exit_code == 0
    assert len(json.loads(cli("front", "run", "--where", "cmrr>=100 dB", "--json").stdout)) == len(rows)


def test_a_table_without_designs_has_its_columns(finished_run: Path) -> None:
    problem = load_run(finished_run).problem
    table = design_table(problem, problem.space.decode(np.empty((problem.space.dimensions, 0))))
    assert len(table) == 0
    assert "gain [dB]" in table.columns


def _full(*_: object, **__: object) -> None:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


@pytest.mark.parametrize("step", ["rename", "mkdir"])
def test_a_full_disk_leaves_nothing(
    finished_run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    run = load_run(finished_run)
    monkeypatch.setattr(os, step, _full)
    with pytest.raises(OptisizeError, match="cannot be written: No space left on device") as caught:
        run.save(tmp_path / "new")
    assert caught.value.exit_code == 1
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("part", FILES)
def test_a_disk_that_fills_while_a_part_is_written_leaves_nothing(
    finished_run: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, part: str
) -> None:
    whole = Path.write_text

    def until_full(self: Path, text: str, **options: str) -> int:
        if self.name != part:
            return whole(self, text, **options)  # type: ignore[arg-type]
        whole(self, text[: len(text) // 2], **options)  # type: ignore[arg-type]
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    run = load_run(finished_run)
    monkeypatch.setattr(Path, "write_text", until_full)
    with pytest.raises(OptisizeError, match="No space left"):
        run.save(tmp_path / "new")
    assert list(tmp_path.iterdir()) == []


def test_a_real_write_that_fails_is_one_message_with_code_1(tmp_path: Path) -> None:
    """The system itself refuses to let a file grow beyond 2 kB."""
    code = (
        "import resource, sys; resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000));"
        "sys.argv = ['optisize', *sys.argv[1:]]; from optisize.cli import main; main()"
    )
    (tmp_path / "stage.toml").write_text(RESISTOR, encoding="utf-8")
    words = ["search", "stage.toml", "--to", "run", "--quiet", "--no-figures", "--generations", "21"]
    result = subprocess.run(
        [sys.executable, "-c", code, *words], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert result.returncode == 1, result.stderr
    assert result.stderr == "optisize: run: cannot be written: File too large\n"
    assert [p.name for p in tmp_path.iterdir()] == ["stage.toml"]


def test_a_failed_replacement_keeps_the_old_run(
    finished_run: Path, run_copy: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    before = {p.name: p.read_bytes() for p in run_copy.iterdir()}
    rename, calls = os.rename, []

    def second_fails(a: str | Path, b: str | Path) -> None:
        calls.append(a)
        if len(calls) == 2:
            _full()
        rename(a, b)

    run = load_run(finished_run)
    monkeypatch.setattr(os, "rename", second_fails)
    with pytest.raises(OptisizeError, match="No space left"):
        run.save(run_copy, replace=True)
    assert {p.name: p.read_bytes() for p in run_copy.iterdir()} == before
    assert [p.name for p in run_copy.parent.iterdir()] == ["run"]


def test_a_replaced_run_keeps_what_others_put_there_and_no_older_part(finished_run: Path, run_copy: Path) -> None:
    for name in ("notes.txt", "mismatch-of-mine.png"):
        (run_copy / name).write_text("mine", encoding="utf-8")
    (run_copy / "decks").mkdir()
    (run_copy / "decks" / "design-3.cir").write_text("* deck", encoding="utf-8")
    for name in ("checkpoint.npz", "trade-offs.png", "history.svg", "parallel.pdf", "mismatch-3.png"):
        (run_copy / name).write_text("old", encoding="utf-8")
    load_run(finished_run).save(run_copy, replace=True)
    assert sorted(p.name for p in run_copy.iterdir()) == sorted([*FILES, "decks", "mismatch-of-mine.png", "notes.txt"])
    assert (run_copy / "decks" / "design-3.cir").read_text(encoding="utf-8") == "* deck"


def test_a_run_that_exists_is_never_overwritten(finished_run: Path, run_copy: Path) -> None:
    run = load_run(finished_run)
    for taken in (run_copy, run_copy / "run.json"):
        with pytest.raises(InputError, match="already exists"):
            run.save(taken)
    (run_copy.parent / "dangling").symlink_to("nowhere")
    with pytest.raises(InputError, match="already exists"):
        run.save(run_copy.parent / "dangling")


def test_what_cannot_be_written_is_known_before_the_search(cli: Cli) -> None:
    Path("stage.toml").write_text(changed(RESISTOR, ("population", "population = 20000")), encoding="utf-8")
    Path("file").write_text("", encoding="utf-8")
    result = cli("search", "stage.toml", "--to", "file/run")
    assert result.exit_code == 1
    assert result.stderr.count("\n") == 1
    assert "file/run: cannot be written" in result.stderr
    Path("run").mkdir()
    refused(cli, "run: already exists", "--to")


def _edit(name: str, change: Callable[[str], str]) -> Callable[[Path], object]:
    return lambda run: (run / name).write_text(change((run / name).read_text(encoding="utf-8")), encoding="utf-8")


def _without(column: str) -> Callable[[Path], object]:
    def change(run: Path) -> None:
        table = pd.read_csv(run / "front.csv", dtype=str)
        table.drop(columns=column).to_csv(run / "front.csv", index=False)

    return change


def _arrays(**arrays: np.ndarray) -> Callable[[Path], object]:
    return lambda run: np.savez(run / "checkpoint.npz", **arrays)  # type: ignore[arg-type]


def _without_first_value(text: str) -> str:
    """The table with nothing in the second column of its first row."""
    heading, first, rest = text.split("\n", 2)
    number, _, values = first.split(",", 2)
    return f"{heading}\n{number},,{values}\n{rest}"


DAMAGES: dict[str, tuple[Callable[[Path], object], list[str]]] = {
    "no size": (_without("input.width [m]"), ["front.csv", "the column input.width [m] is missing"]),
    "no goal": (_without("gain [dB]"), ["front.csv", "the column gain [dB] is missing"]),
    "no limit": (_without("bandwidth [Hz]"), ["front.csv", "the column bandwidth [Hz] is missing"]),
    "no number": (_without("design"), ["front.csv", "the column design is missing"]),
    "front empty": (_edit("front.csv", lambda _: ""), ["front.csv", "damaged"]),
    "front binary": (lambda r: (r / "front.csv").write_bytes(random.Random(2).randbytes(400)), ["front.csv"]),
    "front ragged": (_edit("front.csv", lambda t: t + "1," * 90 + "\n"), ["front.csv", "damaged"]),
    "front cut": (_edit("front.csv", lambda t: t[:-200]), ["front.csv", "damaged", "cut short"]),
    "front gap": (_edit("front.csv", _without_first_value), ["front.csv", "without a number"]),
    "front word": (_edit("front.csv", lambda t: t.replace("\n1,", "\n1,wide", 1)), ["front.csv", "wide"]),
    "history empty": (_edit("history.csv", lambda _: ""), ["history.csv", "damaged"]),
    "history other": (_edit("history.csv", lambda _: "a,b\n1,2\n"), ["history.csv", "evaluations is missing"]),
    "json cut": (_edit("run.json", lambda t: t[: len(t) // 2]), ["run.json", "damaged"]),
    "json list": (_edit("run.json", lambda _: "[]"), ["run.json", "seed is missing"]),
    "json empty": (_edit("run.json", lambda _: "{}"), ["run.json", "seed is missing"]),
    "json word": (_edit("run.json", lambda t: t.replace('"seed": 1', '"seed": "one"')), ["run.json", "seed"]),
    "problem": (_edit("problem.toml", lambda _: "title = 3"), ["problem.toml", "title"]),
    "no front": (lambda r: (r / "front.csv").unlink(), ["no run directory", "front.csv"]),
    "no process": (lambda r: (r / "process.toml").unlink(), ["no run directory", "process.toml"]),
    "no problem": (lambda r: (r / "problem.toml").unlink(), ["no run directory", "problem.toml"]),
    "checkpoint junk": (lambda r: (r / "checkpoint.npz").write_bytes(b"junk"), ["checkpoint.npz", "damaged"]),
    "checkpoint empty": (lambda r: (r / "checkpoint.npz").write_bytes(b""), ["checkpoint.npz", "damaged"]),
    "checkpoint other": (_arrays(a=np.arange(3)), ["checkpoint.npz", "damaged"]),
    "checkpoint part": (_arrays(format=np.array(1)), ["checkpoint.npz", "damaged"]),
    "checkpoint pickled": (_arrays(format=np.array([{1: 2}], dtype=object)), ["checkpoint.npz", "damaged"]),
}


@pytest.mark.parametrize("case", DAMAGES)
def test_a_damaged_run_is_one_message(cli: Cli, run_copy: Path, case: str) -> None:
    damage, expected = DAMAGES[case]
    damage(run_copy)
    for command in ("front", "plot", "resume"):
        refused(cli, "run", *expected, words=(command, "run"))


def test_what_is_no_run_is_said(cli: Cli, run_copy: Path) -> None:
    refused(cli, "rum", "no such run", 'mean "run"?', words=("front", "rum"))
    refused(cli, "is not a directory", words=("front", "run/run.json"))
    refused(cli, "no run directory", words=("front", "."))
    refused(cli, "no such run", words=("front", "x" * 300))


def test_the_checkpoint_of_another_problem_is_refused(cli: Cli, run_copy: Path, tmp_path: Path) -> None:
    from optisize.front import explore

    other = loaded(tmp_path, changed(RESISTOR, ("supply_current", ""), ("generations", "generations = 2")))
    state = explore.search(other).state
    assert state is not None
    checkpoint.save(run_copy / "checkpoint.npz", state)
    refused(cli, "checkpoint.npz", "damaged", words=("resume", "run"))


def test_a_table_of_designs_leaves_out_what_misses_a_limit(finished_run: Path) -> None:
    problem = load_run(finished_run).problem
    sizes = problem.space.decode(np.random.default_rng(4).random((problem.space.dimensions, 600)))
    feasible = problem.assess(sizes).violation <= 0.0
    assert 0 < feasible.sum() < 600
    table = design_table(problem, sizes)
    assert list(table["design"]) == list(range(1, feasible.sum() + 1))
    assert list(table["gain [dB]"]) == sorted(table["gain [dB]"], reverse=True)


def test_infinite_figures_of_either_sign_and_undefined_ones_survive_a_file(tmp_path: Path, finished_run: Path) -> None:
    run = load_run(finished_run)
    run.front.loc[[0, 1, 2], "area [m^2]"] = [np.inf, -np.inf, 3e-9]
    run.front.loc[[0, 1, 2], "slew_rate [V/s]"] = [np.nan, -np.inf, np.inf]
    run.save(tmp_path / "odd")
    assert "-unlimited" in (tmp_path / "odd" / "front.csv").read_text(encoding="utf-8")
    pd.testing.assert_frame_equal(load_run(tmp_path / "odd").front, run.front, check_exact=True)
