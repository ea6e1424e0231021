"""Runs whose fronts are given by hand: two goals whose losses are their values, and any designs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pandas as pd

from optisize.front.run import Run
from optisize.front.table import column
from optisize.problem.evaluate import Goal, Problem
from optisize.process.law import Array
from optisize.stage.catalogue import Sense
from optisize.stage.measures import CATALOGUE

NAMES = ("first", "second", "third", "fourth")


def goals(*senses: Sense) -> tuple[Goal, ...]:
    """Return goals on a linear scale in volts, whose steps that matter are of one volt."""
    plain = replace(CATALOGUE["output_swing"], unit="V", scale="linear", step=1.0, signed=False)
    return tuple(Goal(replace(plain, name=name), sense) for name, sense in zip(NAMES, senses, strict=False))


def run_of(problem: Problem, values: Array, senses: Sequence[Sense] = ("min", "min")) -> Run:
    """Return a run of a problem with these goals, whose designs have these values (M, N)."""
    chosen = goals(*senses)
    data = {column(g.measure.name, "V"): row for g, row in zip(chosen, values, strict=True)}
    front = pd.DataFrame({"design": np.arange(1, values.shape[1] + 1), **data})
    return Run(replace(problem, goals=chosen), front, pd.DataFrame(), {"evaluations": values.shape[1]})


def crossing_lines(points: int = 1001) -> tuple[Array, Array]:
    """Return two lines that cross in (0.5, 0.5), both from x = 0 to 1: y = 1 - x, and y = 0.75 - 0.5 x."""
    x = np.linspace(0.0, 1.0, points)
    return np.array([x, 1.0 - x]), np.array([x, 0.75 - 0.5 * x])
