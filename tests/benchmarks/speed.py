"""Speed, as ratios within one run: `python -m tests.benchmarks.speed [--json]`.

Both sides of each ratio run on one core of the same machine, alternately, several times; a ratio is the median of the
pairs, and times are of the processor. What else runs there still matters: arrays suffer more from shared caches than
the simulator does, by up to a quarter.

    evaluation_vs_simulator   processor time a design of the circuit simulator over that of evaluating, in one batch,
                              the measures that four analyses give and every figure of every transistor, for the circuit
                              of `PROBLEM` with the square law; `detail.kinds` has it for `FOUR_KINDS`
    catalogue_vs_simulator    the same of every measure of the catalogue with its default parameters, and of rejections
                              at 1 MHz, against the nine analyses that these need, the smallest of `KINDS`;
                              `detail.catalogue` has all of them, and `detail.measures_us` what each measure takes
    spread_vs_evaluation      time of 100 000 samples of the mismatch of one design over that of evaluating 150 000
                              designs with the same measures, the largest of all problems; at most one is wanted
    search_vs_stock           time of pymoo's stock NSGA-II over that of a whole search with the same budget, on the
                              same evaluator and `PROBLEM`; `detail.problems` has it for all problems, those of
                              `SHORTER` with fewer generations and seeds
    hypervolume_vs_stock      hypervolume of the search's archive over that of every feasible design that the stock
                              ever evaluated, in the same box; the median over the seeds
    evaluation_share          the part of the search's time that evaluation takes
    scaling_exponent          slope of log time over log designs from 2000 to 200 000
    peak_mb                   peak memory of a whole process that evaluates 200 000 designs
    designs_per_second        evaluations of the goals and limits of `PROBLEM` on one core, at 20 000 designs
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import shutil
import subprocess
import sys
from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from tests.benchmarks import evaluation, sampling
from tests.benchmarks.catalogue import CatalogueScript
from tests.benchmarks.evaluation import KINDS
from tests.benchmarks.sampling import random_sizes
from tests.benchmarks.scripts import Script
from tests.benchmarks.searching import against_stock
from tests.benchmarks.timing import least

HERE = Path(__file__).resolve().parents[2]
OWN_MODELS = {"strain-gauge-amplifier"}  # its process has to be made first, see `tables`
PROBLEMS = [p for p in sorted((HERE / "problems").glob("*.toml")) if p.stem not in OWN_MODELS]
PROBLEM = HERE / "problems" / "thermopile-preamplifier.toml"
FOUR_KINDS = KINDS[:2]
SHORTER = {"hydrophone-recorder": 60, "low-supply-telescopic": 60}  # generations; their designs take longest
ONE_THREAD = {name: "1" for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")}
COUNTS = (2_000, 20_000, 200_000)


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


def searched(path: Path, seeds: Sequence[int]) -> dict[str, Any]:
    """Time searches of a problem against the stock."""
    if path.stem in SHORTER:
        return against_stock(load_problem(path), seeds[:2], generations=SHORTER[path.stem])
    return against_stock(load_problem(path), seeds)


def measured(ngspice: str, seeds: Sequence[int]) -> dict[str, Any]:
    """Run every benchmark; return the figures by name, and what they are made of under ``detail``."""
    four, every = evaluation.of_four_analyses, evaluation.every_measure
    kinds = {str(kind): evaluation.against_simulator(ngspice, kind, Script, four) for kind in FOUR_KINDS}
    catalogue = {str(kind): evaluation.against_simulator(ngspice, kind, CatalogueScript, every) for kind in KINDS}
    spreads = {path.stem: sampling.against_evaluation(load_problem(path)) for path in PROBLEMS}
    searches = {path.stem: searched(path, seeds) for path in PROBLEMS}
    grown = scaling(load_problem(PROBLEM))
    main = searches[PROBLEM.stem]
    return {
        "evaluation_vs_simulator": next(iter(kinds.values()))["ratio"],  # the circuit of `PROBLEM`
        "catalogue_vs_simulator": min(row["ratio"] for row in catalogue.values()),
        "spread_vs_evaluation": max(row["ratio"] for row in spreads.values()),
        "search_vs_stock": main["ratio"],
        "hypervolume_vs_stock": main["hypervolume"],
        "evaluation_share": main["share"],
        "scaling_exponent": grown["exponent"],
        "peak_mb": peak_megabytes(PROBLEM),
        "designs_per_second": grown["rates"][1],
        "detail": {
            "kinds": kinds,
            "catalogue": catalogue,
            "measures_us": {str(kind): evaluation.measures_us(kind) for kind in KINDS},
            "spreads": spreads,
            "problems": searches,
            "scaling": grown,
        },
    }


def _table(figures: dict[str, Any]) -> str:
    detail = figures["detail"]
    lines = [f"{name:26}{value:12.4g}" for name, value in figures.items() if name != "detail"]
    for group in ("kinds", "catalogue", "spreads", "problems"):
        for name, row in detail[group].items():
            plain = {k: v for k, v in row.items() if not isinstance(v, dict)}
            shown = ", ".join(f"{k} {v:.4g}" if isinstance(v, float) else f"{k} {v}" for k, v in plain.items())
            lines.append(f"{group} {name}: {shown}")
            for measure, kept in row.get("checked", {}).items():
                lines.append(f"    {measure:26}" + "".join(f"{k} {v:<10.3g}" for k, v in kept.items()))
    lines.append(f"scaling: {detail['scaling']['seconds']}")
    kinds = detail["measures_us"]
    lines.append(f"microseconds a design, alone and in turn: {', '.join(kinds)}")
    for measure in next(iter(kinds.values())):
        cells = [f"{table[measure]['alone']:8.2f}{table[measure]['in_turn']:8.2f}" for table in kinds.values()]
        lines.append(f"    {measure:26}" + "  ".join(cells))
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
