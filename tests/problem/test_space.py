"""Vectors and sizings: on the grid, within reach of the ranges, and the same there and back."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from optisize.errors import InputError
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_sizing
from optisize.problem.space import SizingSpace, round_significant
from optisize.stage.elements import Size
from tests.problem.texts import MIRROR, RESISTOR, SIZING, changed, loaded

QUICK = settings(max_examples=60, derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow])
PROCESSES = ("generic-180", "generic-65", "handbook")


@pytest.fixture(scope="module", params=PROCESSES)
def space(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> SizingSpace:
    text = changed(MIRROR, ("process", f'process = "{request.param}"'))
    for group in ("input", "load", "tail"):
        text = changed(text, (f"{group}.length", f'{group}.length = ["0.5 um", "4 um"]'))
    text = changed(text, ("input.width", 'input.width = ["4 um", "900 um"]'), ("load.width", 'load.width = "4 um"'))
    return loaded(tmp_path_factory.mktemp("space"), text).space


@given(logs=st.lists(st.floats(-7.0, -2.0), min_size=1, max_size=20))
@QUICK
def test_snapping_twice_changes_nothing(space: SizingSpace, logs: list[float]) -> None:
    values = 10.0 ** np.array(logs)
    for size in space.topology.sizes:
        scaled = values * {"resistance": 1e9, "count": 1e4}.get(size.kind, 1.0)
        once = space.snap(size, scaled)
        np.testing.assert_array_equal(space.snap(size, once), once, err_msg=size.name)


@given(logs=st.lists(st.floats(-6.3, -3.0), min_size=1, max_size=20))
@QUICK
def test_a_snapped_size_is_the_nearest_that_can_be_drawn(space: SizingSpace, logs: list[float]) -> None:
    grid, values = space.process.grid, 10.0 ** np.array(logs)
    for size in space.topology.sizes:
        if size.kind == "length":
            wanted = np.maximum(values, grid.minimum_length)
            snapped = space.snap(size, wanted)
            assert (np.abs(snapped - wanted) <= 0.5001 * grid.step).all()
            steps = snapped / grid.step
        elif size.kind == "width":
            wanted = np.maximum(values, 2 * grid.minimum_width)
            snapped = space.snap(size, wanted)
            fingers = 2 * np.ceil(wanted / grid.maximum_finger) + 2  # no more than these
            assert (np.abs(snapped - wanted) <= 0.5001 * grid.step * fingers).all()
            steps = snapped / grid.step
        else:
            continue
        np.testing.assert_allclose(steps, np.rint(steps), rtol=0, atol=1e-6)


@given(seed=st.integers(0, 2**32 - 1))
@QUICK
def test_a_sizing_survives_the_way_to_a_vector_and_back(space: SizingSpace, seed: int) -> None:
    sizes = space.decode(np.random.default_rng(seed).random((space.dimensions, 8)))
    again = space.decode(space.encode(sizes))
    for name in sizes:
        np.testing.assert_array_equal(again[name], sizes[name], err_msg=name)


def test_the_ends_of_a_vector_are_the_ends_of_the_ranges(space: SizingSpace) -> None:
    for end in (0.0, 1.0):
        sizes = space.decode(np.full((space.dimensions, 1), end))
        for r in space.ranges:
            edge = r.high if end and r.free else r.low
            np.testing.assert_array_equal(sizes[r.size.name], space.snap(r.size, np.array([edge])), err_msg=r.size.name)


def test_vectors_beyond_their_ends_stay_at_them(space: SizingSpace) -> None:
    ends = space.decode(np.array([[0.0, 1.0]] * space.dimensions))
    beyond = space.decode(np.array([[-3.0, 7.0]] * space.dimensions))
    for name in ends:
        np.testing.assert_array_equal(beyond[name], ends[name])


def test_the_scale_is_logarithmic(space: SizingSpace) -> None:
    middle = space.decode(np.full((space.dimensions, 1), 0.5))["bias.current"]
    assert middle[0] == pytest.approx(np.sqrt(100e-9 * 20e-6), rel=1e-2)


@given(value=st.floats(1e-12, 1e12), digits=st.integers(1, 6))
@QUICK
def test_rounding_keeps_as_many_digits_as_asked(value: float, digits: int) -> None:
    rounded = round_significant(np.array([value]), digits)[0]
    assert rounded == pytest.approx(float(f"{value:.{digits}g}"), rel=10.0**-digits)
    assert abs(rounded - value) <= 0.51 * 10.0 ** (np.floor(np.log10(value)) + 1 - digits)


AWKWARD = {"minimum_width": 0.22e-6, "maximum_finger": 0.3e-6, "step": 5e-9}  # few widths with that many fingers
NARROW = {"minimum_width": 10e-9, "maximum_finger": 1e-6, "step": 5e-9}  # the number of fingers alone makes the gaps
SPANS = {"width": 4.5e-6, "length": 0.2e-6, "resistance": 100.0, "count": 3.0}  # wider than any gap


@pytest.mark.parametrize("other", [{}, AWKWARD, NARROW])
@given(log=st.floats(-6.3, -4.3), exact=st.booleans())
@QUICK
def test_neighbours_are_the_nearest_that_a_fine_sweep_finds(
    space: SizingSpace, other: dict[str, float], log: float, exact: bool
) -> None:
    grid = space.process.grid.model_copy(update=other)
    space = replace(space, process=space.process.model_copy(update={"grid": grid}))
    for size in sizes_of_every_kind(space):
        value = 10.0**log * {"resistance": 1e9, "count": 1e6, "length": 0.1}.get(size.kind, 1.0)
        value = float(space.snap(size, np.array([value]))[0]) if exact else value
        sweep = value + SPANS.get(size.kind, 0.03 * value) * np.linspace(-1.0, 1.0, 9001)
        drawable = np.unique(space.snap(size, sweep[sweep > 0.0]))
        down, up = space.neighbours(size, value)
        below, above = drawable[drawable < value * (1 - 1e-9)], drawable[drawable > value * (1 + 1e-9)]
        assert up == pytest.approx(above.min(), rel=1e-12, abs=0.0), size
        assert down == (pytest.approx(below.max(), rel=1e-12, abs=0.0) if len(below) else None), size
        for near in (down, up):
            assert near is None or space.snap(size, np.array([near]))[0] == pytest.approx(near, rel=1e-12, abs=0.0)


def sizes_of_every_kind(space: SizingSpace) -> list[Size]:
    """Return the sizes of a stage, and a resistor beside them."""
    return [*space.topology.sizes, Size("load.resistance", "resistance", "")]


def test_there_is_nothing_to_draw_beyond_the_ends(space: SizingSpace) -> None:
    grid, sizes = space.process.grid, {size.name: size for size in space.topology.sizes}
    assert space.neighbours(sizes["tail.units"], 1.0) == (None, 2.0)
    assert space.neighbours(sizes["input.length"], grid.minimum_length)[0] is None
    assert space.neighbours(sizes["input.length"], grid.maximum_length)[1] is None
    assert space.neighbours(sizes["tail.width"], grid.minimum_width)[0] is None
    assert space.neighbours(sizes["input.width"], 2.0 * grid.minimum_width)[0] is None
    assert space.neighbours(sizes["bias.current"], 1e-6) == pytest.approx((999e-9, 1.01e-6), rel=1e-12, abs=0.0)


def test_a_manual_sizing_is_put_on_the_grid(tmp_path: Path) -> None:
    problem: Problem = loaded(tmp_path, RESISTOR)
    text = changed(SIZING, ("input.length", 'input.length = "0.5012 um"'), ("bias.current", "bias.current = 2.0004e-6"))
    (tmp_path / "hand.toml").write_text(text, encoding="utf-8")
    sizes = load_sizing(tmp_path / "hand.toml", problem)
    assert sizes["input.length"] == pytest.approx([0.5e-6], rel=1e-12)
    assert sizes["bias.current"] == [2e-6]
    assert list(sizes) == list(problem.topology.size_names)


def test_ends_of_a_range_that_cannot_be_drawn_move_inward(tmp_path: Path) -> None:
    """Whatever lies between two odd ends snaps to something between them."""
    text = changed(
        RESISTOR,
        ("input.width", 'input.width = ["7.773 um", "133.337 um"]'),
        ("input.length", 'input.length = ["0.1812 um", "3.9987 um"]'),
        ("bias.current", 'bias.current = ["123.4 nA", "9.876 uA"]'),
        ("load.resistance", 'load.resistance = ["5.0012 kohm", "1.999999 Mohm"]'),
    )
    problem = loaded(tmp_path, text)
    ends = {"input.width": (7.773e-6, 133.337e-6), "input.length": (0.1812e-6, 3.9987e-6)}
    ends |= {"bias.current": (123.4e-9, 9.876e-6), "load.resistance": (5001.2, 1999999.0)}
    grid = np.linspace(0.0, 1.0, 20_001)
    sizes = problem.space.decode(np.tile(grid, (problem.space.dimensions, 1)))
    for name, (low, high) in ends.items():
        assert low <= sizes[name].min() <= 1.1 * low
        assert 0.99 * high <= sizes[name].max() <= high


def test_a_range_between_two_steps_of_the_grid_is_refused(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"input\.length: nothing between 501 nm and 504 nm is on the process grid"):
        loaded(tmp_path, changed(RESISTOR, ("input.length", 'input.length = ["0.501 um", "0.504 um"]')))
