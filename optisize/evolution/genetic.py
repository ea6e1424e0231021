"""The generations: a genetic search on arrays that keeps every feasible non-dominated design.

NSGA-II (Deb, Pratap, Agarwal, Meyarivan, IEEE Transactions on Evolutionary Computation 6, 2002) for up to three goals,
with hypervolume contributions in place of crowding on the non-dominated front (see `ranking.survivors`); NSGA-III (Deb,
Jain, same journal 18, 2014) above; both with constraint domination, and offspring by three kinds of variation whose
shares adapt (see `variation`). A generation is a pure step from one `State` to the next.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.random import PCG64, Generator

from optisize.evolution import ranking, variation
from optisize.evolution.archive import Archive, Front
from optisize.evolution.arrays import Floats, Indices
from optisize.evolution.state import Evaluate, Evaluated, Mark, Normalisation, Record, Settings, State, Stopped

IMPROVEMENT = 1e-4  # the least relative progress that keeps a search from being called stalled
NICHING_GOALS = 4  # from here on survival by niches


def sample(dimensions: int, count: int, random: Generator) -> Floats:
    """A scrambled Sobol sample (dimensions, count) of the unit cube (Owen, Journal of Complexity 14, 1998)."""
    from scipy.stats.qmc import Sobol

    if count == 0:
        return np.empty((dimensions, 0))
    try:
        points = Sobol(dimensions, scramble=True, rng=random)
    except TypeError:  # scipy before 1.15
        points = Sobol(dimensions, scramble=True, seed=random)
    rows: Floats = points.random_base2((count - 1).bit_length())
    return np.ascontiguousarray(rows[:count].T)


def start(
    evaluate: Evaluate,
    *,
    dimensions: int,
    goals: int,
    settings: Settings,
    reference: Floats,
    ideal: Floats,
    seeds: Floats | None = None,
) -> State:
    """The state of a new search after its first generation: the manual sizings, if any, and a sample of the space.

    evaluate: from vectors (D, N) in [0, 1] to `Evaluated`; reference and ideal: (M,), worst and best losses of
    interest, between which the hypervolume is measured; seeds: (D, K), manual sizings, all of which are evaluated.
    """
    reference, ideal = np.array(reference, dtype=float), np.array(ideal, dtype=float)
    if dimensions < 1 or goals < 1 or reference.shape != (goals,) or ideal.shape != (goals,):
        raise ValueError("a search needs at least one dimension and goal, and a reference and ideal for each goal")
    if not (np.isfinite(reference - ideal).all() and (reference > ideal).all()):
        raise ValueError("the reference has to be finite and worse than the ideal in every goal")
    random = Generator(PCG64(settings.seed))
    vectors = np.empty((dimensions, 0)) if seeds is None else np.array(seeds, dtype=float).reshape(dimensions, -1)
    room = max(settings.population - vectors.shape[1], 0)
    vectors = np.concatenate((vectors, sample(dimensions, room, random)), axis=1)
    nobody = Evaluated(np.empty((dimensions, 0)), np.empty((goals, 0)), np.empty(0))
    before = State(
        settings=settings,
        ideal=ideal,
        reference=reference,
        population=nobody,
        archive=Archive.empty(dimensions, goals),
        random=dict(random.bit_generator.state),
        shares=variation.SHARES,
    )
    return advanced(before, evaluated(evaluate, vectors, goals), random)


def step(state: State, evaluate: Evaluate) -> State:
    """The state after one more generation, or as many as are bred at once; the given one remains as it is."""
    settings = state.settings
    random = Generator(PCG64(0))
    random.bit_generator.state = state.random
    brood = max(min(settings.brood, settings.generations - state.generation), 1)
    counts = variation.split(settings.population * brood, state.shares)
    parents = np.clip(state.population.vectors, 0.0, 1.0)
    vectors = variation.offspring(parents, state.population.losses, counts, fresh=state.repeats, random=random)
    return advanced(state, evaluated(evaluate, vectors, state.ideal.size), random, brood, counts)


def run(state: State, evaluate: Evaluate, *, on_generation: Callable[[State], None] | None = None) -> State:
    """The state at the end of the search: at the budget, stalled, or interrupted from the keyboard.

    `on_generation` is called with the state after every generation. An interruption leaves the state after the last
    whole generation; `run` goes on from it as if nothing had happened, and with a finished search that was `extended`.
    """
    state = replace(state, stopped="")
    try:
        while not (reason := _reason_to_stop(state)):
            state = step(state, evaluate)
            if on_generation is not None:
                on_generation(state)
    except KeyboardInterrupt:
        reason = "interrupted"
    return replace(state, stopped=reason)


def extended(state: State, generations: int) -> State:
    """The state with another number of generations in all; one that had stalled gets its patience back."""
    mark = replace(state.mark, generation=state.generation) if state.stopped == "stalled" else state.mark
    return replace(state, settings=replace(state.settings, generations=generations), mark=mark, stopped="")


def evaluated(evaluate: Evaluate, vectors: Floats, goals: int) -> Evaluated:
    """What the evaluator says about vectors (D, N), checked: shapes, finite numbers, no negative violation."""
    result = evaluate(vectors)
    size = vectors.shape[1]
    shapes = result.vectors.shape, result.losses.shape, result.violation.shape
    if shapes != (vectors.shape, (goals, size), (size,)):
        raise ValueError(f"the evaluator returned shapes {shapes} for {size} designs and {goals} goals")
    if not (np.isfinite(result.losses).all() and np.isfinite(result.vectors).all()):
        raise ValueError("the evaluator returned a vector or loss that is not finite")
    if not (np.isfinite(result.violation).all() and (result.violation >= 0.0).all()):
        raise ValueError("the evaluator returned a violation that is negative or not finite")
    return result


def advanced(
    state: State, newcomers: Evaluated, random: Generator, generations: int = 1, counts: tuple[int, ...] = ()
) -> State:
    """The state after newcomers have competed with the population and the record of the generations is written.

    counts: how many of the newcomers each kind of variation made, in order.
    """
    merged = Evaluated(
        np.concatenate((state.population.vectors, newcomers.vectors), axis=1),
        np.concatenate((state.population.losses, newcomers.losses), axis=1),
        np.concatenate((state.population.violation, newcomers.violation)),
    )
    once = ranking.distinct(merged.vectors)
    repeats = merged.size - once.size
    if repeats:
        merged = merged.take(once)
    rank = ranking.ranks(merged.losses, merged.violation)
    new = (once >= state.population.size) & (rank == 0) & (merged.violation <= 0.0)
    arrived = merged.take(new.nonzero()[0])
    archive = state.archive.add(Front(arrived.vectors, arrived.losses))
    best, normalisation = _survived(state, merged, rank, random)
    population = merged.take(best)
    generation, evaluations = state.generation + generations, state.evaluations + newcomers.size
    archive, record = _recorded(state, archive, population, generation, evaluations)
    return replace(
        state,
        population=population,
        archive=archive,
        random=dict(random.bit_generator.state),
        generation=record.generation,
        evaluations=record.evaluations,
        repeats=repeats,
        shares=variation.rewarded(state.shares, counts, _improving(state, merged, once, best), state.ideal.size),
        mark=_marked(state.mark, record),
        normalisation=normalisation,
        records=(*state.records, record),
    )


def _improving(state: State, merged: Evaluated, once: Indices, best: Indices) -> Indices:
    """Positions, among the newcomers, of the survivors that dominate a design of the population before them."""
    position = once[best] - state.population.size
    new = merged.take(best[position >= 0])
    better = ranking.dominates(new.losses, new.violation, state.population.losses, state.population.violation)
    return position[position >= 0][better.any(axis=1)]


def _survived(
    state: State, merged: Evaluated, rank: Indices, random: Generator
) -> tuple[Indices, Normalisation | None]:
    """Positions of the next population among the merged designs, best first; what NSGA-III knows of the losses."""
    count = state.settings.population
    if merged.losses.shape[0] < NICHING_GOALS:
        return ranking.survivors(merged.losses, rank, count), None
    from optisize.evolution import niching

    scaled = (merged.losses - state.ideal[:, None]) / (state.reference - state.ideal)[:, None]
    best, known = niching.survivors(scaled, merged.violation <= 0.0, rank, count, state.normalisation, random)
    return best, known


def _recorded(
    state: State, archive: Archive, population: Evaluated, generation: int, evaluations: int
) -> tuple[Archive, Record]:
    """The record of the generation that follows the state, and its archive, measured if that is due."""
    hypervolume = state.records[-1].hypervolume if state.records else 0.0
    last_chance = archive.gathered > 0 and _out_of_patience(state, generation)
    if last_chance or archive.due(state.settings.population):
        archive = archive.settled()
        hypervolume = archive.front.hypervolume(state.ideal, state.reference)
    record = Record(
        generation=generation,
        evaluations=evaluations,
        feasible_share=float(np.count_nonzero(population.violation <= 0.0)) / population.size,
        hypervolume=hypervolume,
        archive_size=archive.measured,
        least_violation=float(population.violation.min()),
    )
    return archive, record


def _marked(mark: Mark, record: Record) -> Mark:
    """The mark, moved here if this generation made progress: in hypervolume, or in the least violation."""
    better = record.hypervolume > mark.hypervolume * (1.0 + IMPROVEMENT)
    nearer = record.least_violation < mark.violation * (1.0 - IMPROVEMENT)
    if better or nearer:
        return Mark(record.hypervolume, record.least_violation, record.generation)
    return mark


def _out_of_patience(state: State, generation: int) -> bool:
    """Whether the last progress is too long ago. Feasible designs that all lie outside the box cannot be judged."""
    patience = state.settings.patience
    judged = state.mark.hypervolume > 0.0 or state.archive.is_empty
    return patience > 0 and judged and generation - state.mark.generation >= patience


def _reason_to_stop(state: State) -> Stopped:
    """Why the search should not go on, or an empty text."""
    if state.generation >= state.settings.generations:
        return "budget"
    return "stalled" if _out_of_patience(state, state.generation) else ""
