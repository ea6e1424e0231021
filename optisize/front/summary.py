"""What a front says in a few lines: its extremes, and the limits that shape it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from optisize.front.run import Run
from optisize.front.table import measured

AT_BOUND = 0.03  # in the units of a limit's violation: 2 % of a logarithmic measure, a little of a linear one
LEAST_SHARE = 0.01  # of the designs; fewer at a bound are chance


@dataclass(frozen=True)
class Extreme:
    """The design that is best in one goal, with its values of all goals."""

    goal: str
    design: int
    values: dict[str, float]


@dataclass(frozen=True)
class Binding:
    """A limit at which designs of the front stand, and what share of them."""

    name: str
    unit: str
    bound_name: str
    bound: float
    share: float


def extremes(run: Run) -> list[Extreme]:
    """Return the best design of each goal; none where there is no design."""
    result: list[Extreme] = []
    goals = run.problem.goals if len(run.front) else ()
    columns = {g.measure.name: measured(run.front, g.measure) for g in goals}
    for goal in goals:
        best = int(np.argmin(goal.loss(columns[goal.measure.name])))
        values = {name: float(column[best]) for name, column in columns.items()}
        result.append(Extreme(goal.measure.name, int(run.front["design"].iloc[best]), values))
    return result


def binding_limits(run: Run) -> list[Binding]:
    """Return the limits at which some designs of the front stand, the most binding first."""
    found = []
    for limit in run.problem.limits:
        m = limit.measure
        values = measured(run.front, m)
        for name, bound in limit.bounds:
            share = float(np.mean(limit.distance(values, bound) <= AT_BOUND)) if len(values) else 0.0
            if share >= LEAST_SHARE:
                found.append(Binding(m.name, m.unit, name, bound, share))
    return sorted(found, key=lambda b: -b.share)
