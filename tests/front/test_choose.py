"""Conditions on a front and its order, against a plain reading of the CSV."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path

import pytest

from tests.conftest import Cli
from tests.problem.test_bad_input import refused


def _rows(text: str) -> list[dict[str, float | None]]:
    return [{k: float(v) if v else None for k, v in row.items()} for row in csv.DictReader(io.StringIO(text))]


def test_a_condition_that_no_design_meets_is_no_table(cli: Cli, run_copy: Path) -> None:
    assert run_copy.is_dir()
    result = cli("front", "run", "--where", "gain>=90 dB")
    assert result.exit_code == 3
    assert result.stdout == ""
    assert "run: no design has gain>=90 dB; `optisize choose`" in result.stderr


@pytest.mark.parametrize(
    ("conditions", "holds"),
    [
        (["gain>=14 dB"], lambda r: r["gain [dB]"] >= 14),
        (["gain<14"], None),
        (["gain < 14 dB"], lambda r: r["gain [dB]"] < 14),
        (["supply_current<=6 uA", "cmrr>45 dB"], lambda r: r["supply_current [A]"] <= 6e-6 and r["cmrr [dB]"] > 45),
        (["area<=3000 um^2"], lambda r: r["area [m^2]"] <= 3000e-12),
        (["tail.units>=2", "input.length>=0.5um"], lambda r: r["tail.units"] >= 2 and r["input.length [m]"] >= 0.5e-6),
    ],
)
def test_conditions_choose_what_a_plain_reading_of_the_csv_chooses(
    cli: Cli, run_copy: Path, conditions: list[str], holds: object
) -> None:
    words = [word for text in conditions for word in ("--where", text)]
    if holds is None:
        refused(cli, "--where", "has no unit", '"40 dB"', words=("front", "run", *words))
        return
    rows = _rows((run_copy / "front.csv").read_text(encoding="utf-8"))
    expected = [r["design"] for r in rows if holds(r)]  # type: ignore[operator]
    result = cli("front", "run", "--csv", *words)
    assert [r["design"] for r in _rows(result.stdout)] == expected
    assert [r["design"] for r in json.loads(cli("front", "run", "--json", *words).stdout)] == expected
    assert f"{len(expected)} of {len(rows)} designs" in cli("front", "run", *words).stdout


@pytest.mark.parametrize(
    ("name", "heading", "best_first"),
    [("gain", "gain [dB]", True), ("supply_current", "supply_current [A]", False), ("tail.units", "tail.units", False)],
)
def test_goals_are_sorted_best_first_and_other_columns_upwards(
    cli: Cli, run_copy: Path, name: str, heading: str, best_first: bool
) -> None:
    values = [r[heading] for r in _rows(cli("front", "run", "--csv", "--sort", name).stdout)]
    assert values == sorted(values, reverse=best_first)
    assert len(values) > 5


def test_json_holds_every_column_in_si_units(cli: Cli, run_copy: Path) -> None:
    rows = json.loads(cli("front", "run", "--json").stdout)
    assert rows == _rows((run_copy / "front.csv").read_text(encoding="utf-8"))


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        (("--where", "gian>=40 dB"), ['"gian"', "supply_current", 'mean "gain"?']),
        (("--where", "gain>=40 V"), ["--where", '"gain>=40 V"', '"dB"']),
        (("--where", "gain=>40 dB"), ["--where", '"gain=>40 dB"', 'did you mean ">=" for "=>"?']),
        (("--where", "gain"), ["--where", '"gain"', "gain>=40 dB"]),
        (("--where", ""), ["--where", "gain>=40 dB"]),
        (("--where", "gain>=\x1b[31m1"), ["--where", "gain>=?[31m1"]),
        (("--sort", "supply"), ['"supply"', '"supply_current"?']),
        (("--csv", "--json"), ["--csv", "--json"]),
    ],
)
def test_a_condition_or_column_that_makes_no_sense_is_refused(
    cli: Cli, run_copy: Path, words: tuple[str, ...], expected: list[str]
) -> None:
    refused(cli, *expected, words=("front", "run", *words))
