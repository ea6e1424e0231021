"""A sizing by hand, printed and as plain data: its card, the designs that beat it, the first moves towards one."""

from __future__ import annotations

from typing import Any

from rich.markup import escape

from optisize.errors import printable
from optisize.front.assess import Assessment
from optisize.front.moves import Move, Target
from optisize.problem.evaluate import Problem
from optisize.problem.sizing_file import exact_text
from optisize.quantities import write
from optisize.show.card import card_record, print_card
from optisize.show.terminal import console, json_number, print_table
from optisize.stage.elements import Size

LISTED = 10  # designs that beat it


def print_assessment(report: Assessment) -> None:
    """Print a sizing by hand: its card, the designs that beat it, what it leaves on the table, the first moves."""
    print_card(report.card)
    if report.better is None:
        _say("\nno run of this problem to compare with: search it first, or name one with --against")
    elif not report.better:
        _say(f"\nno design of {report.against} beats this sizing in its goals{_missed(report)}")
    else:
        _print_better(report)
        _print_nearest(report)


def _say(text: str) -> None:
    body = text.lstrip("\n")
    console().print("\n" * (len(text) - len(body)) + escape(printable(body)), soft_wrap=True)


def _missed(report: Assessment) -> str:
    names = dict.fromkeys(x["name"] for x in report.card.limits if not x["met"])
    return f", but it misses limits that all of them meet: {', '.join(names)}" if names else ""


def _print_better(report: Assessment) -> None:
    better = report.better or []
    goals = [(g.measure.name, g.measure.unit) for g in report.card.problem.goals]
    rows = [[str(b.design), *(_gain(b.gains[name], unit) for name, unit in goals)] for b in better[:LISTED]]
    count = "1 design" if len(better) == 1 else f"{len(better)} designs"
    beat = "beats" if len(better) == 1 else "beat"
    print_table(
        f"\n{count} of {report.against} {beat} this sizing; the furthest ahead",
        ["design", *(name for name, _ in goals)],
        rows,
    )
    left = report.left_on_the_table or {}
    parts = [f"{write(left[name], unit, 3)} of {name}" for name, unit in goals if left[name] > 0.0]
    _say(f"left on the table, in each goal without losing in any other: {', '.join(parts)}")


def _gain(value: float, unit: str) -> str:
    return "as good" if value == 0.0 else f"better by {write(value, unit, 3)}"


def _print_nearest(report: Assessment) -> None:
    nearest, problem = report.nearest, report.card.problem
    if nearest is None:
        _say("none of them beats it in this stage under these conditions and limits, so there are no moves to give")
        return
    rows = [
        [s.name, exact_text(problem.space, s, own), exact_text(problem.space, s, theirs), f"x {theirs / own:.3g}"]
        for s, own, theirs in nearest.sizes
    ]
    title = f"\nthe nearest of them in sizes is design {nearest.design}"
    print_table(title, ["size", "by hand", f"design {nearest.design}", "ratio"], rows)
    _print_moves(problem, nearest)


def _print_moves(problem: Problem, nearest: Target) -> None:
    names = [(name, problem.find(name).unit) for name in problem.needed]
    rows = [["by hand", "", *_figures(names, nearest.measures), _missed_here(problem, nearest.measures), ""]]
    rows += [
        [
            f"{number}. {move.size.name}",
            f"{_change(problem, move.size, move)}",
            *_figures(names, move.measures),
            ", ".join(move.missed) or "none",
            f"{100.0 * move.recovered:.0f} %",
        ]
        for number, move in enumerate(nearest.moves, start=1)
    ]
    count = len(nearest.moves)
    done = f"{100.0 * nearest.moves[-1].recovered:.0f} % of the gap to design {nearest.design}"
    title = f"\nfirst moves: {'one change recovers' if count == 1 else f'{count} changes recover'} {done}"
    print_table(title, ["move", "to", *(name for name, _ in names), "misses", "recovered"], rows)


def _figures(names: list[tuple[str, str]], measures: dict[str, float]) -> list[str]:
    return [write(measures[name], unit) for name, unit in names]


def _missed_here(problem: Problem, measures: dict[str, float]) -> str:
    import numpy as np

    missed = [x.measure.name for x in problem.limits if not x.met(np.array([measures[x.measure.name]]))[0]]
    return ", ".join(missed) or "none"


def _change(problem: Problem, size: Size, move: Move) -> str:
    part = "" if move.part == 1.0 else f" ({100.0 * move.part:.0f} % of the way)"
    return f"{exact_text(problem.space, size, move.after)}{part}"


def assessment_record(report: Assessment) -> dict[str, Any]:
    """Return the assessment as plain data in SI units."""
    card = report.card
    return {
        **card_record(card),
        "measures": {name: json_number(value) for name, value in card.measures.items()},
        "against": report.against,
        "dominated_by": report.dominated_by,
        "left_on_the_table": report.left_on_the_table,
        "nearest": None if report.nearest is None else _target_record(report.nearest),
    }


def _target_record(nearest: Target) -> dict[str, Any]:
    return {
        "design": nearest.design,
        "distance": nearest.distance,
        "sizes": [
            {"name": s.name, "unit": s.unit, "by_hand": own, "design": theirs, "ratio": theirs / own}
            for s, own, theirs in nearest.sizes
        ],
        "moves": [
            {
                "size": move.size.name,
                "unit": move.size.unit,
                "from": move.before,
                "to": move.after,
                "part": move.part,
                "measures": {name: json_number(value) for name, value in move.measures.items()},
                "misses": list(move.missed),
                "recovered": json_number(move.recovered),
            }
            for move in nearest.moves
        ],
        "recovered": nearest.moves[-1].recovered,
    }
