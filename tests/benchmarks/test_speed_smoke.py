"""That the benchmarks run, at a tiny size; how fast anything is depends on the machine and is not judged here."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.problem.load import load_problem
from tests.benchmarks import speed
from tests.reference.samples import Kind

pytestmark = pytest.mark.filterwarnings("ignore::RuntimeWarning")


@pytest.mark.parametrize("kind", speed.KINDS, ids=str)
def test_against_simulator(ngspice: str, kind: Kind) -> None:
    """The simulator answers the timed commands with what the kernel says; its points are few, hence the bounds."""
    found = speed.against_simulator(ngspice, kind, sizings=12, batch=24, simulated=8, repeats=1)
    assert found["evaluation_us"] > 0.0
    assert found["simulator_us"] > 0.0
    assert found["program_us"] > 0.0
    bounds = {"bandwidth": 0.03, "unity_gain_frequency": 0.03, "output_swing": 0.02, "headroom": 1e-3}
    for name, deviation in found["deviation"].items():
        assert deviation < bounds.get(name, 0.01), name


def test_every_measure() -> None:
    kind = speed.KINDS[0]
    a = speed.sized(kind, 4)
    problem = speed.kind_problem(kind, a.circuit.sizes)
    names = speed.every_measure(problem)
    values = problem.measure(a.circuit.sizes, names)
    assert len(values) == len(names) > 30
    assert np.isfinite(values["gain"]).all()


def test_against_stock() -> None:
    found = speed.against_stock(load_problem(speed.PROBLEM), [1], population=24, generations=6)
    assert found["ratio"] > 0.0
    assert 0.0 < found["share"] < 1.0


def test_scaling() -> None:
    found = speed.scaling(load_problem(speed.PROBLEM), (50, 100, 200), repeats=1)
    assert np.isfinite(found["exponent"])


def test_peak_of_a_process() -> None:
    assert speed.peak_megabytes(speed.PROBLEM, 500) > 10.0
