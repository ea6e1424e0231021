"""That the benchmarks run, at a tiny size; how fast anything is depends on the machine and is not judged here."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.problem.load import load_problem
from optisize.simulator.ngspice import find_simulator, run
from tests.benchmarks import evaluation, sampling, searching, speed, tables
from tests.benchmarks.catalogue import LEFT_OUT, CatalogueScript
from tests.benchmarks.scripts import Script
from tests.reference.samples import Kind

pytestmark = pytest.mark.filterwarnings("ignore::RuntimeWarning")
TINY = {"sizings": 12, "batch": 24, "simulated": 8, "repeats": 1}
FEW_DISTORT = "distortion"  # of a telescopic stage: a millivolt asks for more than the supply of most


@pytest.mark.parametrize("kind", speed.FOUR_KINDS, ids=str)
def test_four_analyses(ngspice: str, kind: Kind) -> None:
    """The simulator answers the timed commands with what the kernel says, for most designs."""
    found = evaluation.against_simulator(ngspice, kind, Script, evaluation.of_four_analyses, **TINY)
    assert found["evaluation_us"] > 0.0
    assert found["simulator_us"] > 0.0
    assert found["program_us"] > 0.0
    for name, row in found["checked"].items():
        assert row["within"] >= 0.75, name


@pytest.mark.parametrize("kind", evaluation.KINDS, ids=str)
def test_every_analysis(ngspice: str, kind: Kind) -> None:
    found = evaluation.against_simulator(ngspice, kind, CatalogueScript, evaluation.every_measure, **TINY)
    assert found["analyses"] >= 8
    assert len(found["checked"]) >= 15
    for name, row in found["checked"].items():
        assert row["within"] >= 0.75 or name == FEW_DISTORT, name


@pytest.mark.parametrize("kind", evaluation.KINDS, ids=str)
def test_every_measure(kind: Kind) -> None:
    a = evaluation.sized(kind, 4)
    problem = evaluation.kind_problem(kind, a.circuit.sizes)
    names = evaluation.every_measure(problem)
    values = problem.measure(a.circuit.sizes, names)
    assert len(values) == len(names) > 28
    assert set(LEFT_OUT) < set(names)
    assert np.isfinite(values["gain"]).all()
    assert set(evaluation.of_four_analyses(problem)) > {"gain", "tail.gm"}


def test_what_each_measure_takes() -> None:
    table = evaluation.measures_us(evaluation.KINDS[0], designs=20, repeats=1)
    assert {"operating point", "gain", "distortion", "cmrr_at_1mhz"} < set(table)
    assert all(row["alone"] >= 0.0 and row["in_turn"] >= 0.0 for row in table.values())


def test_samples_against_designs() -> None:
    found = sampling.against_evaluation(load_problem(speed.PROBLEM), samples=300, designs=450, repeats=1)
    assert found["ratio"] > 0.0


def test_against_stock() -> None:
    found = searching.against_stock(load_problem(speed.PROBLEM), [1], population=24, generations=6)
    assert found["ratio"] > 0.0
    assert 0.0 < found["share"] < 1.0


def test_tables(open_process: Path) -> None:
    """Both searches run, and the simulator has the currents of designs that are altered in place."""
    problem = load_problem(tables.PROBLEM, open_process)
    found = tables.against_charge(tables.PROBLEM, open_process, repeats=1, population=24, generations=6)
    assert found["ratio"] > 0.0
    assert tables.against_simulator(problem, designs=40, simulated=4, repeats=1)["ratio"] > 1.0
    sizes = tables.feasible(problem, 20)
    script = tables.TableScript(problem, sizes)
    lines = [command for k in range(20) for command in (*script.alterations(k), "op", "print i(vsupply)")]
    deck = [*script.deck, ".control", "set num_threads=1", *lines, "quit", ".endc", ".end"]
    said = run(find_simulator(), open_process.parent, deck)
    currents = [-float(line.split("=")[1]) for line in said.splitlines() if line.startswith("i(vsupply)")]
    np.testing.assert_allclose(currents, problem.measure(sizes, ["supply_current"])["supply_current"], rtol=0.01)


def test_scaling() -> None:
    found = speed.scaling(load_problem(speed.PROBLEM), (50, 100, 200), repeats=1)
    assert np.isfinite(found["exponent"])


def test_peak_of_a_process() -> None:
    assert speed.peak_megabytes(speed.PROBLEM, 500) > 10.0


def test_shorter_searches_are_of_problems() -> None:
    assert set(speed.SHORTER) < {path.stem for path in speed.PROBLEMS}
