"""A manual sizing beside the designs of a front: which beat it, the nearest of them, and the first moves towards it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from optisize.errors import InputError
from optisize.front.card import Card, card
from optisize.front.compare import Better, dominating, latest_run_of
from optisize.front.moves import Target, moves_towards_nearest
from optisize.front.run import Run, load_run
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import origin
from optisize.process.law import Array


@dataclass(frozen=True)
class Assessment:
    """What is known of one sizing.

    Attributes:
        card: its measures against limits, how it is drawn, its operating point.
        against: the run that it was compared with; None where there is none.
        better: the designs of that run that beat it, the furthest ahead first; None where there is no run.
        nearest: the one of them whose sizes are nearest, and the moves towards it; None where none beats it, and where
            none does of this very problem: the run is of another stage, or was searched under other conditions.
    """

    card: Card
    against: str | None
    better: list[Better] | None
    nearest: Target | None = None

    @property
    def dominated_by(self) -> list[dict[str, Any]] | None:
        """The designs that beat the sizing, and by how much in each goal."""
        if self.better is None:
            return None
        return [{"design": b.design, "better_by": b.gains} for b in self.better]

    @property
    def left_on_the_table(self) -> dict[str, float] | None:
        """How much better each goal can be on the front without losing in any other [the measure's unit]."""
        if self.better is None:
            return None
        goals = [g.measure.name for g in self.card.problem.goals]
        return {name: max((b.gains[name] for b in self.better), default=0.0) for name in goals}


def assess_sizing(
    problem: Problem, sizes: Mapping[str, Array], against: Path | None = None, name: str = "the sizing"
) -> Assessment:
    """Assess one sizing, each size (1,), beside a run: the one given, or the newest of the same problem.

    A message calls the sizing by its `name`.

    Raises InputError when the sizing has no operating point, or the run has other goals.
    """
    own = card(problem, sizes, name)
    directory = str(against) if against is not None else latest_run_of(problem)
    if directory is None:
        return Assessment(own, None, None)
    run = load_run(directory)
    if _goals(problem) != _goals(run.problem):
        raise InputError(f"{directory}: was searched for other goals than this problem's")
    figures = {g.measure.name: np.array([own.measures[g.measure.name]]) for g in problem.goals}
    better = dominating(problem, figures, run.front)
    return Assessment(own, directory, better, _nearest(problem, sizes, run, better))


def _nearest(problem: Problem, sizes: Mapping[str, Array], run: Run, better: list[Better]) -> Target | None:
    """Return the nearest of the designs that beat a sizing, if they are of the same stage."""
    if not better or problem.topology.size_names != run.problem.topology.size_names:
        return None
    return moves_towards_nearest(problem, sizes, run.front, [b.design for b in better])


def _goals(problem: Problem) -> set[tuple[object, ...]]:
    """Return what tells the goals of one problem from another's: name, measure, settings and sense."""
    return {(g.measure.name, origin(g.measure), tuple(g.measure.taken_at.items()), g.sense) for g in problem.goals}
