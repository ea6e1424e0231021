"""One design at every corner of its process, and at other temperatures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from optisize.errors import InputError, shorten
from optisize.front.table import measure_names
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.quantities import QuantityError, read

COLDEST, HOTTEST = 150.0, 500.0  # K, as a problem file allows


@dataclass(frozen=True)
class Corners:
    """The measures of one design under several conditions.

    Attributes:
        problem: its own conditions come first.
        conditions: corner and absolute temperature of each column.
        measures: by name, each (C,).
        limits_met: whether each column meets every limit, (C,) of bool.
    """

    problem: Problem
    conditions: tuple[tuple[str, float], ...]
    measures: Mapping[str, Array]
    limits_met: tuple[bool, ...]


def at_corners(problem: Problem, sizes: Mapping[str, Array], temperatures: Sequence[str] = ()) -> Corners:
    """Return every measure of one sizing at every corner, at the problem's temperature and at others.

    Args:
        problem: the problem.
        sizes: every size of the stage, each (1,).
        temperatures: as text, such as ``85 degC``.

    Raises InputError for a temperature that is none.
    """
    own = problem.conditions
    kelvins = [own.temperature, *(_temperature(text) for text in temperatures)]
    corners = [own.corner, *(name for name in problem.process.corner_names if name != own.corner)]
    columns = tuple(dict.fromkeys((corner, kelvin) for kelvin in kelvins for corner in corners))
    names, found, met = measure_names(problem), [], []
    for corner, kelvin in columns:
        moved = replace(problem, conditions=replace(own, corner=corner, temperature=kelvin))
        values = moved.measure(sizes, names)
        found.append(values)
        met.append(bool((moved.judge(values).violation <= 0.0).all()))
    return Corners(
        problem, columns, {name: np.concatenate([values[name] for values in found]) for name in names}, tuple(met)
    )


def _temperature(text: str) -> float:
    try:
        kelvin = read(text, "K")
    except QuantityError as error:
        raise InputError(f"--temperature: found {shorten(text)}; {error}") from None
    if not COLDEST < kelvin < HOTTEST:
        raise InputError(f"--temperature: found {shorten(text)}; allowed are {COLDEST:g} K to {HOTTEST:g} K")
    return kelvin
