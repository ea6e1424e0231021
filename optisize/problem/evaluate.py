"""From sizings to measures, and from measures to losses and violations: the border where maximise becomes minimise."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from optisize.errors import InputError
from optisize.problem.schema import SearchTable
from optisize.problem.space import SizingSpace
from optisize.process.card import Process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology
from optisize.stage.circuit import Circuit, Conditions, size_circuit
from optisize.stage.measures import Measure, Sense, find

CHUNK = 2000  # designs solved together: their arrays stay in the cache
WORST = 20.0  # the violation of a limit is counted no further than this
UNSOLVED = 100.0  # the violation of a design without an operating point
CONSTANT = 1e-6  # in the units of a loss; a goal that varies by less over the space is no goal
TOLERANCE = 1e-9  # relative; a limit is met when it is missed by no more than rounding


@dataclass(frozen=True)
class Goal:
    """A measure to trade, and the direction that is wanted."""

    measure: Measure
    sense: Sense

    def loss(self, values: Array) -> Array:
        """Return what is minimised, (N,): decades of a logarithmic measure, steps that matter of a linear one."""
        sign = -1.0 if self.sense == "max" else 1.0
        return sign * _on_scale(self.measure, values)

    def value(self, loss: Array) -> Array:
        """Return the measure of a loss, (N,)."""
        scaled = -loss if self.sense == "max" else loss
        return 10.0**scaled if self.measure.scale == "log" else scaled * self.measure.step


@dataclass(frozen=True)
class Limit:
    """A bound on a measure that every design must respect.

    Attributes:
        low, high: bounds in the measure's unit; None where open.
        implied: whether the limit is the package's own, not the problem's.
        margins: how far inside the low and the high bound a search keeps, in the measure's unit.
    """

    measure: Measure
    low: float | None
    high: float | None
    implied: bool = False
    margins: tuple[float, float] = (0.0, 0.0)

    def narrowed(self) -> Limit:
        """Return the limit that a search keeps, inside by the margins."""
        low = None if self.low is None else self.low + self.margins[0]
        high = None if self.high is None else self.high - self.margins[1]
        return Limit(self.measure, low, high, self.implied)

    def violation(self, values: Array) -> Array:
        """Return by how much the limit is missed, (N,): 0 where met.

        One is a factor of two on a logarithmic measure, a step that matters on a linear one.
        """
        magnitude = np.abs(values) if self.measure.signed else values
        missed = np.zeros(magnitude.shape)
        for bound, sign in ((self.low, 1.0), (self.high, -1.0)):
            if bound is not None:
                missed = np.maximum(missed, sign * (self._units(np.asarray(bound)) - self._units(magnitude)))
        return np.where(np.isnan(magnitude), WORST, np.minimum(missed, WORST))

    def met(self, values: Array) -> NDArray[np.bool_]:
        """Tell whether the limit is met, rounding aside, (N,) of bool."""
        return self.violation(values) <= TOLERANCE

    def distance(self, values: Array, bound: float) -> Array:
        """Return how far values are from one of the bounds, on the scale of `violation`, (N,)."""
        magnitude = np.abs(values) if self.measure.signed else values
        return np.abs(self._units(magnitude) - self._units(np.asarray(bound)))

    def _units(self, values: Array) -> Array:
        if self.measure.scale == "log":
            return np.log2(np.maximum(values, 1e-30))
        return values / self.measure.step

    @property
    def bounds(self) -> tuple[tuple[str, float], ...]:
        """The bounds that there are, by name: ``min``, ``max``."""
        named = (("min", self.low), ("max", self.high))
        return tuple((name, bound) for name, bound in named if bound is not None)


def _on_scale(measure: Measure, values: Array) -> Array:
    values = np.abs(values) if measure.signed else values
    if measure.scale == "log":
        return np.log10(np.maximum(values, 1e-30))
    return values / measure.step


@dataclass(frozen=True)
class Assessed:
    """Losses (M, N) and violations of the limits (L, N) of N sizings; `solved` tells which have an operating point."""

    losses: Array
    violations: Array
    solved: NDArray[np.bool_]

    @cached_property
    def violation(self) -> Array:
        """The total violation, (N,); zero for a feasible design, and never zero for one without finite goals."""
        broken = ~(self.solved & np.isfinite(self.losses).all(axis=0))
        return self.violations.sum(axis=0) + np.where(broken, UNSOLVED, 0.0)

    @cached_property
    def finite_losses(self) -> Array:
        """The losses with a finite stand-in where there is none; such designs are never feasible."""
        return np.nan_to_num(self.losses, nan=1e3, posinf=1e3, neginf=1e3)


@dataclass(frozen=True)
class Problem:
    """A stage in a process under conditions, its sizing space, its goals and limits.

    Attributes:
        own_measures: what the problem says of measures with parameters: by name, each with its settings.
    """

    title: str
    process_name: str
    process: Process
    topology: Topology
    conditions: Conditions
    space: SizingSpace
    goals: tuple[Goal, ...]
    limits: tuple[Limit, ...]
    settings: SearchTable
    text: str
    process_text: str
    hashes: Mapping[str, str]
    source: str = ""
    own_measures: Mapping[str, Measure] = field(default_factory=dict)

    def find(self, name: str) -> Measure:
        """Return a measure of this problem by name: its own first, then the catalogue's, then a transistor's figure.

        Raises InputError for a name that the stage does not have.
        """
        return find(name, self.topology, self.own_measures)

    @property
    def needed(self) -> tuple[str, ...]:
        """The measures that goals and limits ask for."""
        names = [g.measure.name for g in self.goals] + [x.measure.name for x in self.limits]
        return tuple(dict.fromkeys(names))

    def narrowed(self) -> Problem:
        """Return the problem that is searched: its limits narrowed by their margins."""
        return replace(self, limits=tuple(limit.narrowed() for limit in self.limits))

    def circuit(self, sizes: Mapping[str, Array]) -> Circuit:
        """Return the sized circuit of N sizings, each size (N,)."""
        return size_circuit(self.topology, self.process, self.conditions, sizes)

    def measure(
        self, sizes: Mapping[str, Array], names: Iterable[str] | None = None, threads: int = 1
    ) -> dict[str, Array]:
        """Return measures of N sizings by name, each (N,); not a number where there is no operating point.

        Args:
            sizes: every size of the stage in SI units, each (N,).
            names: the measures wanted; those of goals and limits where None.
            threads: how many chunks of designs are solved at the same time.
        """
        wanted = [self.find(name) for name in (self.needed if names is None else names)]
        count = len(next(iter(sizes.values())))
        starts = range(0, count, CHUNK)
        if not count:
            return {m.name: np.empty(0) for m in wanted}

        def part(start: int) -> list[Array]:
            chosen = {name: np.asarray(v, dtype=float)[start : start + CHUNK] for name, v in sizes.items()}
            return measured(Analysis(self.circuit(chosen)), wanted)

        if threads > 1 and len(starts) > 1:
            with ThreadPoolExecutor(threads) as pool:
                parts = list(pool.map(part, starts))
        else:
            parts = [part(start) for start in starts]
        return {m.name: np.concatenate([p[i] for p in parts]) for i, m in enumerate(wanted)}

    def why_unsolved(self, sizes: Mapping[str, Array]) -> str:
        """Return why one sizing has no measures, each size (1,)."""
        return Analysis(self.circuit(sizes)).why_unsolved

    def assess(self, sizes: Mapping[str, Array], threads: int = 1) -> Assessed:
        """Return losses and violations of N sizings, each size (N,)."""
        values = self.measure(sizes, threads=threads)
        return self.judge(values)

    def judge(self, values: Mapping[str, Array]) -> Assessed:
        """Return losses and violations of designs whose measures are known, each (N,)."""
        losses = np.array([goal.loss(values[goal.measure.name]) for goal in self.goals])
        violations = np.array([limit.violation(values[limit.measure.name]) for limit in self.limits])
        # A measure may be undefined of a stage that works, such as the phase where there is no gain; not all of them.
        solved = ~np.all([np.isnan(values[name]) for name in self.needed], axis=0)
        return Assessed(losses, violations, solved)

    def check_goals_vary(self, losses: Array) -> None:
        """Raise InputError when a goal is the same for all of the designs sampled from the space, (M, N)."""
        for goal, row in zip(self.goals, losses, strict=True):
            known = row[~np.isnan(row)]
            if len(known) and (np.isinf(known).all() or np.ptp(known[np.isfinite(known)]) < CONSTANT):
                shown = "unlimited" if np.isinf(known).any() else f"{goal.value(known[:1])[0]:.4g} {goal.measure.unit}"
                file = f"{self.source}: " if self.source else ""
                raise InputError(
                    f"{file}goals.{goal.measure.name}: is the same for every design of the space ({shown.strip()}), "
                    "so it cannot be traded; remove the goal, or change the stage or its free sizes so that it varies"
                )


def measured(analysis: Analysis, wanted: Sequence[Measure]) -> list[Array]:
    """Return each measure (N,) of solved designs; those without an operating point are left out, and not a number."""
    solved = np.flatnonzero(analysis.converged)
    if len(solved) == analysis.circuit.designs:
        return [m.of(analysis) for m in wanted]
    results = [np.full(analysis.circuit.designs, np.nan) for _ in wanted]
    if len(solved):
        part = analysis.take(solved)
        for result, m in zip(results, wanted, strict=True):
            result[solved] = m.of(part)
    return results
