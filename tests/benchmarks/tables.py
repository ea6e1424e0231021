"""The table law against the circuit simulator with the same models, and against the charge law: `python -m
tests.benchmarks.tables [--json] [--process FILE]`; the README says how its process is made.

    table_vs_simulator   processor time a design of the simulator, through its shared library in one process with the
                         circuit altered in place, over that of evaluating the same measures with the table law
    search_vs_charge     processor time of a search with the table law over that of the same search with the charge law

The analyses a design are the four of `scripts.Script`: a sweep of the common mode over three points, the response to a
differential input with four points a decade, one point of the response to the common mode, and a sweep of the
differential input to the end of the swing. To the simulator's advantage its models stay in the bin of the first
design, and it does not spread them over threads that wait for each other.
"""

from __future__ import annotations

import argparse
import json
import re
import shutil
import sys
import time
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from optisize.front import explore
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from optisize.process.card import locate_process
from optisize.process.law import Array
from optisize.simulator.deck import benched, write_deck
from optisize.simulator.netlist import number, part
from optisize.stage.analysis import Analysis
from tests.benchmarks import simulator
from tests.benchmarks.sampling import random_sizes
from tests.benchmarks.scripts import DC, FOUR_ANALYSES, OPTIONS, PER_DECADE, SWEEP, moved
from tests.benchmarks.timing import least

HERE = Path(__file__).resolve().parents[2]
PROBLEM = HERE / "problems" / "strain-gauge-amplifier.toml"
STEERED = 0.2  # V, of the differential input, where the swing of these stages has ended


class TableScript:
    """One stage of transistors of the library, altered in place from design to design."""

    def __init__(self, problem: Problem, sizes: Mapping[str, Array]) -> None:
        """Take designs that have an operating point, each size (N,)."""
        self.a = Analysis(problem.circuit(sizes))
        first = {name: v[:1] for name, v in sizes.items()}
        text = write_deck(problem, first, "altered in place", benched(problem, ["gain"])).text
        head = text.split(".control")[0]
        options = re.sub(r"\.options .*?(?= temp=)", f".options {OPTIONS}", head)
        self.deck = [*options.splitlines(), f".save all {' '.join(self._kept())}"]

    def _device(self, name: str) -> str:
        return f"m.xstage.x{part(name)}.m0"

    def _kept(self) -> list[str]:
        rows = [t for t in self.a.topology.transistors if t.saturates]
        return [f"@{self._device(t.name)}[{figure}]" for t in rows for figure in ("id", "vdsat")]

    def alterations(self, k: int) -> list[str]:
        """Return the commands that put in the sizes of design `k`."""
        circuit, commands = self.a.circuit, []
        for row, t in enumerate(self.a.topology.transistors):
            values = {"w": circuit.drawn.finger_width[row, k], "l": circuit.length[row, k]}
            values["m"] = circuit.drawn.fingers[row, k] * circuit.units[row, k]
            commands += [f"alter @{self._device(t.name)}[{key}]={value:.9g}" for key, value in values.items()]
        others = [(f"r.xstage.r{part(r.name)}", r.size) for r in self.a.topology.resistors]
        others += [(f"i.xstage.i{s.name}", s.size) for s in self.a.topology.sources]
        return commands + [f"alter {name}={circuit.sizes[size][k]:.9g}" for name, size in others]

    def commands(self, count: int) -> list[str]:
        """Return the commands for the first `count` designs."""
        low, high = map(number, self.a.circuit.conditions.common_mode)
        step = number((self.a.circuit.conditions.common_mode[1] - self.a.circuit.conditions.common_mode[0]) / 2.0)
        ends = self.a.gain_crossing(np.ones(self.a.circuit.designs)), self.a.gain_crossing(self.a.adm**2 - 1.0)
        span = f"{np.nanmin(ends[0]) / 30.0:.6g} {np.nanmax(ends[1]) * 1.2:.6g}"
        result = ["set num_threads=1"]
        for k in range(count):
            result += self.alterations(k)
            result += [f"dc vcm {low} {high} {step}", f"ac dec {PER_DECADE} {span}"]
            result += [*moved("vd", "vcm"), f"ac lin 1 {DC} {DC}", *moved("vcm", "vd")]
            result += [f"dc vd {-STEERED} {STEERED} {STEERED / SWEEP}", "destroy all"]
        return result


def feasible(problem: Problem, designs: int) -> dict[str, Array]:
    """Return random sizings of a problem that have an operating point with everything saturated, each size (N,)."""
    sizes = random_sizes(problem, 20 * designs)
    good = np.flatnonzero(problem.measure(sizes, ["headroom"])["headroom"] > 0.0)[:designs]
    if len(good) < designs:
        raise RuntimeError(f"only {len(good)} of {designs} sizings are saturated")
    return {name: v[good] for name, v in sizes.items()}


def against_simulator(
    problem: Problem, *, designs: int = 2000, simulated: int = 60, repeats: int = 3
) -> dict[str, Any]:
    """Time evaluation and simulation of the same sizings."""
    sizes = feasible(problem, designs)
    script = TableScript(problem, sizes)
    problem.measure(sizes, FOUR_ANALYSES)
    pairs = []
    for _ in range(repeats):
        own = least(lambda: problem.measure(sizes, FOUR_ANALYSES), 3) / designs
        other = simulator.by_library(script, simulated, repeats=1)  # type: ignore[arg-type]
        if other is None:
            raise RuntimeError("the simulator's shared library is not installed")
        pairs.append((own, other))
    own, other = np.median(pairs, axis=0)
    ratio = float(np.median([other / own for own, other in pairs]))
    return {"ratio": ratio, "evaluation_us": 1e6 * float(own), "simulator_us": 1e6 * float(other)}


def against_charge(path: Path, table: Path, repeats: int = 3, **changes: int) -> dict[str, Any]:
    """Time whole searches with the table law and with the charge law, one after the other."""
    with_table, with_charge = load_problem(path, table), charge_problem(path)
    rows = []
    for seed in range(1, repeats + 1):
        spent = []
        for problem in (with_table, with_charge):
            settings = explore.settings_of(problem, seed=seed, patience=0, **changes)
            begin = time.process_time()
            explore.search(problem, threads=1, settings=settings)
            spent.append(time.process_time() - begin)
        rows.append(spent)
    own, other = np.median(rows, axis=0)
    return {"ratio": float(np.median([a / b for a, b in rows])), "table_s": float(own), "charge_s": float(other)}


def charge_problem(path: Path) -> Problem:
    """Return the same problem with the charge law, without its limit on noise, which suits the table's process."""
    problem = load_problem(path, locate_process("generic-180"))
    return replace(problem, limits=tuple(x for x in problem.limits if x.measure.name != "input_noise"))


def measured(path: Path, table: Path) -> dict[str, Any]:
    """Return the figures by name, and what they are made of."""
    law, search = against_simulator(load_problem(path, table)), against_charge(path, table)
    detail = {"law": law, "search": search}
    return {"table_vs_simulator": law["ratio"], "search_vs_charge": search["ratio"], "detail": detail}


def main() -> int:
    """Run from the command line."""
    parser = argparse.ArgumentParser(description="Speed of the table law, as ratios within one run.")
    parser.add_argument("--json", action="store_true", help="print JSON")
    parser.add_argument("--process", type=Path, default=Path("process/open.toml"), help="the process with the tables")
    wanted = parser.parse_args()
    if shutil.which("ngspice") is None:
        print("the circuit simulator ngspice is not installed", file=sys.stderr)
        return 1
    figures = measured(PROBLEM, wanted.process)
    print(json.dumps(figures, indent=1) if wanted.json else "\n".join(f"{k:24}{v}" for k, v in figures.items()))
    return 0


if __name__ == "__main__":
    sys.exit(main())
