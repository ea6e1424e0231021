"""The fronts of several runs beside each other, in the goals that they share."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import moocore
import numpy as np
from numpy.typing import NDArray

from optisize.errors import InputError, listing
from optisize.evolution.archive import Front
from optisize.front.run import Run, load_run
from optisize.front.table import measured
from optisize.problem.evaluate import Goal
from optisize.problem.own_measures import origin, taken_at
from optisize.process.law import Array

MOST = 8  # runs that can be told apart in one figure
NO_GOAL = ""
DECIMALS = 9  # of a loss; designs that differ by less are equal
MARGIN = 0.05  # of the range of all fronts, by which the box goes beyond the worst figure


@dataclass(frozen=True)
class Entry:
    """One run among those that are compared.

    Attributes:
        name: what to call it.
        run: the run.
        losses: of its designs in the shared goals, (M, N).
    """

    name: str
    run: Run
    losses: Array


@dataclass(frozen=True)
class Fronts:
    """Several runs in the goals that they share.

    Attributes:
        entries: the runs, R of them.
        goals: what they share, M of them, in the order of the first run.
        left_out: the other goals by name, and what each is in the runs that have it.
    """

    entries: tuple[Entry, ...]
    goals: tuple[Goal, ...]
    left_out: dict[str, str]

    @property
    def names(self) -> list[str]:
        """What to call each run."""
        return [entry.name for entry in self.entries]

    @cached_property
    def losses(self) -> Array:
        """The losses of all designs, run by run, (M, N)."""
        return np.concatenate([entry.losses for entry in self.entries], axis=1)

    @cached_property
    def owner(self) -> NDArray[np.intp]:
        """The run that each of all designs belongs to, (N,)."""
        return np.repeat(np.arange(len(self.entries)), [entry.losses.shape[1] for entry in self.entries])

    @cached_property
    def ideal(self) -> Array:
        """The best loss of any design in each goal, (M,)."""
        return self.losses.min(axis=1)

    @cached_property
    def reference(self) -> Array:
        """The loss in each goal that is a little worse than that of any design, (M,)."""
        worst = self.losses.max(axis=1)
        return worst + MARGIN * np.maximum(worst - self.ideal, 1e-6)

    @cached_property
    def hypervolumes(self) -> Array:
        """The share of the box from `ideal` to `reference`, one box for all, that each run dominates, (R,)."""
        return np.array([self._hypervolume(self.owner == i) for i in range(len(self.entries))])

    @cached_property
    def hypervolume(self) -> float:
        """The share of the box that all runs dominate together."""
        return self._hypervolume(self.owner >= 0)

    @cached_property
    def alone(self) -> Array:
        """The share of the box that would be lost without each run, (R,)."""
        return np.array([self.hypervolume - self._hypervolume(self.owner != i) for i in range(len(self.entries))])

    def _hypervolume(self, chosen: NDArray[np.bool_]) -> float:
        return hypervolume(self.losses[:, chosen], self.ideal, self.reference)

    @cached_property
    def joint(self) -> tuple[NDArray[np.bool_], ...]:
        """Of each run, which of its designs no design of any run beats in the shared goals, each (N,)."""
        keep = moocore.is_nondominated(np.ascontiguousarray(self.losses.T), keep_weakly=True)
        return tuple(keep[self.owner == i] for i in range(len(self.entries)))

    @cached_property
    def coverage(self) -> Array:
        """The share of the designs of each run (column) that a design of another one (row) beats or equals, (R, R).

        Source: Zitzler, Thiele, Multiobjective optimization using evolutionary algorithms: a comparative case study,
        Parallel Problem Solving from Nature V, 1998 (value from memory).
        """
        return np.array([[covered(a.losses, b.losses) for b in self.entries] for a in self.entries])


def hypervolume(losses: Array, ideal: Array, reference: Array) -> float:
    """Return the share of the box from ideal to reference, both (M,), that losses (M, N) dominate."""
    return Front(np.empty((0, losses.shape[1])), losses).hypervolume(ideal, reference)


def covered(losses: Array, others: Array) -> float:
    """Return the share of `others` (M, K) that a column of `losses` (M, N) beats or equals in every goal."""
    ahead = np.ones((losses.shape[1], others.shape[1]), dtype=bool)
    for own, theirs in zip(losses, others, strict=True):
        ahead &= own[:, None] <= theirs[None, :]
    return float(ahead.any(axis=0).mean())


def load_fronts(directories: Sequence[Path]) -> Fronts:
    """Read runs and put their fronts beside each other.

    Raises InputError for fewer runs than two or too many, one that is named twice or has no design, and for runs that
    do not share two goals.
    """
    if not 2 <= len(directories) <= MOST:
        found = "one run" if len(directories) == 1 else f"{len(directories)} runs"
        raise InputError(f"RUN: found {found}; two to {MOST} can be compared at once")
    places = [path.resolve() for path in directories]
    twice = next((path for i, path in enumerate(directories) if places[i] in places[:i]), None)
    if twice is not None:
        raise InputError(f"{twice}: found twice; each run is allowed once")
    return compare(names_of(directories), [load_run(path) for path in directories])


def names_of(directories: Sequence[Path]) -> list[str]:
    """Return what to call runs: the names of their directories, or their paths where names are alike."""
    names = [path.resolve().name for path in directories]
    return [str(path) if names.count(name) > 1 else name for path, name in zip(directories, names, strict=True)]


def compare(names: Sequence[str], runs: Sequence[Run]) -> Fronts:
    """Put the fronts of runs beside each other, under the names given.

    Raises InputError for a run without a design, and for runs that do not share two goals.
    """
    empty = next((name for name, run in zip(names, runs, strict=True) if not len(run.front)), None)
    if empty is not None:
        raise InputError(f"{empty}: its front is empty; there is nothing to compare")
    goals, left_out = shared_goals(names, runs)
    if len(goals) < 2:
        shared = f"only {goals[0].measure.name}" if goals else "no goal"
        others = "; ".join(f"{name}: {what}" for name, what in left_out.items())
        raise InputError(
            f"the runs share {shared}; two goals are needed that are alike in name, settings and sense. {others}"
        )
    entries = [Entry(name, run, _losses(name, run, goals)) for name, run in zip(names, runs, strict=True)]
    return Fronts(tuple(entries), goals, left_out)


def _losses(name: str, run: Run, goals: Sequence[Goal]) -> Array:
    losses = np.array([goal.loss(measured(run.front, goal.measure)) for goal in goals])
    for goal, row in zip(goals, losses, strict=True):
        if not np.isfinite(row).all():
            raise InputError(f"{name}: the run is damaged: {goal.measure.name} has a figure that is not finite")
    return np.round(losses, DECIMALS)


def shared_goals(names: Sequence[str], runs: Sequence[Run]) -> tuple[tuple[Goal, ...], dict[str, str]]:
    """Return the goals that all runs share, and in words what the others are in the runs that have them."""
    known = [{goal.measure.name: goal for goal in run.problem.goals} for run in runs]
    shared, left_out = [], {}
    for name in dict.fromkeys(name for goals in known for name in goals):
        words = [_in_words(goals.get(name)) for goals in known]
        if len(set(words)) == 1:
            shared.append(known[0][name])
            continue
        left_out[name] = ", ".join(
            f"{what} in {listing(n for n, word in zip(names, words, strict=True) if word == what)}"
            for what in dict.fromkeys(word for word in words if word != NO_GOAL)
        )
    return tuple(shared), left_out


def _in_words(goal: Goal | None) -> str:
    """Say what a goal is; two goals are alike if these words are."""
    if goal is None:
        return NO_GOAL
    m = goal.measure
    of = f" of {origin(m)}" if origin(m) != m.name else ""
    at = f" {taken_at(m)}" if m.parameters else ""
    return f"{goal.sense}{of}{at}"
