"""Whole searches against the stock of a published library, on the same evaluator."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Sequence
from typing import Any

import numpy as np

from optisize.errors import NothingFeasible
from optisize.evolution.archive import Archive, Front
from optisize.evolution.state import Settings
from optisize.front import explore
from optisize.front.run import Run
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from tests.benchmarks.timing import spent


def stock_search(problem: Problem, seed: int, population: int, generations: int) -> tuple[float, float, Front]:
    """Run pymoo's NSGA-II as it comes; return its seconds, those in evaluation, and all that is worth keeping."""
    from pymoo.algorithms.moo.nsga2 import NSGA2
    from pymoo.core.problem import Problem as PymooProblem
    from pymoo.optimize import minimize

    evaluator = explore.Evaluator(problem, 1)
    inside: list[float] = []
    seen: list[Front] = []

    class Stage(PymooProblem):  # type: ignore[misc]
        """The same evaluator, whole populations at a time."""

        def __init__(self) -> None:
            super().__init__(n_var=problem.space.dimensions, n_obj=len(problem.goals), n_ieq_constr=1, xl=0.0, xu=1.0)

        def _evaluate(self, x: Array, out: dict[str, Array], *_args: object, **_kwargs: object) -> None:
            begin = time.process_time()
            found = evaluator(np.ascontiguousarray(x.T))
            inside.append(time.process_time() - begin)
            out["F"], out["G"] = found.losses.T, found.violation[:, None]
            good = found.take(np.flatnonzero(found.violation <= 0.0))
            seen.append(Front(good.vectors, good.losses))

    algorithm, stage = NSGA2(pop_size=population), Stage()
    seconds = spent(lambda: minimize(stage, algorithm, ("n_gen", generations), seed=seed, verbose=False))
    archive = Archive.empty(problem.space.dimensions, len(problem.goals))
    for front in seen:
        archive = archive.add(front)
    return seconds, sum(inside), archive.merged().front


def own_search(problem: Problem, settings: Settings) -> tuple[float, Run]:
    """Run one search on one thread; return its seconds and the run."""
    begin = time.process_time()
    run = explore.search(problem, threads=1, settings=settings)
    return time.process_time() - begin, run


def against_stock(problem: Problem, seeds: Sequence[int], **changes: int) -> dict[str, Any]:
    """Time whole searches against the stock on the same evaluator, one after the other for each seed."""
    box = explore.survey(problem)
    tiny = explore.settings_of(problem, **{**changes, "population": 8, "generations": 3, "patience": 0, "brood": 1})
    stock_search(problem, 1, 8, 3)
    with contextlib.suppress(NothingFeasible):
        explore.search(problem, threads=1, settings=tiny)
    rows = []
    for seed in seeds:
        settings = explore.settings_of(problem, patience=0, seed=seed, **changes)
        own, run = own_search(problem, settings)
        stock, stock_evaluation, front = stock_search(problem, seed, settings.population, settings.generations)
        info = run.info
        share = info["evaluation_seconds"] / info["seconds"]
        own_us, stock_us = (1e6 * s / (settings.population * settings.generations) for s in (own, stock))
        rows.append(
            {
                "ratio": stock / own,
                "hypervolume": info["hypervolume"] / (front.hypervolume(box.ideal, box.reference) or np.nan),
                "share": share,
                "seconds": own,
                "stock_seconds": stock,
                "evaluation_us": own_us * share,
                "overhead_us": own_us * (1.0 - share),
                "stock_evaluation_us": stock_us * stock_evaluation / stock,
                "stock_overhead_us": stock_us * (1.0 - stock_evaluation / stock),
            }
        )
    every = [round(row["ratio"], 3) for row in rows]
    return {key: float(np.median([row[key] for row in rows])) for key in rows[0]} | {"ratios": every}
