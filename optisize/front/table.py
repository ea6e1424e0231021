"""A front as a table: one row a design, one column a size or measure, the unit in the column's name."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from optisize.errors import InputError, listing, nearest
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.stage.measures import CATALOGUE, Measure

LISTED = 300  # characters of the columns' names in a message
SIMULATED = "simulated "  # before the name of a column that the circuit simulator has filled
UNLIMITED = {"unlimited": np.inf, "-unlimited": -np.inf}  # infinite figures in words


def column(name: str, unit: str) -> str:
    """Return the name of a column: ``gain [dB]``, ``tail.units``."""
    return f"{name} [{unit}]" if unit else name


def simulated_column(measure: Measure) -> str:
    """Return the name of the column of a measure as the circuit simulator gives it: ``simulated gain [dB]``."""
    return column(f"{SIMULATED}{measure.name}", measure.unit)


def units(problem: Problem) -> dict[str, str]:
    """Return the unit of every size and measure of a problem's designs, in the order of the columns."""
    named = {size.name: size.unit for size in problem.topology.sizes}
    for name in measure_names(problem):
        named[name] = problem.find(name).unit
    return named


def measure_names(problem: Problem) -> tuple[str, ...]:
    """Return the goals first, then the limits, the problem's other measures, and the rest of the catalogue."""
    return tuple(dict.fromkeys([*problem.needed, *problem.own_measures, *CATALOGUE]))


def design_table(problem: Problem, sizes: Mapping[str, Array]) -> pd.DataFrame:
    """Return sizings with all their measures, feasible ones only, best in the first goal first, numbered from 1."""
    values = problem.measure(sizes, measure_names(problem))
    assessed = problem.judge(values)
    order = np.lexsort(assessed.losses[::-1])
    order = order[assessed.violation[order] <= 0.0]
    data = {column(name, unit): {**sizes, **values}[name][order] for name, unit in units(problem).items()}
    table = pd.DataFrame(data)
    table.insert(0, "design", np.arange(1, len(table) + 1))
    return table


def sizes_of(problem: Problem, table: pd.DataFrame) -> dict[str, Array]:
    """Return the sizes of the designs of a table, each (N,)."""
    return {s.name: table[column(s.name, s.unit)].to_numpy(dtype=float) for s in problem.topology.sizes}


def values_of(problem: Problem, table: pd.DataFrame) -> dict[str, Array]:
    """Return the measures of the designs of a table, each (N,)."""
    return {name: measured(table, problem.find(name)) for name in measure_names(problem)}


def measured(table: pd.DataFrame, measure: Measure) -> Array:
    """Return one measure of the designs of a table, (N,)."""
    return table[column(measure.name, measure.unit)].to_numpy(dtype=float)


def find_column(table: pd.DataFrame, name: str) -> str:
    """Return the column of a size or measure.

    Raises InputError for a name that the front does not have.
    """
    plain = {str(c).split(" [")[0]: str(c) for c in table.columns}
    if name not in plain:
        columns = listing(plain)
        if len(columns) > LISTED:  # what the problem names comes first
            columns = f"{columns[: columns.rindex(', ', 0, LISTED)]}, …"
        raise InputError(f'"{name}" is no column of the front; its columns are {columns}{nearest(name, plain)}')
    return plain[name]


def unit_of(heading: str) -> str:
    """Return the unit in the name of a column."""
    return heading.split(" [")[1].removesuffix("]") if " [" in heading else ""


def to_csv(table: pd.DataFrame) -> str:
    """Return a table as CSV with every digit, an infinite figure as ``unlimited`` or ``-unlimited``."""
    return table.replace({value: word for word, value in UNLIMITED.items()}).to_csv(index=False)
