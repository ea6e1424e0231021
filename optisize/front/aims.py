"""What a designer asks of a front, and how far each design is from it: columns with a direction, conditions, wishes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.errors import InputError, shorten
from optisize.front.choose import Condition, parse_condition
from optisize.front.run import Run
from optisize.front.table import SIMULATED, find_column, measured, unit_of
from optisize.problem.evaluate import Goal, Problem
from optisize.process.law import Array
from optisize.quantities import QuantityError, read, write
from optisize.stage.catalogue import Measure, Sense


@dataclass(frozen=True)
class Axis:
    """A column of a front with the direction that is wanted.

    Attributes:
        name, unit: as in the column's heading.
        sense: ``max`` or ``min``.
        values: of the designs [unit], (N,); magnitudes where goals act on the magnitude.
        losses: the same where smaller is better, on the scale on which designs differ, (N,).
    """

    name: str
    unit: str
    sense: Sense
    values: Array
    losses: Array

    @property
    def span(self) -> float:
        """The range of the losses over the front; one where there is none."""
        known = self.losses[np.isfinite(self.losses)]
        return float(np.ptp(known)) if len(known) and np.ptp(known) > 0.0 else 1.0


@dataclass(frozen=True)
class Aim:
    """A condition or a wish on the designs of a front.

    Attributes:
        text: as it was asked, in engineering notation: ``gain>=40 dB``.
        name, unit: of the column.
        bound: what was asked [unit].
        values: of the designs [unit], (N,).
        holds: which designs meet it, (N,) of bool.
        distances: how far each is from meeting it, in ranges of the front, (N,); negative where it is exceeded.
    """

    text: str
    name: str
    unit: str
    bound: float
    values: Array
    holds: NDArray[np.bool_]
    distances: Array


def goal_axes(run: Run) -> list[Axis]:
    """Return the goals of a run, in their order."""
    return [_axis(g.measure.name, g.measure, measured(run.front, g.measure), g.sense) for g in run.problem.goals]


def axis(run: Run, name: str, sense: Sense | None = None) -> Axis:
    """Return a column of the front with the direction that is wanted; that of the goal or the usual one where None.

    Raises InputError for an unknown column, and for a size without a direction.
    """
    heading = find_column(run.front.drop(columns="design"), name)
    values = run.front[heading].to_numpy(dtype=float)
    sizes = {s.name for s in run.problem.topology.sizes}
    if name in sizes:
        if sense is None:
            raise InputError(f'"{name}" is a size, and no direction of it is better')
        sign = -1.0 if sense == "max" else 1.0
        return Axis(name, unit_of(heading), sense, values, sign * np.log10(values))
    measure = run.problem.find(name.removeprefix(SIMULATED))
    goals = {g.measure.name: g.sense for g in run.problem.goals}
    return _axis(name, measure, values, sense or goals.get(measure.name, measure.better))


def _axis(name: str, measure: Measure, values: Array, sense: Sense) -> Axis:
    shown = np.abs(values) if measure.signed else values
    return Axis(name, measure.unit, sense, shown, Goal(measure, sense).loss(values))


def conditions(run: Run, texts: Sequence[str]) -> list[Aim]:
    """Return conditions such as ``gain>=40 dB`` on the designs of a run.

    Raises InputError for one that cannot be read.
    """
    return [_of_condition(run, parse_condition(text, run.front), text) for text in texts]


def _of_condition(run: Run, condition: Condition, text: str) -> Aim:
    values = run.front[condition.column].to_numpy(dtype=float)
    name = condition.column.split(" [")[0]
    figures, bound = values, condition.value
    if bound > 0.0 and _by_factors(run.problem, name) and (values[~np.isnan(values)] > 0.0).all():
        figures, bound = np.log10(values), float(np.log10(bound))
    above, below = bound - figures, figures - bound
    distances = above if ">" in condition.relation else below if "<" in condition.relation else np.abs(above)
    held = condition.holds(values)
    scale = _span(figures, bound)
    # A strict bound that is just reached, or a value at rounding, has a distance of zero without being met.
    shares = np.where(held, np.minimum(distances / scale, 0.0), np.maximum(distances / scale, np.finfo(float).tiny))
    return Aim(" ".join(text.split()), name, unit_of(condition.column), condition.value, values, held, shares)


def _span(figures: Array, bound: float) -> float:
    known = figures[np.isfinite(figures)]
    span = float(np.ptp(known)) if len(known) else 0.0
    return span if span > 0.0 else max(abs(bound), 1e-30)


def _by_factors(problem: Problem, name: str) -> bool:
    """Tell whether designs differ by factors in a column rather than by differences."""
    if name in {s.name for s in problem.topology.sizes}:
        return True
    try:
        return problem.find(name.removeprefix(SIMULATED)).scale == "log"
    except InputError:
        return False  # the number of a design, or a column of someone else's


def wishes(run: Run, wanted: Mapping[str, str | float]) -> list[Aim]:
    """Return wishes by name, each a quantity with its unit or a number in SI units.

    A wish is met by a design that is as good or better, in the direction of the goal, or the usual one of a measure.

    Raises InputError for an unknown measure, a size or a wrong unit.
    """
    return [_wish(run, name, value) for name, value in wanted.items()]


def _wish(run: Run, name: str, value: str | float) -> Aim:
    try:
        on = axis(run, name)
        bound = read(value, on.unit)
    except (InputError, QuantityError) as error:
        hint = ' (for sizes there is --where "input.width<=50 um")' if "is a size" in str(error) else ""
        raise InputError(f"--wish: found {shorten(f'{name}={value}')}; {error}{hint}") from None
    measure = run.problem.find(name.removeprefix(SIMULATED))
    loss = float(Goal(measure, on.sense).loss(np.array([bound]))[0])
    relation = ">=" if on.sense == "max" else "<="
    held = Condition(name, relation, bound).holds(on.values)
    distances = (on.losses - loss) / on.span
    text = f"{name}{relation}{write(bound, on.unit, 6)}"
    return Aim(text, name, on.unit, bound, on.values, held, np.where(held, np.minimum(distances, 0.0), distances))


def read_wishes(texts: Sequence[str]) -> dict[str, str]:
    """Return wishes such as ``gain=50 dB`` by name.

    Raises InputError for something else, and for a name that is there twice.
    """
    found: dict[str, str] = {}
    for text in texts:
        name, equals, value = (part.strip() for part in text.partition("="))
        if not (name and equals and value) or name[-1] in "<>" or value[0] in "=<>":
            raise InputError(f'--wish: found {shorten(text)}; a wish such as "gain=50 dB" is needed')
        if name in found:
            raise InputError(f"--wish: {name} is wished twice")
        found[name] = value
    return found


def met_by_all(aims: Sequence[Aim], count: int) -> NDArray[np.bool_]:
    """Return which of N designs meet every aim, (N,) of bool."""
    return np.logical_and.reduce([np.ones(count, dtype=bool), *(a.holds for a in aims)])
