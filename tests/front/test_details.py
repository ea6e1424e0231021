"""Designs in detail, against what the problem itself says of them and against the run's own figures."""

from pathlib import Path

import numpy as np

from optisize.front.details import details, places
from optisize.front.run import load_run
from optisize.front.table import sizes_of, values_of


def test_devices_are_drawn_as_they_are_sized(finished_run: Path) -> None:
    """Fingers times their width times units are the width; squares times the sheet resistance the resistance."""
    run = load_run(finished_run)
    sizes = sizes_of(run.problem, run.front)
    found = details(run.problem, sizes)
    t = found.transistors
    for i, group in enumerate(t.groups):
        np.testing.assert_allclose(t.fingers[i] * t.finger_width[i], sizes[f"{group}.width"])
        np.testing.assert_allclose(t.length[i], sizes[f"{group}.length"])
    np.testing.assert_array_equal(t.units[t.names.index("tail")], sizes["tail.units"])
    sheet = run.problem.process.resistor.sheet_resistance
    np.testing.assert_allclose(found.resistors.squares * sheet, found.resistors.resistance)
    assert (t.fingers[t.names.index("input.p")] % 2 == 0).all()


def test_the_operating_point_is_that_of_the_measures(finished_run: Path) -> None:
    run = load_run(finished_run)
    sizes = sizes_of(run.problem, run.front)
    t = details(run.problem, sizes).transistors
    names = ["tail.id", "input.p.gm", "input.p.vgs", "supply_current"]
    values = run.problem.measure(sizes, names)
    tail, pair = t.names.index("tail"), t.names.index("input.p")
    np.testing.assert_allclose(t.figures["id"][tail], values["tail.id"])
    np.testing.assert_allclose(t.figures["gm"][pair], values["input.p.gm"])
    np.testing.assert_allclose(t.figures["gm_per_id"], t.figures["gm"] / t.figures["id"])
    np.testing.assert_allclose(t.figures["margin"], t.figures["vds"] - t.figures["vdsat"])
    currents = t.figures["id"][[tail, t.names.index("bias")]].sum(axis=0)
    np.testing.assert_allclose(currents, values["supply_current"], rtol=1e-6)


def test_places_go_from_the_worst_to_the_best(finished_run: Path) -> None:
    run = load_run(finished_run)
    values = values_of(run.problem, run.front)
    found = places(run.problem.goals, values)
    assert found["gain"][values["gain"].argmax()] == 1.0
    assert found["supply_current"][values["supply_current"].argmin()] == 1.0
    assert all(x.min() == 0.0 for x in found.values())
