"""A measure that nobody asks for costs nothing: what is called while some are asked for. Common practice, no source."""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Callable
from functools import partial
from pathlib import Path
from types import FrameType

import numpy as np
import pytest

from optisize.problem.load import load_problem
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.stage.stages import analysed, kinds_in, named, under

PROBLEM = Path(__file__).resolve().parents[2] / "problems" / "thermopile-preamplifier.toml"

# What takes time: the law of all transistors, solving for all designs, iterations, and drawing. Each with a part of the
# path of its file, since other rooms use some of the names for what costs nothing.
LAW = ("drain", "saturation", "drain_and_saturation", "capacitances", "noise_conductance")
DEAR = {
    **dict.fromkeys(LAW, "/process/"),
    **dict.fromkeys(("operating_point", "settle", "newton_step"), "/bias.py"),
    **dict.fromkeys(("solve", "crossing"), "/linear.py"),
    "adjoint_solve": "/response.py",
    "follow": "/excursion.py",
    "null": "/nulling.py",
    "draw_transistors": "/layout.py",
}

SOLVED = {"drain_and_saturation"}  # the transistors at the operating point
LINEAR = SOLVED | {"solve"}
AT_OUTPUT = LINEAR | {"adjoint_solve"}
CHARGED = {"capacitances", "draw_transistors"}
NEEDS = {
    "area": {"draw_transistors"},
    "supply_current": SOLVED,
    "power": SOLVED,
    "gain": LINEAR,
    "common_mode_gain": LINEAR,
    "cmrr": LINEAR,
    "supply_rejection": AT_OUTPUT,
    "ground_rejection": AT_OUTPUT,
    "output_resistance": AT_OUTPUT,
    "offset_sigma": AT_OUTPUT | {"drain"},
    "cmrr_mismatch": AT_OUTPUT | {"drain"},
    "slew_rate": SOLVED | CHARGED,
    "input_capacitance": LINEAR | CHARGED,
    "bandwidth": LINEAR | CHARGED | {"crossing"},
    "unity_gain_frequency": LINEAR | CHARGED | {"crossing"},
    "input_noise": AT_OUTPUT | CHARGED | {"noise_conductance", "drain"},
    "headroom": LINEAR | {"settle", "newton_step", "drain", "saturation"},
    "output_swing": LINEAR | {"follow"},
    "input_range_low": LINEAR | {"follow"},
    "distortion": LINEAR | {"settle", "newton_step", "drain"},
}


def dear_calls(work: Callable[[], object]) -> Counter[str]:
    """Return how often each function that takes time is called during some work."""
    found: Counter[str] = Counter()

    def watch(frame: FrameType, event: str, _: object) -> None:
        name = frame.f_code.co_name
        if event == "call" and name in DEAR and DEAR[name] in Path(frame.f_code.co_filename).as_posix():
            found[name] += 1

    before = sys.getprofile()
    sys.setprofile(watch)
    try:
        work()
    finally:
        sys.setprofile(before)
    return found


def solved(process: str, kind: tuple[str, ...]) -> Analysis:
    """Return stages of which only the operating point is known."""
    a = analysed(kind, process, input_width=np.array([80e-6, 100e-6, 120e-6]))
    low, high = a.circuit.conditions.common_mode
    a = under(a, common_mode=(low - 0.02, high + 0.02))
    assert a.converged.all()
    return a


@pytest.mark.parametrize(("process", "kind"), kinds_in("handbook", "generic-180"), ids=named)
def test_gain_takes_one_law_and_one_solution(process: str, kind: tuple[str, ...]) -> None:
    """No capacitances, no noise, no excursion, no adjoint; nothing at all the second time."""
    a = solved(process, kind)
    assert dear_calls(partial(CATALOGUE["gain"].of, a)) == {"drain_and_saturation": 1, "solve": 1}
    for name in ("gain", "common_mode_gain", "supply_current"):
        assert not dear_calls(partial(CATALOGUE[name].of, a))


@pytest.mark.parametrize("name", NEEDS)
@pytest.mark.parametrize(
    "kind", [("nmos", "mirror", "single"), ("pmos", "source", "cascode", "differential")], ids=named
)
def test_a_measure_takes_what_it_needs(kind: tuple[str, ...], name: str) -> None:
    a = solved("generic-180", (*kind, "single-ended")[:4])
    assert set(dear_calls(partial(CATALOGUE[name].of, a))) <= NEEDS[name]


def test_a_search_for_gain_takes_an_operating_point() -> None:
    """Newton steps of the law and one more; each solves once, and the linearised stage once more."""
    problem = load_problem(PROBLEM)
    sizes = problem.space.decode(np.random.default_rng(1).random((problem.space.dimensions, 50)))
    found = dear_calls(lambda: problem.measure(sizes, ["gain"]))
    steps = found["newton_step"]
    assert found == {
        "operating_point": 1,
        "settle": 1,
        "newton_step": steps,
        "drain": steps,
        "drain_and_saturation": 1,
        "solve": found["solve"],
    }
    assert steps + 1 <= found["solve"] <= 2 * steps + 1  # a step may need a leak


def test_what_measures_share_is_solved_once() -> None:
    a = solved("handbook", ("nmos", "mirror", "single", "single-ended"))
    found = dear_calls(lambda: [CATALOGUE[name].of(a) for name in ("bandwidth", "slew_rate", "input_capacitance")])
    assert found["capacitances"] == found["drain_and_saturation"] == found["draw_transistors"] == 1
    every = dear_calls(lambda: [m.of(a) for m in CATALOGUE.values()])
    assert not every["capacitances"]
    assert every["noise_conductance"] == 1
    assert not every["operating_point"]
