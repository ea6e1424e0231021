"""How the measures of one sizing move when one size moves alone: by 1 %, and by one step of what can be drawn."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from optisize.front.table import measure_names
from optisize.problem.evaluate import Limit, Problem
from optisize.problem.space import SizeRange
from optisize.process.law import Array
from optisize.stage.elements import Size
from optisize.stage.measures import Measure

PERCENT = 0.01
SAME_LINEAR = 2e-5  # of a difference that matters: what the solver resolves of headroom and swing, mostly
SAME_RELATIVE = 1e-6
REACH = 1.0 + 1e-9  # a bound of a range, rounding aside


@dataclass(frozen=True)
class Sensitivity:
    """How M measures of one sizing move with each of its S sizes alone.

    A change is a ratio less one for a measure on a logarithmic scale, a difference in the measure's unit otherwise;
    of the magnitude where goals and limits act on it. It is zero where it is below what the solver resolves, and not a
    number where the moved sizing has no such figure or cannot be drawn.

    The 1 % is not snapped to the grid, a number of units counts as a fraction, and either direction is taken as it is,
    without the mean of both: a figure that jumps with the number of fingers, or that another transistor begins to
    limit, moves differently up and down, and a designer has to see it.

    Attributes:
        sizes: the sizes of the stage.
        at: their values [SI], (S,).
        steps: from them down and up to the next value that can be drawn or set [SI], (2, S); not a number where there
            is none.
        measures: goals, limits, other measures of the problem, and the rest of the catalogue as far as it is finite.
        values: the measures [SI], with their sign, (M,).
        less, more: changes for -1 % and for +1 % of each size, (M, S).
        down, up: changes for one step down and up, (M, S).
    """

    sizes: tuple[Size, ...]
    at: Array
    steps: Array
    measures: tuple[Measure, ...]
    values: Array
    less: Array
    more: Array
    down: Array
    up: Array


def sensitivity(problem: Problem, sizes: Mapping[str, Array]) -> Sensitivity:
    """Return how the measures of one sizing, each size (1,) in SI units, move; all moved sizings are solved together.

    Raises InputError for a measure that the stage does not have.
    """
    given = problem.topology.sizes
    at = np.array([float(sizes[size.name][0]) for size in given])
    around = [problem.space.neighbours(size, float(value)) for size, value in zip(given, at, strict=True)]
    steps = np.array(around, dtype=float).T - at  # None becomes not a number
    moves = np.concatenate([at * [[-PERCENT], [PERCENT]], steps])
    names = measure_names(problem)
    values = problem.measure(_moved(given, at, moves), names)
    shown = [m for m in map(problem.find, names) if m.name in problem.needed or np.isfinite(values[m.name][0])]
    changes = np.array([_change(m, values[m.name]).reshape(moves.shape) for m in shown])
    less, more, down, up = np.where(np.isnan(moves), np.nan, changes).transpose(1, 0, 2)
    own = np.array([values[m.name][0] for m in shown])
    return Sensitivity(given, at, steps, tuple(shown), own, less, more, down, up)


def _moved(given: tuple[Size, ...], at: Array, moves: Array) -> dict[str, Array]:
    """Return the sizing itself and beside it, for each of K moves (K, S), the one that it makes alone: (1 + K S,)."""
    count = len(given)
    each = np.tile(at, (*moves.shape, 1))
    each[:, range(count), range(count)] += np.nan_to_num(moves)
    columns = np.concatenate([at[None], each.reshape(-1, count)]).T
    return {size.name: column for size, column in zip(given, columns, strict=True)}


@np.errstate(all="ignore")
def _change(measure: Measure, values: Array) -> Array:
    """Return how the others of (1 + N,) values differ from the first, (N,)."""
    figures = np.abs(values) if measure.signed else values
    before, after = figures[0], figures[1:]
    relative = measure.scale == "log"
    change = after / before - 1.0 if relative else after - before
    same = np.abs(change) < (SAME_RELATIVE if relative else SAME_LINEAR * measure.step)
    return np.where(same | (after == before), 0.0, change)


@dataclass(frozen=True)
class Help:
    """One size that brings a missed limit nearer: by ``+1`` or ``-1`` per cent of it, and how the measure changes."""

    size: str
    percent: int
    change: float


@dataclass(frozen=True)
class Missed:
    """A bound that a sizing misses.

    Attributes:
        measure: what is bounded, ``min`` or ``max`` by `kind`.
        bound, value: in the measure's unit; the magnitude where the limit acts on it.
        helps: the sizes that bring it nearer, the one that does most for 1 % first.
    """

    measure: Measure
    kind: str
    bound: float
    value: float
    helps: tuple[Help, ...]

    @property
    def by(self) -> float:
        """How far the measure is from the bound [the measure's unit]."""
        return abs(self.bound - self.value)


def missed_limits(problem: Problem, found: Sensitivity) -> list[Missed]:
    """Return every bound that a sizing misses, with what helps.

    A size helps by 1 % up or down, whichever does more, if its next value that way can be drawn and lies in the range
    that the problem gives it; one that the problem fixes has that value only.
    """
    missed = []
    for limit in problem.limits:
        row = [m.name for m in found.measures].index(limit.measure.name)
        value = found.values[row : row + 1]
        for kind, bound in limit.bounds:
            alone = Limit(limit.measure, *((bound, None) if kind == "min" else (None, bound)))
            if not alone.met(value)[0]:
                figure = float(np.abs(value[0]) if limit.measure.signed else value[0])
                missed.append(Missed(limit.measure, kind, bound, figure, _helps(problem, found, row, kind)))
    return missed


def _helps(problem: Problem, found: Sensitivity, row: int, kind: str) -> tuple[Help, ...]:
    toward = 1.0 if kind == "min" else -1.0
    helps = []
    for i, r in enumerate(problem.space.ranges):
        below, above = _inside(r, found.at[i] + found.steps[:, i])
        ways = [Help(r.size.name, -1, float(found.less[row, i]))] if below else []
        ways += [Help(r.size.name, 1, float(found.more[row, i]))] if above else []
        helps += sorted((x for x in ways if toward * x.change > 0.0), key=lambda x: -toward * x.change)[:1]
    return tuple(sorted(helps, key=lambda x: -toward * x.change))


def _inside(r: SizeRange, neighbours: Array) -> tuple[bool, bool]:
    """Tell of the next values down and up, (2,), whether the range of a size has them."""
    below, above = neighbours
    return bool(below * REACH >= r.low), bool(above <= r.high * REACH)
