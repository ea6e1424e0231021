"""Goals and sizes side by side: every design at its own height on every rail, and ends that are those of the space."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from optisize.front.run import Run, load_run
from optisize.problem.evaluate import Limit
from optisize.show.parallel import ACROSS, LETTERS, ROOM, Parallel, Rail, broken, parallel
from optisize.show.plots import axis_of


@pytest.fixture
def run(finished_run: Path) -> Run:
    return load_run(finished_run)


def test_a_rail_stands_for_every_goal_and_free_size(run: Run) -> None:
    shown = parallel(run)
    names = [rail.lines.replace("\n", " ").replace(". ", ".").split(" [")[0] for rail in shown.rails]
    assert names == [
        "gain",
        "cmrr (at DC)",
        "supply current",
        "input.width",
        "input.length",
        "load.resistance",
        "tail.width",
        "tail.length",
        "tail.units",
        "bias.current",
    ]
    assert [rail.better for rail in shown.rails] == ["max", "max", "min", *[""] * 7]
    np.testing.assert_array_equal(shown.colour.values, run.front["gain [dB]"])


def test_a_size_stands_on_a_logarithmic_rail_between_the_ends_of_its_range(run: Run) -> None:
    rails = parallel(run).rails[3:]
    for rail, r in zip(rails, run.problem.space.free, strict=True):
        values = next(run.front[c] for c in run.front.columns if str(c).split(" [")[0] == r.size.name)
        expected = np.log(values / r.low) / np.log(r.high / r.low)
        np.testing.assert_allclose(rail.heights, expected, atol=1e-9)
        assert rail.ends
        assert rail.ticks[0][0] == pytest.approx(0.0)
        assert rail.ticks[-1][0] == pytest.approx(1.0)
    assert [words for _, words in rails[0].ticks] == ["2", "5", "10", "20", "50", "100", "200", "400"]
    assert [words for _, words in rails[1].ticks] == ["180", "500", "1000", "2000", "4000"]


def test_a_goal_stands_on_its_own_scale_from_its_worst_to_its_best(run: Run) -> None:
    gain, _, current = parallel(run).rails[:3]
    edge = ROOM / (1.0 + 2.0 * ROOM)
    for rail, values in (
        (gain, run.front["gain [dB]"].to_numpy()),
        (current, np.log10(run.front["supply_current [A]"].to_numpy())),
    ):
        low, high = values.min(), values.max()
        np.testing.assert_allclose(rail.heights, edge + (1.0 - 2.0 * edge) * (values - low) / (high - low), atol=1e-9)
        assert not rail.ends
        assert len(rail.ticks) >= 2
    assert axis_of(run, 2).logarithmic
    at = {words: height for height, words in gain.ticks}
    first, last = sorted(at, key=float)[0], sorted(at, key=float)[-1]
    span = (run.front["gain [dB]"].max() - run.front["gain [dB]"].min()) * (1.0 + 2.0 * ROOM)
    assert at[last] - at[first] == pytest.approx((float(last) - float(first)) / span)


def test_a_limit_near_the_designs_is_marked_on_its_goal(run: Run) -> None:
    gain = run.problem.goals[0].measure
    lowest = float(run.front["gain [dB]"].min())

    def rail(bound: float) -> Rail:
        return parallel(replace(run, problem=replace(run.problem, limits=(Limit(gain, bound, None),)))).rails[0]

    ((height, words),) = rail(lowest - 0.5).bounds
    assert words == f"min {lowest - 0.5:g}"
    assert 0.0 < height < rail(lowest - 0.5).heights.min()
    assert rail(lowest - 100.0).bounds == ()


def test_many_rails_go_on_below_and_each_row_begins_with_the_first_goal(run: Run) -> None:
    shown = parallel(run)
    assert shown.rows == [shown.rails]
    many = Parallel(shown.rails + shown.rails[3:] + shown.rails[3:], shown.colour)
    assert [len(row) for row in many.rows] == [9, 9, 8]
    assert all(row[0] is shown.rails[0] for row in many.rows)
    assert max(len(row) for row in many.rows) <= ACROSS
    assert [rail for row in many.rows for rail in row[1:]] == [*many.rails[1:]]
    alone = Parallel(shown.rails[:1], shown.colour)
    assert alone.rows == [shown.rails[:1]]


@pytest.mark.parametrize(
    ("label", "lines"),
    [
        ("gain [dB]", ["gain [dB]"]),
        ("input.width [um]", ["input.width", "[um]"]),
        ("load.cascode.bias.width [um]", ["load.", "cascode.", "bias.width", "[um]"]),
        ("noise low (input noise at 10 Hz) [nV/√Hz]", ["noise low", "(input noise", "at 10 Hz)", "[nV/√Hz]"]),
    ],
)
def test_a_label_is_broken_into_lines_that_fit(label: str, lines: list[str]) -> None:
    assert broken(label).splitlines() == lines
    assert max(map(len, lines)) <= LETTERS
