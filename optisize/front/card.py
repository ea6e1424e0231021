"""All that is known of one sizing: measures against limits, drawn shapes, operating point."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from optisize.errors import InputError
from optisize.front.details import Details, details
from optisize.front.table import measure_names
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.stage.measures import FIGURES


@dataclass(frozen=True)
class Card:
    """One sizing with its figures.

    Attributes:
        problem: whose stage it is.
        sizes, measures: SI values by name; the figures of each transistor are named like ``input.p.gm``.
        limits: for each bound its name, kind, bound, unit, value, whether it is implied rather than stated, and met.
        feasible: whether all are met.
        details: how each device is drawn and where it works, of one design.
    """

    problem: Problem
    sizes: dict[str, float]
    measures: dict[str, float]
    limits: list[dict[str, Any]]
    feasible: bool
    details: Details


def card(problem: Problem, sizes: Mapping[str, Array], name: str = "the sizing") -> Card:
    """Return the card of one sizing, each size (1,); a message calls it by its `name`.

    Raises InputError when the sizing has no operating point.
    """
    transistors = [t.name for t in problem.topology.transistors]
    names = [*measure_names(problem), *(f"{t}.{figure}" for t in transistors for figure in FIGURES)]
    values = problem.measure(sizes, names)
    assessed = problem.judge(values)
    if not assessed.solved[0]:
        raise InputError(f"{name}: {problem.why_unsolved(sizes)}")
    return Card(
        problem=problem,
        sizes={name: float(v[0]) for name, v in sizes.items()},
        measures={name: float(v[0]) for name, v in values.items()},
        limits=_limit_rows(problem, values),
        feasible=bool((assessed.violations[:, 0] <= 1e-9).all()),
        details=details(problem, sizes),
    )


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
