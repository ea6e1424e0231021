"""How runs and choices show themselves in a notebook: a little HTML, every text escaped."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape
from typing import TYPE_CHECKING

from optisize.errors import printable
from optisize.front.summary import extremes
from optisize.front.table import column
from optisize.quantities import write

if TYPE_CHECKING:
    from optisize.front.choice import Choice
    from optisize.front.run import Run

SHOWN = 8  # designs of the small table


def run_html(run: Run) -> str:
    """Return a run: its title, the extremes of its goals, and a short list of its designs with their free sizes."""
    goals = run.problem.goals
    parts = [_paragraph(run.problem.title, "strong"), _paragraph(_counts(run))]
    if len(run.front):
        rows = [
            [e.goal, *(write(e.values[g.measure.name], g.measure.unit) for g in goals), str(e.design)]
            for e in extremes(run)
        ]
        parts.append(_table(["best", *(f"{g.measure.name} ({g.sense})" for g in goals), "design"], rows))
        units = [(g.measure.name, g.measure.unit) for g in goals]
        units += [(r.size.name, r.size.unit) for r in run.problem.space.free]
        rows = [
            [str(int(design["design"])), *(write(float(design[column(*named)]), named[1]) for named in units)]
            for _, design in run.short_list(SHOWN).iterrows()
        ]
        parts.append(_table(["design", *(name for name, _ in units)], rows))
    return f"<div>{''.join(parts)}</div>"


def _counts(run: Run) -> str:
    count = len(run.front)
    place = f", {run.path}" if run.path is not None else ""
    return f"{count} {'design' if count == 1 else 'designs'} on the front{place}"


def choice_html(choice: Choice) -> str:
    """Return a choice: what it is, why, what it misses, its goals and its sizes."""
    problem = choice.run.problem
    row = choice.row
    goals = [(g.measure.name, g.measure.unit) for g in problem.goals]
    sizes = [(s.name, s.unit) for s in problem.topology.sizes]
    cells = [write(float(row[column(*named)]), named[1]) for named in (*goals, *sizes)]
    parts = [_paragraph(choice.label, "strong"), *(_paragraph(text) for text in (choice.why, *choice.steps))]
    parts += [_paragraph(f"{missing}.") for missing in choice.missing]
    parts.append(_table([name for name, _ in (*goals, *sizes)], [cells]))
    return f"<div>{''.join(parts)}</div>"


def _paragraph(text: str, tag: str = "span") -> str:
    return f"<p><{tag}>{escape(printable(text))}</{tag}></p>"


def _table(headings: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    head = "".join(f"<th>{escape(printable(h))}</th>" for h in headings)
    body = "".join("<tr>" + "".join(f"<td>{escape(printable(cell))}</td>" for cell in row) + "</tr>" for row in rows)
    return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
