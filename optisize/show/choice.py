"""A chosen design, printed and as plain data: why this one, where it stands, what its neighbours give and cost."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from rich.markup import escape

from optisize.errors import printable
from optisize.front.aims import Axis
from optisize.front.choice import Choice
from optisize.front.details import places
from optisize.front.run import Run
from optisize.front.table import column, measured, simulated_column, sizes_of, values_of
from optisize.front.wish import ShortList
from optisize.quantities import write
from optisize.show.card import card_record, print_card
from optisize.show.terminal import console, json_number, print_caution, print_table

BAR = 20  # characters from the worst of the front to the best


def print_choice(choice: Choice) -> None:
    """Print a chosen design: the reason, what it misses, its place on the front, its neighbours, its card."""
    out = console()
    title = f"{choice.run.problem.title}: {choice.label}"
    out.print(f"[bold]{escape(printable(title))}[/bold]", soft_wrap=True)
    for text in (choice.why[:1].upper() + choice.why[1:], *(f"{m}." for m in choice.missing), *choice.steps):
        out.print(escape(printable(text)), soft_wrap=True)
    _print_places(choice)
    _print_neighbours(choice)
    out.print()
    print_card(choice.card, simulated(choice))
    print_caution()


def _print_places(choice: Choice) -> None:
    rows = []
    for place in place_record(choice):
        figures = [write(place[key], place["unit"]) for key in ("value", "worst", "best")]
        filled = int(BAR * place["place"] + 1e-9)  # full for the best alone
        bar = f"{'█' * filled}{'·' * (BAR - filled)}"
        rows.append([f"{place['goal']} ({place['sense']})", *figures, bar, f"{100.0 * place['place']:.0f} %"])
    headings = ["goal", "this design", "worst of front", "best of front", "from worst to best", ""]
    print_table("\nwhere it stands", headings, rows)


def place_record(choice: Choice) -> list[dict[str, Any]]:
    """Return for each goal its value, the extremes of the front, and the place between them, 0 worst and 1 best."""
    run, at = choice.run, choice.position
    goals = run.problem.goals
    between = places(goals, {g.measure.name: measured(run.front, g.measure) for g in goals})
    rows = []
    for goal in goals:
        values = measured(run.front, goal.measure)
        losses = goal.loss(values)
        rows.append(
            {
                "goal": goal.measure.name,
                "unit": goal.measure.unit,
                "sense": goal.sense,
                "value": float(values[at]),
                "worst": float(values[np.argmax(losses)]),
                "best": float(values[np.argmin(losses)]),
                "place": float(between[goal.measure.name][at]),
            }
        )
    return rows


def _print_neighbours(choice: Choice) -> None:
    senses = {a.name: a for a in choice.axes}
    rows = []
    for n in choice.neighbours:
        more = (senses[n.axis].sense == "max") == n.better
        cells = [_change(n.changes[a.name], a) for a in choice.axes]
        rows.append([f"{'more' if more else 'less'} {n.axis}", str(choice.number(n.position)), *cells])
    if rows:
        print_table(
            "\nneighbours: what each has more or less", ["towards", "design", *(a.name for a in choice.axes)], rows
        )


def _change(change: float, axis: Axis) -> str:
    if not math.isfinite(change) or change == 0.0:
        return "0" if change == 0.0 else "undefined"
    return f"{'+' if change > 0.0 else ''}{write(change, axis.unit, 3)}"


def simulated(choice: Choice) -> dict[str, float]:
    """Return what the circuit simulator said of the measures of a chosen design, by name."""
    found = {}
    for name in choice.card.measures:
        heading = simulated_column(choice.run.problem.find(name))
        if heading in choice.run.front and not np.isnan(choice.row[heading]):
            found[name] = float(choice.row[heading])
    return found


def choice_record(choice: Choice) -> dict[str, Any]:
    """Return a chosen design as plain data in SI units."""
    return {
        "design": choice.design,
        "rule": choice.rule,
        "why": choice.why,
        "steps": list(choice.steps),
        "met": choice.met,
        "missing": [
            {
                "asked": m.asked,
                "name": m.name,
                "unit": m.unit,
                "bound": m.bound,
                "value": json_number(m.value),
                "by": json_number(m.by),
            }
            for m in choice.missing
        ],
        "goals": place_record(choice),
        "neighbours": [
            {
                "towards": n.axis,
                "better": n.better,
                "design": choice.number(n.position),
                "changes": {name: json_number(value) for name, value in n.changes.items()},
                "misses": list(n.misses),
            }
            for n in choice.neighbours
        ],
        **card_record(choice.card),
        **({"simulated": found} if (found := simulated(choice)) else {}),
    }


def print_short_list(run: Run, chosen: ShortList) -> None:
    """Print a few designs along the front: what each of them is, the goals, the free sizes."""
    goals = [(g.measure.name, g.measure.unit) for g in run.problem.goals]
    sizes = [(r.size.name, r.size.unit) for r in run.problem.space.free]
    rows = []
    for mark, (_, row) in zip(chosen.marks, chosen.front.iterrows(), strict=True):
        cells = [write(float(row[column(*named)]), named[1]) for named in (*goals, *sizes)]
        rows.append([str(int(row["design"])), mark, *cells])
    title = f"{run.problem.title}: {len(rows)} of {len(run.front)} designs"
    if chosen.meeting < len(run.front):
        title += f", {chosen.meeting} of which meet the conditions"
    print_table(title, ["design", "", *(name for name, _ in (*goals, *sizes))], rows, left=0)
    print_caution()


def short_list_record(run: Run, chosen: ShortList) -> list[dict[str, Any]]:
    """Return a short list as plain data in SI units."""
    sizes, values = sizes_of(run.problem, chosen.front), values_of(run.problem, chosen.front)
    return [
        {
            "design": int(number),
            "mark": mark,
            "sizes": {name: float(v[i]) for name, v in sizes.items()},
            "measures": {name: json_number(float(v[i])) for name, v in values.items()},
        }
        for i, (number, mark) in enumerate(zip(chosen.front["design"], chosen.marks, strict=True))
    ]
