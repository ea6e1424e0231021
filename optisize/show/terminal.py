"""Tables and summaries in the terminal: results on stdout, progress and messages on stderr."""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Iterable, Sequence
from typing import Self

import numpy as np
import pandas as pd
from rich.console import Console
from rich.markup import escape
from rich.table import Table

from optisize.errors import printable
from optisize.evolution.state import State
from optisize.front.run import Run
from optisize.front.summary import Binding, Crowded, Extreme
from optisize.front.table import column, simulated_column, unit_of
from optisize.quantities import write

CAUTION = "A starting point for your simulator, not a sign-off: layout, reliability and ESD need the foundry's models."


REWRITTEN, REPEATED = 0.1, 2.0  # s between two states that are shown: of a line in a terminal, of lines elsewhere
GAP = 2  # blanks between the columns of a table


def console(width: int = 0) -> Console:
    """Return a console that, when it is no terminal, has room for lines of 200 characters, or of more if asked."""
    out = Console(highlight=False)
    return out if out.is_terminal else Console(highlight=False, width=max(width, 200), no_color=True)


def _table(headings: Iterable[str], left: int = 1) -> Table:
    """Return an empty table whose first `left` columns hold words and the rest numbers."""
    table = Table(box=None, pad_edge=False)
    for i, heading in enumerate(headings):
        table.add_column(
            escape(heading), justify="left" if i < left else "right", no_wrap=i >= left or i == 0, overflow="fold"
        )
    return table


def print_table(title: str, headings: Sequence[str], rows: Iterable[Sequence[str]], left: int = 1) -> None:
    """Print rows of text as a table on stdout, below a title that may begin with an empty line.

    Columns of numbers are never cut: those that do not fit into the terminal follow in further tables, each with the
    first column again.
    """
    headings = [printable(heading) for heading in headings]
    cells = [[printable(cell) for cell in row] for row in rows]
    widths = [max(len(line[i]) for line in (headings, *cells)) for i in range(len(headings))]
    out = console(sum(widths) + GAP * len(widths) if left <= 1 else 0)
    text = title.lstrip("\n")
    out.print("\n" * (len(title) - len(text)) + f"[bold]{escape(printable(text))}[/bold]", soft_wrap=True)
    for chosen in [range(len(widths))] if left > 1 else _blocks(widths, out.width):
        table = _table([headings[i] for i in chosen], left)
        for row in cells:
            table.add_row(*(escape(row[i]) for i in chosen))
        out.print(table)


def _blocks(widths: Sequence[int], room: int) -> list[list[int]]:
    """Return which columns go into which table, the first column into each."""
    blocks = [[0]]
    for i, width in enumerate(widths[1:], start=1):
        used = sum(widths[k] + GAP for k in blocks[-1])
        if used + width > room and len(blocks[-1]) > 1:
            blocks.append([0])
        blocks[-1].append(i)
    return blocks


class StatusLine:
    """Shows on stderr how work goes on: a line that is rewritten in a terminal, one every few seconds elsewhere."""

    def __init__(self, quiet: bool = False, patience: float = 0.0) -> None:
        """Begin; `patience` is how many seconds the work may take before a terminal shows anything."""
        self._quiet = quiet
        self._live = sys.stderr.isatty()
        self._shown = False
        self._due = time.monotonic() + (max(patience, REWRITTEN) if self._live else REPEATED)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        """Leave the line."""
        if self._live and self._shown:
            print("\r\x1b[K", end="", file=sys.stderr, flush=True)

    @property
    def due(self) -> bool:
        """Whether it is time to show something."""
        return not self._quiet and time.monotonic() >= self._due

    def show(self, text: str) -> None:
        """Show a text in place of the one before."""
        self._due, self._shown = time.monotonic() + (REWRITTEN if self._live else REPEATED), True
        print(f"\r{text}\x1b[K" if self._live else text, end="" if self._live else "\n", file=sys.stderr, flush=True)


class Progress(StatusLine):
    """Shows how a search goes on."""

    def __init__(self, budget: int, quiet: bool = False) -> None:
        """Prepare for a number of generations."""
        super().__init__(quiet)
        self._budget = budget

    def __call__(self, state: State) -> None:
        """Show the state of the search after a generation, if it is time to."""
        if self.due and state.records:
            record = state.records[-1]
            self.show(
                f"generation {record.generation}/{self._budget}  evaluations {record.evaluations}  "
                f"feasible {100 * record.feasible_share:.0f} %  hypervolume {record.hypervolume:.4f}"
            )


def print_search(run: Run, extremes: Sequence[Extreme], binding: Sequence[Binding], crowded: Sequence[Crowded]) -> None:
    """Print what a search found: the extremes of the front, how many designs, what confines them, time and place."""
    info, problem = run.info, run.problem
    goals = [(g.measure.name, g.measure.unit, g.sense) for g in problem.goals]
    print_table(
        problem.title,
        ["best", *(f"{name} ({sense})" for name, _, sense in goals), "design"],
        [[e.goal, *(write(e.values[name], unit) for name, unit, _ in goals), str(e.design)] for e in extremes],
    )
    out = console()
    count = "1 design" if info["designs"] == 1 else f"{info['designs']} designs"
    out.print(
        f"{count} on the front, thinned from {info['archive']}; "
        f"hypervolume {info['hypervolume']:.4f} of the box in run.json"
    )
    if not info["designs"]:
        out.print("no design meets every limit yet")
    elif binding:
        parts = [f"{b.name} ({b.bound_name} {write(b.bound, b.unit)}: {100 * b.share:.0f} %)" for b in binding]
        out.print("limits that bind, with the share of designs at each: " + escape(", ".join(parts)))
    else:
        out.print("no limit binds: the goals alone shape the front")
    if crowded:
        parts = [f"{c.name} ({write(c.end, c.unit)}: {100 * c.share:.0f} %)" for c in crowded]
        out.print("sizes at an end of their range: " + escape(", ".join(parts)) + "; wider ranges may give more")
    stopped = {"budget": "budget used up", "stalled": "stalled: no more gain", "interrupted": "interrupted"}
    out.print(
        f"{info['evaluations']} evaluations in {info['seconds']:.1f} s, {info['generations']} generations "
        f"({stopped[info['stopped']]})"
    )
    out.print(f"run: {escape(str(run.path))}")
    out.print(CAUTION)


def print_front(run: Run, table: pd.DataFrame) -> None:
    """Print designs: goals first, also as simulated, then sizes, limits, and other measures that the problem names."""
    problem = run.problem
    goals = [column(g.measure.name, g.measure.unit) for g in problem.goals]
    simulated = [
        c for c in (simulated_column(g.measure) for g in problem.goals) if c in table and table[c].notna().any()
    ]
    sizes = [column(s.name, s.unit) for s in problem.topology.sizes]
    free = [column(r.size.name, r.size.unit) for r in problem.space.free]
    limits = [column(x.measure.name, x.measure.unit) for x in problem.limits]
    own = [c for c in (column(m.name, m.unit) for m in problem.own_measures.values()) if c in table]
    chosen = list(dict.fromkeys(["design", *goals, *simulated, *(c for c in sizes if c in free), *limits, *own]))
    headings = [c.split(" [")[0] for c in chosen]
    rows = [
        [str(int(row["design"]))] + [write(float(row[c]), unit_of(c)) for c in chosen[1:]]
        for _, row in table[chosen].iterrows()
    ]
    print_table(f"{problem.title}: {len(table)} of {len(run.front)} designs", headings, rows, left=0)


def print_caution() -> None:
    """Print what no figure here replaces."""
    console().print(CAUTION)


def json_number(value: float) -> float | str | None:
    """Return a number as JSON can hold it: ``unlimited`` or ``-unlimited`` for infinity, null for what is undefined."""
    if isinstance(value, np.generic):
        value = value.item()
    if math.isnan(value):
        return None
    return write(value, "") if math.isinf(value) else value
