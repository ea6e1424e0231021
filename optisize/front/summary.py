"""What a front says in a few lines: its extremes, and the limits that shape it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from optisize.front.run import Run
from optisize.front.table import column, measured

AT_BOUND = 0.03  # in the units of a limit's violation: 2 % of a logarithmic measure, a little of a linear one
AT_END = 0.02  # relative; so near to an end of its range a size is at it
CROWD = 0.25  # of the designs; fewer at an end are no reason to widen a range
LEAST_SHARE = 0.01  # of the designs; fewer at a bound are chance


@dataclass(frozen=True)
class Extreme:
    """The design that is best in one goal, with its values of all goals."""

    goal: str
    design: int
    values: dict[str, float]


@dataclass(frozen=True)
class Binding:
    """A limit at which designs of the front stand, and what share of them; `bound` has the search's margin in it."""

    name: str
    unit: str
    bound_name: str
    bound: float
    share: float


@dataclass(frozen=True)
class Crowded:
    """A free size at an end of its range, and the share of the designs there."""

    name: str
    unit: str
    end: float
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
        for name, bound in limit.narrowed().bounds:
            share = float(np.mean(limit.distance(values, bound) <= AT_BOUND)) if len(values) else 0.0
            if share >= LEAST_SHARE:
                found.append(Binding(m.name, m.unit, name, bound, share))
    return sorted(found, key=lambda b: -b.share)


def crowded_sizes(run: Run) -> list[Crowded]:
    """Return the free sizes that many designs have at an end of their range, the most crowded first."""
    found = []
    for r in run.problem.space.free:
        values = run.front[column(r.size.name, r.size.unit)].to_numpy(dtype=float)
        for end in (r.low, r.high):
            share = float(np.mean(np.abs(values / end - 1.0) <= AT_END)) if len(values) else 0.0
            if share >= CROWD:
                found.append(Crowded(r.size.name, r.size.unit, end, share))
    return sorted(found, key=lambda c: -c.share)
