"""Evaluation of whole batches against the circuit simulator, and what each measure takes."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Mapping
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from optisize.problem.evaluate import CHUNK, Problem
from optisize.problem.load import load_problem
from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import size_circuit
from optisize.stage.measures import CATALOGUE, FIGURES
from tests.benchmarks import simulator
from tests.benchmarks.answers import checked
from tests.benchmarks.catalogue import AT_HIGH, HIGH
from tests.benchmarks.scripts import FOUR_ANALYSES, Script
from tests.benchmarks.timing import least, spent
from tests.reference.samples import Kind, conditions, draw

KINDS = [
    Kind("nmos", "resistor", "single"),
    Kind("nmos", "mirror", "single"),
    Kind("pmos", "source", "cascode", "differential"),
    Kind("nmos", "mirror", "single", form="telescopic"),
]
SIMULATED = 300
TRIES = 40  # draws of a batch's size in search of saturated sizings


def sized(kind: Kind, designs: int) -> Analysis:
    """Return that many random sizings of a kind in the square-law process, all of them saturated at rest."""
    process = load_process("handbook")
    where, found, left = conditions(kind, process), [], designs
    for seed in range(1, TRIES + 1):
        sizes = draw(kind, process, 6 * designs + 60, seed)
        a = Analysis(size_circuit(kind.topology, process, where, sizes))
        good = np.flatnonzero(a.converged & (a.room_at_rest > 5e-3) & (a.drain.id.min(axis=0) > 1e-8))[:left]
        found.append({name: v[good] for name, v in sizes.items()})
        left -= len(good)
        if not left:
            break
    else:
        raise RuntimeError(f"{left} of {designs} saturated sizings of {kind} are missing after {TRIES} draws")
    joined = {name: np.concatenate([part[name] for part in found]) for name in found[0]}
    return Analysis(size_circuit(kind.topology, process, where, joined))


def kind_problem(kind: Kind, sizes: Mapping[str, Array]) -> Problem:
    """Return a problem of a kind of stage in the square-law process, with a sizing space over the sizes.

    The space leaves out what is narrower than the process can draw; evaluation takes it all the same.
    """
    process = load_process("handbook")
    where, narrowest = conditions(kind, process), process.grid.minimum_width
    lows = {name: max(v.min(), narrowest) if name.endswith("width") else v.min() for name, v in sizes.items()}
    ranges = "\n".join(f"{name} = [{lows[name]:.4g}, {max(v.max(), 2 * lows[name]):.4g}]" for name, v in sizes.items())
    held = f'output_common_mode = "{where.output_common_mode} V"' if where.output_common_mode else ""
    at_high = "\n".join(f'{name} = {{ of = "{of}", frequency = "{HIGH} Hz" }}' for name, of in AT_HIGH.items())
    text = f"""
title = "every measure"
process = "handbook"
[stage]
input = "{kind.input}"
load = "{kind.load}"
tail = "{kind.tail}"
form = "{kind.form}"
output = "{kind.output}"
[conditions]
supply = "{where.supply} V"
common_mode = ["{where.common_mode[0]!r} V", "{where.common_mode[1]!r} V"]
{held}
load_capacitance = "{where.load_capacitance} F"
[sizes]
{ranges}
[measures]
{at_high}
[goals]
gain = "max"
supply_current = "min"
"""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "problem.toml"
        path.write_text(text, encoding="utf-8")
        return load_problem(path)


def of_four_analyses(problem: Problem) -> list[str]:
    """Return the names of the measures that four analyses give, with all figures of all transistors."""
    return [*FOUR_ANALYSES, *(f"{t.name}.{figure}" for t in problem.topology.transistors for figure in FIGURES)]


def every_measure(problem: Problem) -> list[str]:
    """Return the names of all measures of the catalogue, and of the rejections that are also taken at 1 MHz."""
    return [*CATALOGUE, *problem.own_measures]


def against_simulator(
    ngspice: str,
    kind: Kind,
    make: type[Script],
    wanted: Callable[[Problem], list[str]],
    *,
    sizings: int = 2000,
    batch: int = 4000,
    simulated: int = SIMULATED,
    repeats: int = 5,
) -> dict[str, Any]:
    """Time evaluation and simulation of the same sizings of a kind."""
    a = sized(kind, sizings)
    problem = kind_problem(kind, a.circuit.sizes)
    sizes = {name: np.resize(v, batch) for name, v in a.circuit.sizes.items()}
    names, script = wanted(problem), make(a)
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
        "analyses": len(script.analyses(0)),
        "checked": checked(ngspice, script, min(40, sizings)),
    }


def measures_us(kind: Kind, designs: int = CHUNK, repeats: int = 5) -> dict[str, dict[str, float]]:
    """Return the microseconds a design of each measure, two ways, the dearest first.

    ``alone``: asked of designs of which only the operating point is known. ``in_turn``: asked after those before it in
    the catalogue, which have solved some of what it needs; these and the operating point add up to the whole.
    """
    a = sized(kind, designs)
    problem = kind_problem(kind, a.circuit.sizes)
    wanted = [problem.find(name) for name in every_measure(problem)]
    every = np.arange(designs)
    rounds = []
    for _ in range(repeats):
        fresh = Analysis(problem.circuit(a.circuit.sizes))
        rounds.append([spent(partial(getattr, fresh, "point")), *(spent(partial(m.of, fresh)) for m in wanted)])
    in_turn = np.min(rounds, axis=0)
    alone = [min(spent(partial(m.of, a.take(every))) for _ in range(repeats)) for m in wanted]
    rows = zip(["operating point", *(m.name for m in wanted)], [in_turn[0], *alone], in_turn, strict=True)
    scale = 1e6 / designs
    table = {name: {"alone": scale * float(one), "in_turn": scale * float(turn)} for name, one, turn in rows}
    return dict(sorted(table.items(), key=lambda row: -row[1]["in_turn"]))
