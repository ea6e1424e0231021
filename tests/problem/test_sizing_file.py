"""A sizing file that is written reads back to exactly the same design, whatever the stage and its grid."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest

from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem, load_sizing
from optisize.problem.sizing_file import COMMENT, sizing_text
from tests.problem.texts import RESISTOR
from tests.process.tables import sampled_process

PROBLEMS = [
    path
    for path in sorted((Path(__file__).parents[2] / "problems").glob("*.toml"))
    if path.stem != "strain-gauge-amplifier"  # wants a process that the user makes
]


@pytest.mark.parametrize("path", PROBLEMS, ids=lambda p: p.stem)
def test_random_designs_of_every_shipped_problem_read_back_exactly(path: Path, tmp_path: Path) -> None:
    _read_back(load_problem(path), tmp_path)


@pytest.mark.parametrize("lengths", ["grid", "tabulated"])
def test_designs_in_a_process_of_tables_read_back_exactly(lengths: str, tmp_path: Path) -> None:
    text = RESISTOR.replace('process = "generic-180"', f'process = "generic-180"\nlengths = "{lengths}"')
    (tmp_path / "stage.toml").write_text(text, encoding="utf-8")
    _read_back(load_problem(tmp_path / "stage.toml", process_file=sampled_process()), tmp_path)


def _read_back(problem: Problem, place: Path) -> None:
    designs = problem.space.decode(np.random.default_rng(5).random((problem.space.dimensions, 40)))
    for i in range(40):
        sizes = {name: float(values[i]) for name, values in designs.items()}
        file = place / f"{i}.toml"
        file.write_text(sizing_text(problem.space, sizes, "a design"), encoding="utf-8")
        again = load_sizing(file, problem)
        assert {name: float(v[0]) for name, v in again.items()} == sizes


def test_quantities_are_as_short_as_they_can_be() -> None:
    problem = load_problem(next(p for p in PROBLEMS if p.stem == "thermopile-preamplifier"))
    sizes = {"input.width": 85.35e-6, "input.length": 0.67e-6, "load.resistance": 296765.0, "tail.width": 3.46e-6}
    sizes |= {"tail.length": 8e-6, "tail.units": 16.0, "bias.current": 351e-9}
    table = tomllib.loads(sizing_text(problem.space, sizes, "x"))["sizes"]
    assert table["input"] == {"width": "85.35 um", "length": "670 nm"}
    assert table["load"]["resistance"] == "296.765 kohm"
    assert table["tail"] == {"width": "3.46 um", "length": "8 um", "units": 16}
    assert table["bias"]["current"] == "351 nA"


@pytest.mark.parametrize(
    "text", ['"; x = 1', "a\nb = 2", "\x1b[31m\x00", "back\\slash \\u0041", "Ω 电路", "x" * 500, ""]
)
def test_no_text_becomes_more_than_a_title_or_a_comment(text: str, tmp_path: Path) -> None:
    problem = load_problem(next(p for p in PROBLEMS if p.stem == "thermopile-preamplifier"))
    sizes = {name: float(v[0]) for name, v in problem.space.decode(np.full((7, 1), 0.5)).items()}
    file = tmp_path / "x.toml"
    file.write_text(sizing_text(problem.space, sizes, text, [text, "second"]), encoding="utf-8")
    data = tomllib.loads(file.read_text(encoding="utf-8"))
    assert set(data) == {"title", "sizes"}
    assert data["title"] == "".join(c if c.isprintable() else "?" for c in text)[:200]
    load_sizing(file, problem)
    assert max(len(line) for line in file.read_text(encoding="utf-8").splitlines() if line[:1] == "#") <= COMMENT + 2
