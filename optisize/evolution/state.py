"""What a search is made of: its settings, what the evaluator hands back, its record of generations, its state.

Everything here is a plain frozen record; a generation turns one state into the next and changes nothing in place.
As everywhere in the package, the last axis of every array is the designs.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Literal, TypeAlias

import numpy as np

from optisize.evolution.archive import Archive, Front
from optisize.evolution.arrays import Floats, Indices

Stopped: TypeAlias = Literal["", "budget", "stalled", "interrupted"]


@dataclass(frozen=True)
class Evaluated:
    """Designs with what an evaluation said about them.

    vectors: (D, N), the canonical (snapped) vectors, which may differ from the ones that were asked for;
    losses: (M, N), all to be minimised; violation: (N,), the total scaled violation of the limits, 0 = feasible.
    """

    vectors: Floats
    losses: Floats
    violation: Floats

    def take(self, which: Indices) -> Evaluated:
        """The designs at these positions."""
        return Evaluated(self.vectors.take(which, axis=1), self.losses.take(which, axis=1), self.violation[which])

    @property
    def size(self) -> int:
        """How many designs there are."""
        return int(self.violation.size)


Evaluate: TypeAlias = Callable[[Floats], Evaluated]


@dataclass(frozen=True, kw_only=True)
class Settings:
    """How to search.

    population: designs a generation; generations: how many in all, the first sample counting as one; seed: of all that
    is random; patience: generations without a relative improvement of the hypervolume by more than 1e-4 after which the
    search stops, 0 = never; brood: how many generations' worth of offspring are bred from one population and compete
    together: evaluating a few large arrays costs less than many small ones.
    """

    population: int = 200
    generations: int = 200
    seed: int = 1
    patience: int = 60
    brood: int = 1

    def __post_init__(self) -> None:
        if self.population < 1 or self.generations < 1 or self.patience < 0 or self.brood < 1:
            raise ValueError(f"settings out of range: {self}")


@dataclass(frozen=True)
class Record:
    """One generation.

    generation: 1 is the first sample; evaluations: so far, in all; feasible_share: of the population that survived this
    generation; hypervolume and archive_size: of the archive when it was last measured (the archive gathers newcomers
    and is measured every few generations; `State.history` has the last generation measured exactly);
    least_violation: the smallest in the population, 0 once something is feasible.
    """

    generation: int
    evaluations: int
    feasible_share: float
    hypervolume: float
    archive_size: int
    least_violation: float


@dataclass(frozen=True)
class Mark:
    """The last progress worth the name, and when it was made: of the hypervolume, or of the least violation."""

    hypervolume: float = 0.0
    violation: float = np.inf
    generation: int = 0


@dataclass(frozen=True)
class Normalisation:
    """What NSGA-III remembers of the losses: ideal and worst (M,), one extreme design for each goal (M, M), by row."""

    ideal: Floats
    worst: Floats
    extremes: Floats


@dataclass(frozen=True)
class State:
    """A search between two generations; all that is needed to go on with it, bit for bit.

    reference and ideal (M,): the box in which the hypervolume is measured, as the share of it that is dominated;
    population: best first; random: the state of the generator; repeats: designs of the last generation that were known
    already; shares: of the offspring that each kind of variation makes; stopped: why the search is not going on (""
    while it is).
    """

    settings: Settings
    ideal: Floats
    reference: Floats
    population: Evaluated
    archive: Archive
    random: dict[str, Any]
    generation: int = 0
    evaluations: int = 0
    repeats: int = 0
    shares: tuple[float, ...] = ()
    mark: Mark = Mark()
    normalisation: Normalisation | None = None
    records: tuple[Record, ...] = ()
    stopped: Stopped = ""

    @property
    def front(self) -> Front:
        """Every feasible non-dominated design ever seen; empty while nothing is feasible."""
        return self.archive.merged().front

    @property
    def hypervolume(self) -> float:
        """Of the whole archive at this moment, as the share of the box between ideal and reference."""
        return self.archive.merged().front.hypervolume(self.ideal, self.reference)

    @property
    def history(self) -> tuple[Record, ...]:
        """A record a generation, the last one with the hypervolume and the size of the archive at this moment."""
        if not self.records:
            return ()
        front = self.front
        hypervolume = front.hypervolume(self.ideal, self.reference)
        last = replace(self.records[-1], hypervolume=hypervolume, archive_size=front.size)
        return (*self.records[:-1], last)
