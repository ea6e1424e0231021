"""One design to look at: from the front of a run, or a sizing by hand for a run's problem or a problem file."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from optisize.errors import InputError
from optisize.front.run import load_run
from optisize.front.table import sizes_of
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem, load_sizing
from optisize.process.law import Array


@dataclass(frozen=True)
class Picked:
    """A design, its problem, and what to call it; each size is (1,)."""

    problem: Problem
    sizes: Mapping[str, Array]
    label: str


def pick(source: Path, design: int | None = None, sizing: Path | None = None) -> Picked:
    """Return one design.

    Args:
        source: a run directory, or a problem file.
        design: its number on the front of the run.
        sizing: a sizing file instead.

    Raises InputError when there is no such design, or more or less than one is asked for.
    """
    if source.is_file():
        if sizing is None:
            raise InputError(f"{source}: is a file, not a run; with a problem file, name a sizing with --sizing")
        if design is not None:
            raise InputError("--design and --sizing: found both; one of them is allowed")
        return _by_hand(load_problem(source), sizing)
    run = load_run(source)
    if (design is None) == (sizing is None):
        found = "neither" if design is None else "both"
        raise InputError(f"--design and --sizing: found {found}; one of them is needed, such as --design 1")
    if sizing is not None:
        return _by_hand(run.problem, sizing)
    rows = run.front[run.front["design"] == design]
    if not len(rows):
        numbers = f"its designs are 1 to {len(run.front)}" if len(run.front) else "its front is empty"
        raise InputError(f"--design: found {design}; {source} has no such design; {numbers}")
    return Picked(run.problem, sizes_of(run.problem, rows), f"design {design} of {source}")


def _by_hand(problem: Problem, sizing: Path) -> Picked:
    return Picked(problem, load_sizing(sizing, problem), str(sizing))
