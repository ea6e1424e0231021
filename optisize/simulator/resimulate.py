"""Designs through the circuit simulator: predicted beside simulated, where they part, and what is left of a front."""

from __future__ import annotations

import re
import subprocess
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from optisize.errors import InputError, NothingFeasible, SimulationFailed
from optisize.evolution.ranking import ranks
from optisize.front.run import Run
from optisize.front.table import measured, simulated_column, sizes_of
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.quantities import write
from optisize.simulator.deck import Deck, benched, write_deck
from optisize.simulator.ngspice import run_all
from optisize.stage.analysis import Analysis
from optisize.stage.measures import Measure

ROUNDED = 120.0  # dB; beyond it, what cancels in the simulator is rounding
Watch = Callable[[int], None]


@dataclass(frozen=True)
class Comparison:
    """One measure of N designs, by the package and by the simulator; not a number where a design did not run.

    Attributes:
        measure: the measure.
        designs: their numbers, (N,).
        predicted, simulated: in its unit, (N,).
    """

    measure: Measure
    designs: NDArray[np.intp]
    predicted: Array
    simulated: Array

    @property
    def difference(self) -> Array:
        """Simulated over predicted less one on a logarithmic scale, simulated less predicted on a linear one, (N,).

        Not a number where one of the two is not finite, or the prediction is zero.
        """
        with np.errstate(all="ignore"):
            if self.measure.scale == "log":
                gone = self.simulated / self.predicted - 1.0
            else:
                gone = self.simulated - self.predicted
        finite = np.isfinite(self.simulated) & np.isfinite(self.predicted)
        return np.where(finite & np.isfinite(gone), gone, np.nan)

    @property
    def median(self) -> float:
        """The median of the differences' magnitudes; not a number where there is none."""
        known = self.difference[np.isfinite(self.difference)]
        return float(np.median(np.abs(known))) if len(known) else np.nan

    @property
    def worst(self) -> int | None:
        """The position of the largest difference, if there is one."""
        known = np.abs(self.difference)
        return int(np.nanargmax(known)) if np.isfinite(known).any() else None

    @property
    def parted(self) -> NDArray[np.bool_]:
        """Which designs differ by more than the kernel's own checks allow, or are unlimited on one side only, (N,)."""
        with np.errstate(invalid="ignore"):
            far = np.abs(self.difference) > tolerance(self.measure)
        one_sided = np.isfinite(self.simulated) != np.isfinite(self.predicted)
        return (far | (one_sided & ~np.isnan(self.simulated))) & ~_beyond_telling(self)


def _beyond_telling(c: Comparison) -> NDArray[np.bool_]:
    """Tell where figures are at the rounding of the simulator: unlimited rejections, harmonics of nothing, (N,)."""
    if c.measure.unit != "dB":
        return np.zeros(len(c.predicted), dtype=bool)
    unlimited = np.isposinf(c.predicted) & (c.simulated > ROUNDED)
    return unlimited | ((c.predicted < -ROUNDED) & (c.simulated < -ROUNDED))


def tolerance(measure: Measure) -> float:
    """Return the difference, on the scale of `Comparison.difference`, within which both are taken as the same.

    These are the bounds of the checks of the kernel: 0.1 dB, 5 mV, 2 degrees, 1 % of a frequency, 2 % of a noise,
    otherwise 0.1 %.
    """
    if measure.scale == "linear":
        return {"dB": 0.1, "V": 5e-3, "deg": 2.0}.get(measure.unit, 1e-3 * measure.step)
    if measure.unit == "Hz":
        return 0.01
    return 0.02 if measure.unit in ("V", "V/Hz^0.5") else 1e-3


@dataclass(frozen=True)
class Resimulated:
    """Designs of a problem that went through the simulator.

    Attributes:
        problem: the problem.
        designs: their numbers, (N,).
        comparisons: one for each measure that has a bench.
        left_out: other measures that were asked for, and why.
        failures: what the simulator said of designs that did not run, by number.
        edges: of each design, the transistor nearest to the edge of saturation and how far it is [V].
        simulator: its name and version.
    """

    problem: Problem
    designs: NDArray[np.intp]
    comparisons: tuple[Comparison, ...]
    left_out: Mapping[str, str]
    failures: Mapping[int, str]
    edges: tuple[tuple[str, float], ...]
    simulator: str

    @property
    def ran(self) -> NDArray[np.bool_]:
        """Which designs the simulator solved, (N,)."""
        return ~np.isin(self.designs, list(self.failures))

    def values(self) -> dict[str, Array]:
        """Return the simulated measures by name, each (N,)."""
        return {c.measure.name: c.simulated for c in self.comparisons}


def version_of(simulator: Path) -> str:
    """Return name and version of the simulator, such as ``ngspice-39``."""
    try:
        told = subprocess.run(
            [str(simulator), "--version"],
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=20,
            check=False,
        ).stdout
    except (OSError, subprocess.TimeoutExpired):
        told = ""
    found = re.search(r"ngspice-[\w.+-]+", told)
    return found.group(0) if found else simulator.name


def resimulate(
    problem: Problem,
    sizes: Mapping[str, Array],
    designs: Sequence[int],
    simulator: Path,
    *,
    source: str = "",
    measures: Iterable[str] | None = None,
    workers: int | None = None,
    watch: Watch | None = None,
) -> Resimulated:
    """Run designs through the simulator, several side by side, each by its own deck.

    Args:
        problem: the problem.
        sizes: every size of the stage, each (N,).
        designs: their numbers.
        simulator: its path.
        source: what the designs are of.
        measures: those wanted; those of goals and limits where None.
        workers: how many decks run at the same time.
        watch: called with the number of designs that are done.

    Raises SimulationFailed, with the simulator's last lines, when none of them runs.
    """
    wanted = benched(problem, measures)
    of = f" of {source}" if source else ""
    decks = [
        write_deck(problem, {k: v[i : i + 1] for k, v in sizes.items()}, f"design {number}{of}", wanted)
        for i, number in enumerate(designs)
    ]
    answers = run_all(simulator, [d.text for d in decks], lambda _, said: said, workers=workers, watch=watch)
    found: list[dict[str, float]] = []
    failures: dict[int, str] = {}
    for number, deck, said in zip(designs, decks, answers, strict=True):
        values, failure = _read(deck, said)
        found.append(values)
        if failure is not None:
            failures[int(number)] = str(failure)
    if len(failures) == len(decks):
        number, why = next(iter(failures.items()))
        raise SimulationFailed(f"design {number}: {why}")
    numbers = np.array(designs, dtype=np.intp)
    comparisons = tuple(
        Comparison(
            m,
            numbers,
            np.array([d.predicted[m.name] for d in decks]),
            np.array([values.get(m.name, np.nan) for values in found]),
        )
        for m in decks[0].measures
    )
    edges = _edges(problem, sizes)
    return Resimulated(problem, numbers, comparisons, decks[0].left_out, failures, edges, version_of(simulator))


def _read(deck: Deck, said: str | SimulationFailed) -> tuple[dict[str, float], SimulationFailed | None]:
    if isinstance(said, SimulationFailed):
        return {}, said
    try:
        return deck.read(said), None
    except SimulationFailed as failure:
        return {}, failure


def _edges(problem: Problem, sizes: Mapping[str, Array]) -> tuple[tuple[str, float], ...]:
    """Return of each design the transistor with the least vds - vdsat at rest, and that."""
    a = Analysis(problem.circuit(sizes))
    rows = a.wiring.saturating
    room = (a.terminals.vds - a.saturation.vdsat)[rows]
    nearest = np.abs(room).argmin(axis=0)
    names = [a.topology.transistors[row].name for row in rows]
    return tuple((names[k], float(room[k, i])) for i, k in enumerate(nearest))


def with_columns(front: pd.DataFrame, found: Resimulated) -> pd.DataFrame:
    """Return a front with the simulated measures as columns; designs that were not simulated keep what they had."""
    table = front.copy()
    rows = table["design"].isin(found.designs)
    at = {int(number): i for i, number in enumerate(found.designs)}
    order = [at[int(number)] for number in table.loc[rows, "design"]]
    for c in found.comparisons:
        name = simulated_column(c.measure)
        if name not in table:
            table[name] = np.nan
        table.loc[rows, name] = c.simulated[order]
    return table


@dataclass(frozen=True)
class Kept:
    """What the simulator leaves of a front.

    Attributes:
        run: the run with the designs that are left, numbered anew, both sets of figures beside each other.
        dropped: why each of the others was dropped, by its number before.
        shortfalls: by how much limits were missed at the most, on the scale of `Comparison.difference`, by name.
    """

    run: Run
    dropped: Mapping[int, str]
    shortfalls: Mapping[str, float]


def keep_what_holds(run: Run, found: Resimulated) -> Kept:
    """Drop designs that miss a limit in the simulator, or that another one of the front then beats.

    Goals and limits that have no bench count as predicted.

    Raises NothingFeasible when no design is left.
    """
    problem = run.problem
    table = with_columns(run.front, found)
    values = {name: measured(run.front, problem.find(name)) for name in problem.needed} | found.values()
    assessed = problem.judge({name: values[name] for name in problem.needed})
    dropped: dict[int, str] = {}
    shortfalls: dict[str, float] = {}
    ok = found.ran.copy()
    for number in found.designs[~ok]:
        dropped[int(number)] = "the simulator did not solve it"
    for limit in problem.limits:
        name = limit.measure.name
        met = limit.met(values[name])
        for i in np.flatnonzero(~met & found.ran):
            what = f"{name} is {write(float(values[name][i]), limit.measure.unit)}"
            number = int(found.designs[i])
            dropped[number] = f"{dropped[number]}, {what}" if number in dropped else what
            for _, bound in limit.bounds:
                shortfalls[name] = max(shortfalls.get(name, 0.0), _missed(limit.measure, values[name][i], bound))
        ok &= met
    for i in np.flatnonzero(ok & (assessed.violation > 0.0)):  # a goal without a finite value
        dropped[int(found.designs[i])] = "a goal has no value"
    ok &= assessed.violation <= 0.0
    chosen = np.flatnonzero(ok)
    if not len(chosen):
        raise NothingFeasible(_nothing_left(dropped, shortfalls, problem))
    best = chosen[ranks(assessed.losses[:, chosen], np.zeros(len(chosen))) == 0]
    for i in np.setdiff1d(chosen, best):
        dropped[int(found.designs[i])] = "another design beats it in the simulator"
    left = table.iloc[np.sort(best)].reset_index(drop=True)
    left["design"] = np.arange(1, len(left) + 1)
    return Kept(replace(run, front=left), dict(sorted(dropped.items())), shortfalls)


def _missed(measure: Measure, value: float, bound: float) -> float:
    figure = abs(value) if measure.signed else value
    gone = abs(figure / bound - 1.0) if measure.scale == "log" and bound else abs(figure - bound)
    return float(gone) if np.isfinite(gone) else 0.0


def _nothing_left(dropped: Mapping[int, str], shortfalls: Mapping[str, float], problem: Problem) -> str:
    lines = [f"  design {number}: {why}" for number, why in list(dropped.items())[:5]]
    lines += [f"  and {len(dropped) - 5} more"] if len(dropped) > 5 else []
    hint = ", ".join(shortfalls)
    last = f"\na margin to these limits leaves room for the difference: {hint}" if hint else ""
    return "nothing feasible in the simulator:\n" + "\n".join(lines) + last


def record_of(found: Resimulated) -> dict[str, Any]:
    """Return what run.json keeps of a re-simulation."""
    return {
        "simulator": found.simulator,
        "designs": len(found.designs),
        "failed": sorted(found.failures),
        "measures": {
            c.measure.name: {
                "difference": "relative" if c.measure.scale == "log" else c.measure.unit,
                "median": _finite(c.median),
                "worst": _finite(float(c.difference[c.worst])) if c.worst is not None else None,
                "worst_design": int(c.designs[c.worst]) if c.worst is not None else None,
            }
            for c in found.comparisons
        },
        "not_simulated": dict(found.left_out),
    }


def _finite(value: float) -> float | None:
    return value if np.isfinite(value) else None


def chosen_rows(run: Run, design: int | None = None, sample: int | None = None) -> pd.DataFrame:
    """Return the rows of a front that are to be simulated: one design, some evenly along the front, or all.

    Raises InputError when there is no such design, or none at all.
    """
    front = run.front
    if not len(front):
        raise InputError(f"{run.path}: its front is empty")
    if design is not None:
        rows = front[front["design"] == design]
        if not len(rows):
            raise InputError(f"--design: found {design}; its designs are 1 to {len(front)}")
        return rows
    if sample is not None and sample < len(front):
        return front.iloc[np.unique(np.linspace(0, len(front) - 1, sample).round().astype(int))]
    return front


def resimulate_run(
    run: Run,
    rows: pd.DataFrame,
    simulator: Path,
    *,
    measures: Iterable[str] | None = None,
    workers: int | None = None,
    watch: Watch | None = None,
) -> Resimulated:
    """Run rows of a front through the simulator; as `resimulate`."""
    sizes, numbers = sizes_of(run.problem, rows), [int(n) for n in rows["design"]]
    options = {"measures": measures, "workers": workers, "watch": watch}
    return resimulate(run.problem, sizes, numbers, simulator, source=str(run.path or ""), **options)  # type: ignore[arg-type]
