"""A manual sizing: its measures, its operating point, its limits, and the designs of a front that beat it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from optisize.errors import InputError
from optisize.front.compare import Better, dominating, latest_run_of
from optisize.front.run import load_run
from optisize.front.table import measure_names
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import origin
from optisize.process.law import Array
from optisize.stage.measures import FIGURES


@dataclass(frozen=True)
class Assessment:
    """What is known of one sizing.

    Attributes:
        sizes, measures: SI values by name; the figures of each transistor are named like ``input.p.gm``.
        limits: for each bound its name, kind, bound, unit, value, whether it is implied rather than stated, and met.
        feasible: whether all are met.
        against: the run that it was compared with; None where there is none.
        better: the designs of that run that beat it; None where there is no run.
    """

    sizes: dict[str, float]
    measures: dict[str, float]
    transistors: tuple[str, ...]
    limits: list[dict[str, Any]]
    feasible: bool
    against: str | None
    better: list[Better] | None
    front: pd.DataFrame | None

    @property
    def dominated_by(self) -> list[dict[str, Any]] | None:
        """The designs that beat the sizing, and by how much in each goal."""
        if self.better is None:
            return None
        return [{"design": b.design, "better_by": b.gains} for b in self.better]


def assess_sizing(
    problem: Problem, sizes: Mapping[str, Array], against: Path | None = None, name: str = "the sizing"
) -> Assessment:
    """Assess one sizing, each size (1,), beside a run: the one given, or the newest of the same problem.

    A message calls the sizing by its `name`.

    Raises InputError when the sizing has no operating point, or the run has other goals or another stage.
    """
    transistors = tuple(t.name for t in problem.topology.transistors)
    names = [*measure_names(problem), *(f"{t}.{figure}" for t in transistors for figure in FIGURES)]
    values = problem.measure(sizes, names)
    assessed = problem.judge(values)
    if not assessed.solved[0]:
        raise InputError(f"{name}: {problem.why_unsolved(sizes)}")
    directory = str(against) if against is not None else latest_run_of(problem)
    run = load_run(directory) if directory is not None else None
    better = None
    if run is not None:
        if _goals(problem) != _goals(run.problem):
            raise InputError(f"{directory}: was searched for other goals than this problem's")
        better = dominating(problem, values, run.front)
    return Assessment(
        sizes={name: float(v[0]) for name, v in sizes.items()},
        measures={name: float(v[0]) for name, v in values.items()},
        transistors=transistors,
        limits=_limit_rows(problem, values),
        feasible=bool((assessed.violations[:, 0] <= 1e-9).all()),
        against=directory,
        better=better,
        front=None if run is None else run.front,
    )


def _goals(problem: Problem) -> set[tuple[object, ...]]:
    """Return what tells the goals of one problem from another's: name, measure, settings and sense."""
    return {(g.measure.name, origin(g.measure), tuple(g.measure.taken_at.items()), g.sense) for g in problem.goals}


def _limit_rows(problem: Problem, values: Mapping[str, Array]) -> list[dict[str, Any]]:
    rows = []
    for limit in problem.limits:
        m = limit.measure
        for kind, bound in limit.bounds:
            alone = type(limit)(m, *((bound, None) if kind == "min" else (None, bound)))
            rows.append(
                {
                    "name": m.name,
                    "kind": kind,
                    "bound": bound,
                    "unit": m.unit,
                    "value": float(values[m.name][0]),
                    "implied": limit.implied,
                    "met": bool(alone.met(values[m.name])[0]),
                }
            )
    return rows
