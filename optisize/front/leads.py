"""Where each of several fronts is ahead: the best figure of each run for a level that another goal has to reach.

The question is a designer's: for a supply current of at most so much, what is the most gain of each run? Asked for
every level, the answers make bands of levels, each with the run that is ahead in it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from optisize.front.fronts import Fronts, hypervolume
from optisize.problem.evaluate import Goal
from optisize.process.law import Array

SAME = {"log": 0.01, "linear": 0.05}  # losses that are alike to a designer: 2.3 % of a current, 0.3 dB of a gain
SAME_SHARE = 0.005  # hypervolumes that are
WINDOW = 0.05  # of the range of a goal, over which the runs are compared at a level
NARROW = 0.03  # of that range; narrower bands are scatter of the search and go to their neighbours
LEVELS = 201  # at which the runs are compared
ROWS = 8  # of a table, at most about so many


@dataclass(frozen=True)
class Band:
    """A range of levels in which the same runs are ahead.

    Attributes:
        start: the strictest level of it, in the measure's unit.
        end: where the next band begins; None for the loosest band.
        ahead: the runs that are ahead, by position; several where they are alike.
        alone_to: the level, within the band, down to which no other run has a design; None where another one has.
    """

    start: float
    end: float | None
    ahead: tuple[int, ...]
    alone_to: float | None


@dataclass(frozen=True)
class Level:
    """One goal as the level that has to be reached, and how the runs stand in the others.

    Attributes:
        goal: whose levels.
        levels: some of them in round figures, the strictest first, (K,) in the measure's unit; the last one is open.
        best: by the name of each other goal, the best figure of each run, (R, K); not a number where it has no design.
        bands: by the name of each other goal, who is ahead in it at which levels.
        together: the same for the other goals together, by hypervolume; none where there is only one.
    """

    goal: Goal
    levels: Array
    best: dict[str, Array]
    bands: dict[str, tuple[Band, ...]]
    together: tuple[Band, ...]


def levels_of(fronts: Fronts) -> list[Level]:
    """Return how the runs stand for the levels of each goal."""
    return [_level(fronts, i) for i in range(len(fronts.goals))]


def _level(fronts: Fronts, place: int) -> Level:
    goal = fronts.goals[place]
    others = [i for i in range(len(fronts.goals)) if i != place]
    shown = round_levels(goal, float(fronts.ideal[place]), float(fronts.losses[place].max()))
    at = np.append(np.round(goal.loss(shown), 9), math.inf)
    every = _every_level(fronts, place)
    best, bands = {}, {}
    for other in others:
        name, of = fronts.goals[other].measure.name, fronts.goals[other]
        found = _best_of_each(fronts, place, other, at)
        best[name] = np.where(np.isfinite(found), of.value(np.where(np.isfinite(found), found, 0.0)), np.nan)
        scores = smoothed(every, -_best_of_each(fronts, place, other, every))
        bands[name] = bands_of(goal, every, scores, SAME[of.measure.scale])
    together: tuple[Band, ...] = ()
    if len(others) > 1:
        scores = smoothed(every, _hypervolumes(fronts, place, others, every))
        together = bands_of(goal, every, scores, SAME_SHARE)
    return Level(goal, np.append(shown, math.inf), best, bands, together)


def _every_level(fronts: Fronts, place: int) -> Array:
    """Return losses of a goal from its best to its worst, rising, among them the strictest that each run reaches."""
    reach = [float(entry.losses[place].min()) for entry in fronts.entries]
    return np.unique([*np.linspace(fronts.ideal[place], fronts.losses[place].max(), LEVELS), *reach])


def smoothed(levels: Array, scores: Array) -> Array:
    """Return scores (R, K) at levels (K,) as means over a window, the same one for every run that reaches a level.

    The best of a front rises in steps from design to design. Steps of one front fall between those of another, so
    without this the lead would change hands at each of them.
    """
    half = 0.5 * WINDOW * float(levels[-1] - levels[0]) * (1.0 + 1e-9)  # with both ends
    result = np.full_like(scores, -math.inf)
    first = np.isfinite(scores).argmax(axis=1)
    for k, level in enumerate(levels):
        there = np.isfinite(scores[:, k])
        begin = max(int(np.searchsorted(levels, level - half)), int(first[there].max()))
        end = int(np.searchsorted(levels, level + half, side="right"))
        result[there, k] = scores[there, begin:end].mean(axis=1)
    return result


def _best_of_each(fronts: Fronts, place: int, other: int, levels: Array) -> Array:
    return np.array([best_within(entry.losses[place], entry.losses[other], levels) for entry in fronts.entries])


def best_within(losses: Array, others: Array, levels: Array) -> Array:
    """Return the smallest of `others` (N,) among the designs whose `losses` (N,) reach each level (K,), (K,).

    Infinite where no design does.
    """
    order = np.argsort(losses, kind="stable")
    best = np.concatenate([[math.inf], np.minimum.accumulate(others[order])])
    return best[np.searchsorted(losses[order], levels, side="right")]


def _hypervolumes(fronts: Fronts, place: int, others: list[int], levels: Array) -> Array:
    """Return the hypervolume in the other goals of the designs of each run that reach each level, (R, K)."""
    ideal, reference = fronts.ideal[others], fronts.reference[others]
    result = np.full((len(fronts.entries), len(levels)), -math.inf)
    for row, entry in zip(result, fronts.entries, strict=True):
        for k, level in enumerate(levels):
            reached = entry.losses[place] <= level
            if reached.any():
                row[k] = hypervolume(entry.losses[np.ix_(others, reached)], ideal, reference)
    return result


def bands_of(goal: Goal, levels: Array, scores: Array, same: float) -> tuple[Band, ...]:
    """Return the bands of levels in which the same runs are ahead.

    Args:
        goal: whose levels.
        levels: its losses, rising, (K,); the first one is reached by some run.
        scores: of each run at each level, more is better, (R, K); -inf where it has no design.
        same: scores that differ by no more are alike.
    """
    near = scores >= scores.max(axis=0) - same
    every = [tuple(int(i) for i in np.flatnonzero(n)) for n in near.T]
    begins = [k for k in range(len(every)) if k == 0 or every[k] != every[k - 1]]
    stretches = [Stretch(float(levels[k]), every[k]) for k in begins]
    reach = levels[np.isfinite(scores).argmax(axis=1)]  # the strictest level of each run
    reach = np.where(reach <= levels[0] + SAME[goal.measure.scale], levels[0], reach)
    kept = _without_scatter(stretches, reach, NARROW * float(levels[-1] - levels[0]))
    ends = [*(after.start for after in kept[1:]), None]
    return tuple(_band(goal, stretch, end, reach) for stretch, end in zip(kept, ends, strict=True))


def _band(goal: Goal, stretch: Stretch, end: float | None, reach: Array) -> Band:
    second = min((float(x) for i, x in enumerate(reach) if i not in stretch.ahead), default=stretch.start)
    alone = len(stretch.ahead) == 1 and second > stretch.start
    to = (second if end is None else min(second, end)) if alone else None
    start, end, to = (None if x is None else float(goal.value(np.array([x]))[0]) for x in (stretch.start, end, to))
    assert start is not None
    return Band(start, end, stretch.ahead, to)


class Stretch(NamedTuple):
    """Levels, as losses, from a start to that of the next stretch, and who is ahead in them."""

    start: float
    ahead: tuple[int, ...]


def _without_scatter(stretches: Sequence[Stretch], reach: Array, least: float) -> list[Stretch]:
    """Leave out what scatter of the search makes of a comparison.

    A stretch that is narrower than `least` goes to the one before it, the narrowest first; the first one to the one
    after it, if that one's runs reach so far. The last one has no end and stays. Then, a run that is ahead on both
    sides of a stretch and alike within it is ahead throughout.
    """
    found = list(stretches)
    while True:
        widths = [after.start - before.start for before, after in pairwise(found)]
        if widths and max(reach[list(found[1].ahead)]) > found[0].start:
            widths[0] = math.inf
        if not widths or min(widths) >= least:
            break
        k = int(np.argmin(widths))
        if k == 0:
            found[1] = Stretch(found[0].start, found[1].ahead)
        del found[k]
        found = _joined(found)
    for k in range(1, len(found) - 1):
        before, after = found[k - 1].ahead, found[k + 1].ahead
        if before == after and set(before) < set(found[k].ahead):
            found[k] = Stretch(found[k].start, before)
    return _joined(found)


def _joined(stretches: Sequence[Stretch]) -> list[Stretch]:
    """Return stretches with neighbours that have the same runs ahead as one."""
    return [s for k, s in enumerate(stretches) if k == 0 or s.ahead != stretches[k - 1].ahead]


def round_levels(goal: Goal, best: float, worst: float) -> Array:
    """Return some round figures of a goal between two losses, the strictest first, in the measure's unit."""
    ends = sorted(float(x) for x in goal.value(np.array([best, worst])))
    wide = goal.measure.scale == "log" and ends[0] > 0.0 and ends[1] / ends[0] > 10.0
    found = _decades(*ends) if wide else _steps(*ends)
    return found[::-1] if goal.sense == "max" else found


def _steps(low: float, high: float) -> Array:
    """Return the multiples of a round step that lie between two ends, rising."""
    if high <= low:
        return np.array([high])
    rough = (high - low) / ROWS
    decade = 10.0 ** math.floor(math.log10(rough))
    step = next(m * decade for m in (1.0, 2.0, 5.0, 10.0) if m * decade >= rough * (1.0 - 1e-9))
    multiples = np.arange(math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9) + 1)
    return np.array([float(f"{m * step:.12g}") for m in multiples])


def _decades(low: float, high: float) -> Array:
    """Return the figures 1, 2 and 5 of every decade between two ends, or only the decades where these are many."""
    exponents = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    figures = (1, 2, 5) if math.log10(high / low) < 3.0 else (1,)
    every = np.array([float(f"{m}e{e}") for e in exponents for m in figures])
    return every[(every >= low) & (every <= high)]
