"""The best fronts known of the shipped problems, to hold the search against.

    python -m tests.reference.fronts

remakes them, and ``python -m tests.reference.fronts NAME`` makes that of another problem: for each the union of the
archives of ten runs (seeds 101 to 110) of ten times the default budget, without stopping early. What is stored is the
box between the best and the worst loss of that union (a tenth wider on the far side: the reference point at 1.1 of the
range that is customary for DTLZ2), and the hypervolume of the union in it, with the hashes of the problem and process
files.
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from optisize.evolution.archive import Front
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem

ROOT = Path(__file__).parents[3]
HERE = Path(__file__).parent
PROBLEMS = tuple(sorted(path.stem for path in HERE.glob("*.json")))  # those that have been worked out
SEEDS = tuple(range(101, 111))
TIMES = 10


def problem(name: str) -> Problem:
    """Return a shipped problem."""
    return load_problem(ROOT / "problems" / f"{name}.toml")


def stored(name: str) -> dict:
    """Return what is stored of a problem's best front."""
    return json.loads((HERE / f"{name}.json").read_text())


def share(front: Front, best: dict) -> float:
    """Return the hypervolume of a front over that of the best one known, in the box of the latter."""
    box = np.array(best["best"]), np.array(best["worst"])
    return front.hypervolume(*box) / best["hypervolume"]
