"""How the measures of a sizing move with its sizes: two tables, what helps a missed limit, and the same as JSON."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from rich.markup import escape

from optisize.errors import printable
from optisize.front.sensitivity import Missed, Sensitivity, missed_limits
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import write
from optisize.show.terminal import console, json_number, print_table
from optisize.stage.measures import Measure

MOST = 3  # sizes that are named for a missed limit
WORTH = 0.1  # of what the best one does, for another one to be named


def print_sensitivity(problem: Problem, found: Sensitivity) -> None:
    """Print the changes for 1 % more and for one step up of each size, then what brings the missed limits nearer."""
    names = [size.name for size in found.sizes]
    _print_changes(problem, found, "change for +1 % of each size alone", names, found.more)
    steps = [_step(size.name, step, size.unit) for size, step in zip(found.sizes, found.steps[1], strict=True)]
    _print_changes(problem, found, "change for one step up of each size alone", steps, found.up)
    for i, missed in enumerate(missed_limits(problem, found)):
        console().print("\n" * (i == 0) + escape(printable(missed_line(missed))), soft_wrap=True)


def _step(name: str, step: float, unit: str) -> str:
    return f"{name} (no step)" if math.isnan(step) else f"{name} +{write(step, unit)}"


def _print_changes(problem: Problem, found: Sensitivity, title: str, columns: Sequence[str], changes: Array) -> None:
    rows = []
    for m, value, row in zip(found.measures, found.values.tolist(), changes.tolist(), strict=True):
        name, figure = (f"|{label(m)}|", abs(value)) if m.signed else (label(m), value)
        cells = [change_text(m, change) for change in row]
        rows.append([f"{name} ({wanted(problem, m)})", write(figure, m.unit), *cells])
    print_table(f"\n{title}", ["measure", "now", *columns], rows)


def wanted(problem: Problem, measure: Measure) -> str:
    """Return what is wanted of a measure: ``max`` for a goal, ``>= 50 mV`` for a limit, or else the usual sense."""
    goals = [g.sense for g in problem.goals if g.measure.name == measure.name]
    bounds = [
        f"{'>=' if kind == 'min' else '<='} {write(bound, measure.unit)}"
        for limit in problem.limits
        if limit.measure.name == measure.name
        for kind, bound in limit.bounds
    ]
    return ", ".join([*goals, *bounds] or [measure.better])


def change_text(measure: Measure, change: float) -> str:
    """Return a change with its sign: ``+0.084 dB``, or ``+0.5 %`` of a measure on a logarithmic scale."""
    if change == 0.0 or math.isnan(change):
        return "undefined" if math.isnan(change) else "0"
    sign = "+" if change > 0.0 else ""
    if measure.scale == "log" and math.isfinite(change):
        return f"{sign}{100.0 * change:.3g} %"
    return f"{sign}{write(change, measure.unit, 3)}"


def missed_line(missed: Missed) -> str:
    """Return in one line by how much a limit is missed, and what brings it nearer."""
    m, helps = missed.measure, missed.helps
    if not math.isfinite(missed.value):
        return f"{m.name} ({missed.kind} {write(missed.bound, m.unit)}) is missed: it is {write(missed.value, m.unit)}"
    by = write(missed.by, m.unit, 3)
    if m.scale == "log" and missed.value > 0.0:
        by += f", {100.0 * missed.by / missed.value:.3g} % of its {write(missed.value, m.unit)}"
    said = [
        f"{x.size} {x.percent:+d} %{' helps most' if x is helps[0] else ''} ({change_text(m, x.change)})"
        for x in helps[:MOST]
        if abs(x.change) >= WORTH * abs(helps[0].change)
    ]
    return f"{m.name} is missed by {by}: {', '.join(said) or 'no size helps by itself within its range'}"


def sensitivity_record(problem: Problem, found: Sensitivity) -> dict[str, Any]:
    """Return the changes and what helps the missed limits as plain data in SI units.

    A change is relative (0.01 for 1 %) or a difference in the unit, as its measure says.
    """
    names = [size.name for size in found.sizes]
    sides = {"minus_1_percent": found.less, "plus_1_percent": found.more, "step_down": found.down, "step_up": found.up}
    return {
        "sizes": [
            {"name": s.name, "unit": s.unit, "value": float(at), "step_down": json_number(d), "step_up": json_number(u)}
            for s, at, d, u in zip(found.sizes, found.at, *found.steps, strict=True)
        ],
        "measures": [
            {
                "name": m.name,
                "unit": m.unit,
                "value": json_number(found.values[i]),
                "wanted": wanted(problem, m),
                "change": "relative" if m.scale == "log" else "difference",
                "of_magnitude": m.signed,
                **{side: dict(zip(names, map(json_number, x[i]), strict=True)) for side, x in sides.items()},
            }
            for i, m in enumerate(found.measures)
        ],
        "missed": [_missed_record(x) for x in missed_limits(problem, found)],
    }


def _missed_record(missed: Missed) -> dict[str, Any]:
    return {
        "name": missed.measure.name,
        "kind": missed.kind,
        "bound": missed.bound,
        "unit": missed.measure.unit,
        "value": json_number(missed.value),
        "helps": [{"size": x.size, "percent": x.percent, "change": x.change} for x in missed.helps],
    }
