"""One design of a front for a wish, or a short list of designs along it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from optisize.errors import InputError
from optisize.evolution.archive import spread
from optisize.front import aims, preference, reasons
from optisize.front.aims import Aim, Axis
from optisize.front.choice import Choice, Missing
from optisize.front.neighbours import neighbours
from optisize.front.run import Run
from optisize.process.law import Array


def choose(
    run: Run,
    *,
    least: str | None = None,
    most: str | None = None,
    where: Sequence[str] = (),
    wishes: Mapping[str, str | float] | None = None,
    knee: bool = False,
) -> Choice:
    """Return one design of a front for a wish.

    Args:
        run: whose front it is.
        least, most: the measure or size that shall be smallest or largest; the magnitude of a signed measure.
        where: conditions that the design has to meet, such as ``gain>=40 dB``.
        wishes: what is wished of measures, by name, as text with a unit or in SI units. Of the designs that meet every
            wish it is the best balanced one in the goals without a wish; where all goals have one, the one that
            exceeds them most evenly.
        knee: the knee of the front, which is also the answer where nothing is asked (see `preference.knee`).

    Returns:
        The design. Where none meets the conditions or the wishes it is the nearest, and `missing` says by how much:
        the one whose largest miss, in ranges of the front, is smallest (see `preference.achievement`).

    Raises InputError for a name or quantity that makes no sense, for more than one rule, or for an empty front.
    """
    given = {"least": least is not None, "most": most is not None, "wish": bool(wishes), "knee": knee}
    rules = [rule for rule, there in given.items() if there]
    if len(rules) > 1:
        raise InputError(f"--{rules[0]} and --{rules[1]}: found both; one of them is allowed")
    question = _question(run, least, most, where, wishes or {})
    if not question.allowed.any():
        return _nearest(question, question.bounds, "condition", rules)
    if question.axis is not None:
        return _extreme(question, question.axis, rules[0])
    return _wished(question) if question.hopes else _knee(question)


@dataclass(frozen=True)
class _Question:
    """What is asked of a run: conditions, wishes, an axis; which designs meet the conditions, and all losses (M, N)."""

    run: Run
    goals: list[Axis]
    bounds: list[Aim]
    hopes: list[Aim]
    axis: Axis | None
    allowed: NDArray[np.bool_]
    losses: Array

    @property
    def pool(self) -> str:
        """From which designs is chosen, in words."""
        meeting = int(self.allowed.sum())
        return reasons.pool(len(self.run.front), meeting, self.bounds if meeting else ())

    @property
    def total(self) -> Array:
        """What decides among equals: the sum of the goals in ranges of the front, (N,)."""
        return preference.scaled(self.losses).sum(axis=0)

    def choice(self, position: int, rule: str, why: str) -> Choice:
        """Return the choice of a row, with its neighbours."""
        axes = list(self.goals)
        if self.axis is not None and self.axis.name not in [a.name for a in axes]:
            axes.insert(0, self.axis)
        found = neighbours(axes, position, self.bounds)
        first = self.axis.name if self.axis else self.hopes[0].name if self.hopes else axes[0].name
        along = next((a for a in axes if a.name == first), axes[0])
        steps = [n for n in found if n.axis == along.name]
        words = [] if any(n.better for n in steps) or len(self.run.front) == 1 else [reasons.end_text(along)]
        numbers = self.run.front["design"]
        words += [reasons.step_text(axes, n, int(numbers.iloc[n.position])) for n in steps]
        missing = tuple(Missing.of(a, position) for a in (*self.bounds, *self.hopes) if not a.holds[position])
        return Choice(self.run, position, rule, why, tuple(words), missing, tuple(found), tuple(axes))


def _question(
    run: Run, least: str | None, most: str | None, where: Sequence[str], wishes: Mapping[str, str | float]
) -> _Question:
    if not len(run.front):
        raise InputError(f"{run.path or 'the run'}: its front is empty, so there is no design to choose")
    goals, bounds, hopes = aims.goal_axes(run), aims.conditions(run, where), aims.wishes(run, wishes)
    axis = None
    for option, name, sense in (("least", least, "min"), ("most", most, "max")):
        if name is not None:
            try:
                axis = aims.axis(run, name, "max" if sense == "max" else "min")
            except InputError as error:
                raise InputError(f"--{option}: {error}") from None
            if np.isnan(axis.losses).all():
                raise InputError(f"--{option}: no design of the front has a figure of {name}")
    allowed = aims.met_by_all(bounds, len(run.front))
    return _Question(run, goals, bounds, hopes, axis, allowed, np.array([a.losses for a in goals]))


def _extreme(question: _Question, axis: Axis, rule: str) -> Choice:
    position = preference.best_of(axis.losses, question.total, among=question.allowed)
    return question.choice(position, rule, reasons.of_extreme(axis, rule, position, question.pool))


def _knee(question: _Question) -> Choice:
    losses = question.losses
    position, there_is = preference.knee(losses, question.allowed)
    if question.allowed.sum() == 1:
        return question.choice(position, "knee", f"{question.pool}.")
    if there_is:
        depth = float(preference.bulge(losses)[position])
        return question.choice(position, "knee", reasons.of_knee(depth, len(losses), question.pool))
    worst = float(preference.imbalance(losses)[position])
    return question.choice(position, "balance", reasons.of_balance(worst, question.pool))


def _wished(question: _Question) -> Choice:
    """Return the best of the designs that meet every wish, or the nearest to them where none does."""
    hopes, losses = question.hopes, question.losses
    meeting = question.allowed & aims.met_by_all(hopes, losses.shape[1])
    if not meeting.any():
        return _nearest(question, hopes, "wish", ["wish"])
    named = {h.name for h in hopes}
    free = [i for i, goal in enumerate(question.goals) if goal.name not in named]
    reached = preference.achievement(np.array([h.distances for h in hopes]))
    first = preference.scaled(losses)[free].max(axis=0) if free else reached
    position = preference.best_of(first, reached, question.total, among=meeting)
    names = [question.goals[i].name for i in free]
    why = reasons.of_wishes(hopes, int(meeting.sum()), position, names, question.pool)
    return question.choice(position, "wish", why)


def _nearest(question: _Question, asked: Sequence[Aim], what: str, rules: Sequence[str]) -> Choice:
    """Return the design that comes nearest to conditions or wishes that none meets."""
    miss = preference.achievement(np.array([a.distances for a in asked]))
    among = question.allowed if question.allowed.any() else None
    then = question.total if question.axis is None else question.axis.losses
    position = preference.best_of(miss, then, question.total, among=among)
    rule = rules[0] if rules else "knee"
    return question.choice(position, rule, reasons.of_nearest(asked, what, position, question.pool))


@dataclass(frozen=True)
class ShortList:
    """A few designs along a front.

    Attributes:
        front: their rows of the front, in its order.
        marks: what each of them is, such as ``best gain``; empty for most.
        meeting: how many designs of the front it was chosen from.
    """

    front: pd.DataFrame
    marks: tuple[str, ...]
    meeting: int


def short_list(run: Run, count: int, where: Sequence[str] = ()) -> ShortList:
    """Return a short list of designs that are well spread over a front and hold its extremes.

    First the best design of each goal, then always the one furthest from all that were taken, in ranges of the front
    (see `evolution.archive.spread`). The same front gives the same list. Empty where no design meets the conditions.

    Args:
        run: whose front it is.
        count: how many designs at most; the extremes come first where it is small.
        where: conditions that the designs have to meet.

    Raises InputError for a condition that makes no sense, or for an empty front.
    """
    question = _question(run, None, None, where, {})
    rows = np.flatnonzero(question.allowed)
    losses = question.losses[:, rows]
    chosen = rows[spread(losses, count)] if len(rows) else rows
    marks: dict[int, list[str]] = {int(row): [] for row in chosen}
    for goal, own in zip(question.goals, losses, strict=True):
        for row in chosen:
            if goal.losses[row] == own.min():
                marks[int(row)].append(f"best {goal.name}")
    if len(rows):
        middle, there_is = preference.knee(question.losses, question.allowed)
        marks.get(middle, []).append("knee" if there_is else "balance")
    return ShortList(run.front.iloc[chosen], tuple(", ".join(m) for m in marks.values()), len(rows))
