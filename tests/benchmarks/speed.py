"""Speed, as ratios within one run: `python -m tests.benchmarks.speed [--json]`.

Both sides of each ratio run on one core of the same machine, alternately, several times; a ratio is the median of the
pairs, and times are of the processor. What else runs there still matters: arrays suffer more from shared caches than
the simulator does, by up to a quarter.

    evaluation_vs_simulator   processor time a design of the circuit simulator over that of evaluating every measure and
                              every figure of every transistor in one batch, for the circuit of `PROBLEM` with the
                              square law; `detail` has it for all of `KINDS`
    search_vs_stock           time of pymoo's stock NSGA-II over that of a whole search with the same budget, on the
                              same evaluator and `PROBLEM`
    hypervolume_vs_stock      hypervolume of the search's archive over that of every feasible design that the stock
                              ever evaluated, in the same box; the median over the seeds
    evaluation_share          the part of the search's time that evaluation takes
    scaling_exponent          slope of log time over log designs from 2000 to 200 000
    peak_mb                   peak memory of a whole process that evaluates 200 000 designs
    designs_per_second        evaluations of the goals and limits of `PROBLEM` on one core, at 20 000 designs
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from optisize.errors import NothingFeasible
from optisize.evolution.archive import Archive, Front
from optisize.evolution.state import Settings
from optisize.front import explore
from optisize.front.run import Run
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import size_circuit
from optisize.stage.measures import CATALOGUE, FIGURES
from tests.benchmarks import simulator
from tests.reference.samples import Kind, conditions, draw

HERE = Path(__file__).resolve().parents[2]
PROBLEMS = sorted((HERE / "problems").glob("*.toml"))
PROBLEM = HERE / "problems" / "thermopile-preamplifier.toml"
KINDS = [Kind("nmos", "resistor", "single"), Kind("nmos", "mirror", "single")]
ONE_THREAD = {name: "1" for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")}
COUNTS = (2_000, 20_000, 200_000)
SIMULATED = 300


def spent(work: Callable[[], object]) -> float:
    """Return the processor seconds of some work in this process."""
    begin = time.process_time()
    work()
    return time.process_time() - begin


def least(work: Callable[[], object], repeats: int) -> float:
    """Return the least processor seconds of some work."""
    return min(spent(work) for _ in range(repeats))


def sized(kind: Kind, count: int) -> Analysis:
    """Return that many random sizings of a kind in the square-law process, all of them saturated at rest."""
    process = load_process("handbook")
    where, sizes = conditions(kind, process), draw(kind, process, 6 * count + 60, seed=1)
    a = Analysis(size_circuit(kind.topology, process, where, sizes))
    good = np.flatnonzero(a.converged & (a.room_at_rest > 5e-3) & (a.drain.id.min(axis=0) > 1e-8))[:count]
    if len(good) < count:
        raise RuntimeError(f"only {len(good)} of {6 * count + 60} sizings of {kind} are saturated")
    return Analysis(size_circuit(kind.topology, process, where, {name: v[good] for name, v in sizes.items()}))


def kind_problem(kind: Kind, sizes: Mapping[str, Array]) -> Problem:
    """Return a problem of a kind of stage in the square-law process whose sizing space holds the sizes."""
    where = conditions(kind, load_process("handbook"))
    ranges = "\n".join(f"{name} = [{v.min():.4g}, {v.max():.4g}]" for name, v in sizes.items())
    text = f"""
title = "every measure"
process = "handbook"
[stage]
input = "{kind.input}"
load = "{kind.load}"
tail = "{kind.tail}"
output = "{kind.output}"
[conditions]
supply = "{where.supply} V"
common_mode = ["{where.common_mode[0]!r} V", "{where.common_mode[1]!r} V"]
load_capacitance = "{where.load_capacitance} F"
[sizes]
{ranges}
[goals]
gain = "max"
supply_current = "min"
"""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "problem.toml"
        path.write_text(text, encoding="utf-8")
        return load_problem(path)


def every_measure(problem: Problem) -> list[str]:
    """Return the names of all measures and of all figures of all transistors."""
    return [*CATALOGUE, *(f"{t.name}.{figure}" for t in problem.topology.transistors for figure in FIGURES)]


def against_simulator(
    ngspice: str, kind: Kind, *, sizings: int = 2000, batch: int = 4000, simulated: int = SIMULATED, repeats: int = 5
) -> dict[str, Any]:
    """Time evaluation and simulation of the same sizings of a kind."""
    a = sized(kind, sizings)
    problem = kind_problem(kind, a.circuit.sizes)
    sizes = {name: np.resize(v, batch) for name, v in a.circuit.sizes.items()}
    names = every_measure(problem)
    script = simulator.Script(a)
    problem.measure(sizes, names)
    pairs = []
    for _ in range(repeats):
        own = least(lambda: problem.measure(sizes, names), 5) / batch
        other, way = simulator.fastest(ngspice, script, min(simulated, sizings), repeats=2)
        pairs.append((own, other))
    ratio = float(np.median([other / own for own, other in pairs]))
    own, other = np.median(pairs, axis=0)
    return {
        "ratio": ratio,
        "evaluation_us": 1e6 * float(own),
        "simulator_us": 1e6 * float(other),
        "simulator": way,
        "program_us": 1e6 * simulator.by_program(ngspice, script, min(simulated, sizings), repeats=2),
        "alterations": len(script.alterations(0)),
        "deviation": simulator.checked(ngspice, script, min(40, sizings)),
    }


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


def random_sizes(problem: Problem, count: int) -> dict[str, Array]:
    """Return the sizings of random vectors of the space."""
    return problem.space.decode(np.random.default_rng(1).random((problem.space.dimensions, count)))


def scaling(problem: Problem, counts: Sequence[int] = COUNTS, repeats: int = 3) -> dict[str, Any]:
    """Time the evaluation of more and more random designs of the space on one core."""
    seconds = []
    for count in counts:
        sizes = random_sizes(problem, count)
        problem.assess(sizes)
        times = max(repeats * counts[-1] // (10 * count), repeats)
        seconds.append(least(partial(problem.assess, sizes), times))
    exponent = np.polyfit(np.log(counts), np.log(seconds), 1)[0]
    rates = [count / s for count, s in zip(counts, seconds, strict=True)]
    return {"exponent": float(exponent), "seconds": dict(zip(map(str, counts), seconds, strict=True)), "rates": rates}


def peak_megabytes(path: Path, count: int = COUNTS[-1]) -> float:
    """Return the peak memory of a whole process that evaluates so many designs of a problem."""
    command = [sys.executable, "-m", "tests.benchmarks.speed", "--evaluate", str(count), "--problem", str(path)]
    done = subprocess.run(command, cwd=HERE, env=os.environ | ONE_THREAD, capture_output=True, text=True, check=True)
    return float(done.stdout)


def _own_peak_megabytes() -> float:
    """Return the peak memory of this process; what the process that started it had does not count."""
    status = Path("/proc/self/status")
    if status.exists():
        line = next(x for x in status.read_text(encoding="ascii").splitlines() if x.startswith("VmHWM"))
        return int(line.split()[1]) / 1024.0
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / (1024.0**2 if sys.platform == "darwin" else 1024.0)


def measured(ngspice: str, seeds: Sequence[int]) -> dict[str, Any]:
    """Run every benchmark; return the figures by name, and what they are made of under ``detail``."""
    kinds = {str(kind): against_simulator(ngspice, kind) for kind in KINDS}
    searches = {path.stem: against_stock(load_problem(path), seeds) for path in PROBLEMS}
    grown = scaling(load_problem(PROBLEM))
    main = searches[PROBLEM.stem]
    return {
        "evaluation_vs_simulator": next(iter(kinds.values()))["ratio"],  # the circuit of `PROBLEM`
        "search_vs_stock": main["ratio"],
        "hypervolume_vs_stock": main["hypervolume"],
        "evaluation_share": main["share"],
        "scaling_exponent": grown["exponent"],
        "peak_mb": peak_megabytes(PROBLEM),
        "designs_per_second": grown["rates"][1],
        "detail": {"kinds": kinds, "problems": searches, "scaling": grown},
    }


def _table(figures: dict[str, Any]) -> str:
    detail = figures["detail"]
    lines = [f"{name:26}{value:12.4g}" for name, value in figures.items() if name != "detail"]
    for group in ("kinds", "problems"):
        for name, row in detail[group].items():
            shown = ", ".join(f"{k} {v:.4g}" if isinstance(v, float) else f"{k} {v}" for k, v in row.items())
            lines.append(f"{name}: {shown}")
    lines.append(f"scaling: {detail['scaling']['seconds']}")
    return "\n".join(lines)


def main() -> int:
    """Run from the command line, on one thread."""
    parser = argparse.ArgumentParser(description="Speed, as ratios within one run.")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--seeds", type=int, default=5, help="searches a problem")
    parser.add_argument("--evaluate", type=int, help="only evaluate so many designs; print the peak memory")
    parser.add_argument("--problem", default=str(PROBLEM), help="of --evaluate")
    wanted = parser.parse_args()
    if any(os.environ.get(name) != value for name, value in ONE_THREAD.items()):
        os.environ.update(ONE_THREAD)  # numpy reads them when it is loaded: begin again
        os.execv(sys.executable, [sys.executable, "-m", "tests.benchmarks.speed", *sys.argv[1:]])
    if wanted.evaluate:
        problem = load_problem(wanted.problem)
        problem.assess(random_sizes(problem, wanted.evaluate))
        print(_own_peak_megabytes())
        return 0
    ngspice = shutil.which("ngspice")
    if ngspice is None:
        print("the circuit simulator ngspice is not installed", file=sys.stderr)
        return 1
    figures = measured(ngspice, range(1, wanted.seeds + 1))
    print(json.dumps(figures, indent=1) if wanted.json else _table(figures))
    return 0


if __name__ == "__main__":
    sys.exit(main())
