"""Drawn shapes: the grid, fingers, junctions and area, against a hand count. Common practice, no source."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from optisize.process.card import Grid, built_in_names, load_process
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import build
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.layout import draw_transistors, finger_count, snap_length, snap_resistance, snap_width
from optisize.stage.measures import CATALOGUE

GRIDS = [load_process(name).grid for name in built_in_names()]
AWKWARD = GRIDS[0].model_copy(update={"minimum_width": 0.22e-6, "maximum_finger": 0.3e-6, "step": 5e-9})
grids = st.sampled_from([*GRIDS, AWKWARD])
widths = st.lists(st.floats(1e-9, 1e-2), min_size=1, max_size=20).map(np.array)


def on_grid(length: np.ndarray, grid: Grid) -> bool:
    return bool(np.allclose(np.mod(length / grid.step + 0.5, 1.0), 0.5, atol=1e-4))


@settings(max_examples=200, deadline=None, derandomize=True)
@given(widths, grids, st.booleans())
def test_snapped_widths_can_be_drawn(width: np.ndarray, grid: Grid, even: bool) -> None:
    snapped = snap_width(width, grid, even)
    np.testing.assert_array_equal(snap_width(snapped, grid, even), snapped)
    fingers = finger_count(snapped, grid, even)
    assert on_grid(snapped / fingers, grid)
    assert (snapped / fingers >= grid.minimum_width * (1.0 - 1e-9)).all()
    assert (snapped / fingers <= grid.maximum_finger * (1.0 + 1e-9)).all()
    if even:
        assert (fingers % 2 == 0).all()


@settings(max_examples=100, deadline=None, derandomize=True)
@given(widths, grids, st.booleans())
def test_a_snapped_width_is_near(width: np.ndarray, grid: Grid, even: bool) -> None:
    """Within half a step for each finger, wherever the narrowest finger leaves the choice."""
    snapped = snap_width(width, grid, even)
    fingers = np.maximum(finger_count(width, grid, even), finger_count(snapped, grid, even))
    free = width > 2.0 * fingers * grid.minimum_width
    assert (np.abs(snapped - width) <= (fingers / 2.0 + 0.6) * grid.step * (1.0 + 1e-6))[free].all()


@settings(max_examples=100, deadline=None, derandomize=True)
@given(widths, grids)
def test_snapped_lengths(length: np.ndarray, grid: Grid) -> None:
    snapped = snap_length(length, grid)
    np.testing.assert_array_equal(snap_length(snapped, grid), snapped)
    assert on_grid(snapped, grid)
    assert (snapped >= grid.minimum_length * (1.0 - 1e-9)).all()
    longer = length > grid.minimum_length
    assert (np.abs(snapped - length) <= 0.5 * grid.step * (1.0 + 1e-6))[longer].all()


@settings(max_examples=100, deadline=None, derandomize=True)
@given(st.lists(st.floats(1.0, 1e9), min_size=1, max_size=20).map(np.array), st.sampled_from(built_in_names()))
def test_snapped_resistances(resistance: np.ndarray, name: str) -> None:
    process = load_process(name)
    snapped = snap_resistance(resistance, process.resistor, process.grid)
    np.testing.assert_array_equal(snap_resistance(snapped, process.resistor, process.grid), snapped)
    assert on_grid(snapped / process.resistor.sheet_resistance * process.resistor.width, process.grid)
    assert (snapped > 0.0).all()


@pytest.mark.parametrize(
    ("width", "one", "even"), [(9.0, 1, 2), (20.0, 1, 2), (21.0, 2, 2), (40.0, 2, 2), (41.0, 3, 4), (61.0, 4, 4)]
)
def test_fingers(width: float, one: int, even: int) -> None:
    """The handbook process draws fingers of up to 20 um."""
    grid = load_process("handbook").grid
    assert finger_count(np.array([width * 1e-6]), grid, False)[0] == one
    assert finger_count(np.array([width * 1e-6]), grid, True)[0] == even


def test_junctions_by_hand() -> None:
    """Handbook process, diffusions of 1.2 um, fingers of 15 um: two of them have one drain between their gates and a
    source at each end, four have two inner drains and three sources, two of these at the ends."""
    width = np.array([[30e-6], [60e-6]])
    even = np.array([[False], [True]])
    d = draw_transistors(width, np.full((2, 1), 1e-6), np.ones((2, 1)), even, load_process("handbook").grid)
    assert d.fingers[:, 0].tolist() == [2.0, 4.0]
    np.testing.assert_allclose(d.drain_area[0, 0], 15e-6 * 1.2e-6)
    np.testing.assert_allclose(d.source_area[0, 0], 2 * 15e-6 * 1.2e-6)
    np.testing.assert_allclose(d.drain_edge[0, 0], 2 * 1.2e-6)
    np.testing.assert_allclose(d.source_edge[0, 0], 2 * (2 * 1.2e-6 + 15e-6))
    np.testing.assert_allclose(d.drain_area[1, 0], 2 * 15e-6 * 1.2e-6)
    np.testing.assert_allclose(d.source_area[1, 0], 3 * 15e-6 * 1.2e-6)
    np.testing.assert_allclose(d.drain_edge[1, 0], 4 * 1.2e-6)
    np.testing.assert_allclose(d.source_edge[1, 0], 6 * 1.2e-6 + 2 * 15e-6)


def test_odd_fingers_and_units_by_hand() -> None:
    """Three fingers: two drains and two sources, one of each at an end; everything five times for five units."""
    grid = load_process("handbook").grid
    one, five = (
        draw_transistors(np.array([[45e-6]]), np.array([[1e-6]]), np.array([[u]]), np.array([[False]]), grid)
        for u in (1.0, 5.0)
    )
    assert one.fingers[0, 0] == 3.0
    np.testing.assert_allclose(one.drain_area[0, 0], 2 * 15e-6 * 1.2e-6)
    np.testing.assert_allclose(one.source_area[0, 0], 2 * 15e-6 * 1.2e-6)
    np.testing.assert_allclose(one.drain_edge[0, 0], 4 * 1.2e-6 + 15e-6)
    np.testing.assert_allclose(one.source_edge[0, 0], 4 * 1.2e-6 + 15e-6)
    for name in ("drain_area", "source_area", "drain_edge", "source_edge", "area"):
        np.testing.assert_allclose(getattr(five, name), 5.0 * getattr(one, name))


def test_area_by_hand() -> None:
    """A whole stage of the handbook process, in um: every device its gates and diffusions in a row, with a diffusion
    more on both sides across; resistors at 2 um width and spacing with two squares of contact; all times 1.5."""
    sizes = {
        "input.width": 60e-6,  # 4 fingers of 15 um
        "input.length": 1e-6,
        "load.resistance": 20e3,  # 20 squares of 2 um
        "tail.width": 18e-6,  # one finger
        "tail.length": 3e-6,
        "tail.units": 4.0,
        "bias.current": 10e-6,
    }
    circuit = size_circuit(
        build("nmos", "resistor", "single", "differential"),
        load_process("handbook"),
        Conditions(3.3, (1.5, 1.5), 1e-12),
        {name: np.array([value]) for name, value in sizes.items()},
    )
    one_input = (4 * 1.0 + 5 * 1.2) * (15.0 + 2 * 1.2)
    one_unit = (1 * 3.0 + 2 * 1.2) * (18.0 + 2 * 1.2)
    one_resistor = (20 * 2.0 + 2 * 2.0) * (2.0 + 2.0)
    by_hand = 1.5 * (2 * one_input + (4 + 1) * one_unit + 2 * one_resistor)
    assert CATALOGUE["area"].function(Analysis(circuit))[0] * 1e12 == pytest.approx(by_hand, rel=1e-12)


def test_a_pair_has_even_fingers() -> None:
    """So that it can be drawn cross-coupled."""
    rng = np.random.default_rng(4)
    top = build("pmos", "mirror", "single")
    sizes = {s.name: 1e-6 * 100.0 ** rng.random(50) for s in top.sizes}
    circuit = size_circuit(top, load_process("generic-180"), Conditions(1.8, (0.8, 0.8), 1e-12), sizes)
    for row, t in enumerate(top.transistors):
        if t.group in ("input", "load"):
            assert (circuit.drawn.fingers[row] % 2 == 0).all()
