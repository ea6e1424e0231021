"""One search of a problem, from the sizing space to a front of finished sizings."""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

import optisize
from optisize.errors import InputError, NothingFeasible
from optisize.evolution import genetic
from optisize.evolution.state import Evaluated, Settings, State
from optisize.front.run import Run
from optisize.front.table import design_table, sizes_of
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.quantities import write

BATCH = 800  # designs that are evaluated at once where the population is smaller
CUMULATIVE = ("evaluations", "generations", "seconds", "evaluation_seconds")  # of run.json, over all that was searched
SURVEY = 512  # designs of the fixed sample that sets the box in which the hypervolume is measured
Watch = Callable[[State], None]


@dataclass
class Evaluator:
    """What the search calls: vectors in, losses and violations out; keeps the time that it takes.

    Attributes:
        problem: the problem.
        threads: how many chunks of designs are solved at the same time.
        seconds: the time spent in evaluation.
    """

    problem: Problem
    threads: int = 1
    seconds: float = field(default=0.0)

    def __call__(self, vectors: Array) -> Evaluated:
        """Evaluate vectors (D, N); those that come back are of the snapped sizings."""
        begin = time.perf_counter()
        sizes = self.problem.space.decode(vectors)
        assessed = self.problem.assess(sizes, self.threads)
        result = Evaluated(self.problem.space.encode(sizes), assessed.finite_losses, assessed.violation)
        self.seconds += time.perf_counter() - begin
        return result


@dataclass(frozen=True)
class Survey:
    """The box in loss space in which hypervolume is measured: worst and best losses (M,) of a fixed sample."""

    reference: Array
    ideal: Array


def survey(problem: Problem) -> Survey:
    """Evaluate a fixed sample of the space, the same for every seed.

    Raises InputError when a goal is the same for all of it.
    """
    from scipy.stats.qmc import Sobol

    vectors = Sobol(problem.space.dimensions, scramble=False).random(SURVEY).T
    assessed = problem.assess(problem.space.decode(vectors))
    problem.check_goals_vary(assessed.losses)
    losses = assessed.finite_losses
    nearest = np.argsort(assessed.violation, kind="stable")[: SURVEY // 4]
    chosen = losses[:, nearest]
    worst, best = chosen.max(axis=1), chosen.min(axis=1)
    margin = 0.05 * np.maximum(worst - best, 1e-6)
    return Survey(reference=worst + margin, ideal=best - margin)


def settings_of(problem: Problem, **changes: int) -> Settings:
    """Return the settings of a problem's search, with some of them changed.

    A small population is bred in broods, so that the arrays of the evaluation are not too small to be fast.
    """
    chosen = {**problem.settings.model_dump(), **changes}
    return Settings(**{"brood": max(1, BATCH // chosen["population"]), **chosen})


def resume(run: Run, *, generations: int | None = None, threads: int | None = None, watch: Watch | None = None) -> Run:
    """Go on with a search: an interrupted one bit for bit, a finished one from its front.

    Args:
        run: as it was read back.
        generations: in all, or that many more for a finished run; those of the problem where None.
        threads, watch: as for `search`.
    """
    wanted = generations or run.problem.settings.generations
    if run.state is not None:
        state = genetic.extended(run.state, wanted) if generations else run.state
        again = search(run.problem, threads=threads, watch=watch, state=state, settings=state.settings)
        return _after(run.info.get("before"), run.history, again)
    if not len(run.front):
        raise InputError(f"{run.path}: has no design to go on from")
    population, seed = run.info["population"], run.info["seed"] + 1
    settings = settings_of(run.problem, population=population, seed=seed, generations=wanted)
    seeds = sizes_of(run.problem, run.front)
    again = search(run.problem, threads=threads, watch=watch, seeds=seeds, settings=settings)
    before = {key: run.info[key] for key in CUMULATIVE} | {"records": len(run.history)}
    return _after(before, run.history, again)


def _after(before: Mapping[str, Any] | None, history: pd.DataFrame, again: Run) -> Run:
    """Return a run that counts what was searched before a finished run went on from its front."""
    if before is None:
        return again
    again.info |= {key: round(again.info[key] + before[key], 3) for key in CUMULATIVE} | {"before": dict(before)}
    later = again.history.copy()
    for name, key in (("generation", "generations"), ("evaluations", "evaluations")):
        later[name] += before[key]
    again.history = pd.concat([history.iloc[: before["records"]], later], ignore_index=True)
    return again


def search(
    problem: Problem,
    *,
    threads: int | None = None,
    seeds: Mapping[str, Array] | None = None,
    watch: Watch | None = None,
    state: State | None = None,
    settings: Settings | None = None,
) -> Run:
    """Search a problem and return the run with its front.

    Args:
        problem: what to search.
        threads: threads of evaluation; those that there are where None. The front does not depend on it.
        seeds: manual sizings to start from, each size (K,).
        watch: called after every generation.
        state: an interrupted search to go on with.
        settings: in place of those of the problem.

    Raises:
        InputError: a goal that is constant.
        NothingFeasible: no design meets every limit; the message says which ones stood in the way.
    """
    begin = time.perf_counter()
    wanted = problem.narrowed()
    evaluator = Evaluator(wanted, threads or os.cpu_count() or 1)
    if settings is None:
        settings = settings_of(problem)
    if state is None:
        box = survey(wanted)
        state = genetic.start(
            evaluator,
            dimensions=problem.space.dimensions,
            goals=len(problem.goals),
            settings=settings,
            reference=box.reference,
            ideal=box.ideal,
            seeds=None if seeds is None else problem.space.encode(problem.space.snapped(seeds)),
        )
        if watch is not None:
            watch(state)
    state = genetic.run(state, evaluator, on_generation=watch)
    if not state.front.size and state.stopped != "interrupted":
        raise NothingFeasible(explain_infeasible(wanted, state))
    seconds = time.perf_counter() - begin
    return _finished(problem, state, seconds, evaluator.seconds)


def _finished(problem: Problem, state: State, seconds: float, evaluation: float) -> Run:
    front = state.front.thinned(state.settings.population)
    table = design_table(problem, problem.space.decode(front.vectors))
    hypervolume = state.hypervolume
    return Run(
        problem=problem,
        front=table,
        history=pd.DataFrame([vars(record) for record in state.history]),
        info={
            "optisize": optisize.__version__,
            "python": platform.python_version(),
            "numpy": np.__version__,
            "title": problem.title,
            "process": problem.process_name,
            "stopped": state.stopped,
            "seed": state.settings.seed,
            "population": state.settings.population,
            "generations": state.generation,
            "evaluations": state.evaluations,
            "designs": len(table),
            "archive": state.front.size,
            "hypervolume": hypervolume,
            "hypervolume_box": _box(problem, state),
            "seconds": round(seconds, 3),
            "evaluation_seconds": round(evaluation, 3),
            "sha256": dict(problem.hashes),
        },
        state=state,
    )


def _box(problem: Problem, state: State) -> dict[str, dict[str, float]]:
    """Return the box of the hypervolume in the goals' own units."""
    return {
        goal.measure.name: {
            "worst": float(goal.value(state.reference[i : i + 1])[0]),
            "best": float(goal.value(state.ideal[i : i + 1])[0]),
        }
        for i, goal in enumerate(problem.goals)
    }


def explain_infeasible(problem: Problem, state: State) -> str:
    """Say which limits stood in the way, and how far each had to be relaxed for the nearest design."""
    sizes = problem.space.decode(state.population.vectors)
    values = problem.measure(sizes)
    assessed = problem.judge(values)
    if not assessed.solved.any():
        return "nothing feasible: no sizing of the space has an operating point under these conditions"
    best = int(np.argmin(np.where(assessed.solved, assessed.violation, np.inf)))
    lines = []
    for limit, missed in zip(problem.limits, assessed.violations, strict=True):
        if missed[best] <= 0.0:
            continue
        m = limit.measure
        bounds = " and ".join(f"{name} {write(bound, m.unit)}" for name, bound in limit.bounds)
        alone = (assessed.violations.sum(axis=0) - missed <= 0.0) & (missed > 0.0)
        note = "; every other limit can be met without it" if alone.any() else ""
        lines.append(f"  {m.name}: {bounds} wanted, nearest design has {_reached(values[m.name][best], m.unit)}{note}")
    shown = "\n".join(lines)
    if len(lines) > 1:
        blame = "these limits stand in the way; the nearest design would need each relaxed to its own figure"
    else:
        blame = "this limit stands in the way; the nearest design would need it relaxed to its own figure"
    return f"nothing feasible after {state.evaluations} evaluations: {blame}:\n{shown}"


def _reached(value: float, unit: str) -> str:
    return "no such figure" if np.isnan(value) else write(float(value), unit)
