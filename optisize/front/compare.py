"""One sizing beside a front: which designs beat it, and by how much."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from optisize.front.table import measured
from optisize.problem.evaluate import Problem
from optisize.process.law import Array


@dataclass(frozen=True)
class Better:
    """A design of a front that is at least as good in every goal and better in one.

    Attributes:
        design: its number on the front.
        gains: for each goal, how much better it is [the measure's unit], zero where as good.
        lead: how far it is ahead, in the units of the goals' losses, summed.
    """

    design: int
    gains: dict[str, float]
    lead: float


def dominating(problem: Problem, values: Mapping[str, Array], front: pd.DataFrame) -> list[Better]:
    """Return the designs of a front that beat one sizing in the goals, the furthest ahead first.

    Args:
        problem: whose goals decide.
        values: the measures of the sizing, each (1,).
        front: one row a design.
    """
    own = np.array([goal.loss(values[goal.measure.name]) for goal in problem.goals])
    if len(front) == 0 or not np.isfinite(own).all():
        return []
    columns = [measured(front, g.measure) for g in problem.goals]
    theirs = np.array([goal.loss(row) for goal, row in zip(problem.goals, columns, strict=True)])
    slack = 1e-9 * np.maximum(np.abs(own), 1.0)
    beats = (theirs <= own + slack).all(axis=0) & (theirs < own - slack).any(axis=0)
    lead = (own - theirs).sum(axis=0)
    order = [i for i in np.argsort(-lead, kind="stable") if beats[i]]
    return [
        Better(
            design=int(front["design"].iloc[i]),
            gains={
                g.measure.name: _gain(float(row[i]), float(values[g.measure.name][0]), g.sense == "max")
                for g, row in zip(problem.goals, columns, strict=True)
            },
            lead=float(lead[i]),
        )
        for i in order
    ]


def _gain(theirs: float, own: float, larger_is_better: bool) -> float:
    gain = theirs - own if larger_is_better else own - theirs
    return gain if abs(gain) > 1e-9 * max(abs(own), 1e-30) else 0.0


def latest_run_of(problem: Problem, results: str = "results") -> str | None:
    """Return the newest run directory of exactly this problem file under a results directory, if there is one."""
    found: list[tuple[float, str]] = []
    for info in Path(results).glob("*/run.json"):
        try:
            data = json.loads(info.read_text(encoding="utf-8"))
            same = data["sha256"]["problem"] == problem.hashes["problem"]
        except (OSError, ValueError, KeyError, TypeError):
            continue
        if same:
            found.append((info.stat().st_mtime, str(info.parent)))
    return max(found)[1] if found else None
