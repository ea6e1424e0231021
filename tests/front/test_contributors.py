"""What makes the offset: against the measure, and against circuits in which one device alone deviates."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.front.contributors import offset_contributors
from optisize.front.run import load_run
from optisize.front.table import sizes_of
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.mismatch import Deviations, Sampled, spreads, varied


@pytest.fixture
def design(finished_run: Path) -> tuple[Problem, dict[str, Array]]:
    run = load_run(finished_run)
    return run.problem, sizes_of(run.problem, run.front.iloc[[len(run.front) // 2]])


def test_the_squares_add_up_to_the_offset(design: tuple[Problem, dict[str, Array]]) -> None:
    problem, sizes = design
    found = offset_contributors(problem, sizes)
    sigma = problem.measure(sizes, ["offset_sigma"])["offset_sigma"][0]
    assert np.sqrt(sum(c.sigma**2 for c in found)) == pytest.approx(sigma, rel=1e-12)
    assert sum(c.share for c in found) == pytest.approx(1.0)
    assert [c.sigma for c in found] == sorted((c.sigma for c in found), reverse=True)
    assert {c.devices for c in found} == {("input.p", "input.n"), ("load.p", "load.n"), ("tail",), ("bias",)}


def test_each_is_what_its_devices_do_alone(design: tuple[Problem, dict[str, Array]]) -> None:
    """One device off by a little, the offset taken out by the input as in use: that input is its part of the offset."""
    problem, sizes = design
    matched = Analysis(problem.circuit(sizes))
    spread, little = spreads(matched.circuit), 1e-2  # of a standard deviation, so that first order holds
    names = [t.name for t in matched.topology.transistors]
    resistors = [r.name for r in matched.topology.resistors]
    for c in offset_contributors(problem, sizes):
        squares = 0.0
        for device in c.devices:
            off = Deviations(*(np.zeros_like(np.broadcast_to(x, (len(n), 1))) for x, n in (
                (spread.threshold, names), (spread.factor, names), (spread.resistance, resistors))))  # fmt: skip
            kind = ("threshold", "current factor", "resistance").index(c.kind)
            row = (resistors if kind == 2 else names).index(device)
            off[kind][row] = little * np.broadcast_to(spread[kind], off[kind].shape)[row]
            squares += float(Sampled(varied(matched.circuit, off), matched).offset[0] / little) ** 2
        assert np.sqrt(squares) == pytest.approx(c.sigma, rel=5e-3)
