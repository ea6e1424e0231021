"""Which designs of a front meet a wish: conditions in engineering notation, and sorting."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from optisize.errors import InputError, shorten
from optisize.front.run import Run
from optisize.front.table import column, find_column, unit_of
from optisize.problem.evaluate import TOLERANCE
from optisize.quantities import QuantityError, read

_CONDITION = re.compile(r"\s*((?:simulated )?[\w.]+)\s*(>=|<=|>|<|=)\s*(.+?)\s*")


@dataclass(frozen=True)
class Condition:
    """A bound on a column of a front, such as ``gain>=40 dB``."""

    column: str
    relation: str
    value: float

    def holds(self, values: np.ndarray) -> np.ndarray:
        """Tell which values meet the condition, rounding aside, (N,) of bool."""
        slack = TOLERANCE * max(abs(self.value), 1e-30)
        if self.relation in (">=", ">"):
            return values >= self.value - slack if self.relation == ">=" else values > self.value + slack
        if self.relation in ("<=", "<"):
            return values <= self.value + slack if self.relation == "<=" else values < self.value - slack
        return np.abs(values - self.value) <= 1e-6 * max(abs(self.value), 1e-30)


def parse_condition(text: str, table: pd.DataFrame) -> Condition:
    """Read a condition on a front.

    Raises InputError for an unknown column, a wrong unit or something else.
    """
    turned = re.search("=[<>]", text)
    if turned:
        raise InputError(f'--where: found {shorten(text)}; did you mean "{turned[0][::-1]}" for "{turned[0]}"?')
    match = _CONDITION.fullmatch(text)
    if match is None:
        raise InputError(f'--where: found {shorten(text)}; a condition such as "gain>=40 dB" is needed')
    heading = find_column(table, match.group(1))
    try:
        value = read(match.group(3), unit_of(heading))
    except QuantityError as error:
        raise InputError(f"--where: found {shorten(text)}; {error}") from None
    return Condition(heading, match.group(2), value)


def where(table: pd.DataFrame, conditions: Sequence[str]) -> pd.DataFrame:
    """Return the designs that meet every condition.

    Raises InputError for a condition that cannot be read.
    """
    for text in conditions:
        condition = parse_condition(text, table)
        table = table[condition.holds(table[condition.column].to_numpy(dtype=float))]
    return table


def sort(run: Run, table: pd.DataFrame, name: str) -> pd.DataFrame:
    """Return the designs sorted by a column: best first for a goal, lowest first otherwise.

    Raises InputError for an unknown column.
    """
    heading = find_column(table, name)
    descending = any(g.sense == "max" and column(g.measure.name, g.measure.unit) == heading for g in run.problem.goals)
    return table.sort_values(heading, ascending=not descending, kind="stable")
