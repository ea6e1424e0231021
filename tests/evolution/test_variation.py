"""Laws of variation: bounds, shares, inheritance, spread."""

import numpy as np
import pytest

from optisize.evolution.variation import (
    LEAST_SHARE,
    SBX_ETA,
    SETTLED_SHARES,
    SHARES,
    crossed,
    differed,
    followed,
    mutated,
    neighbours,
    offspring,
    redrawn,
    rewarded,
    split,
    tournament,
)


@pytest.fixture
def random():
    return np.random.Generator(np.random.PCG64(7))


@pytest.mark.parametrize("shares", [(1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0), (0.4, 0.3, 0.3)])
@pytest.mark.parametrize(("dimensions", "size", "count"), [(7, 200, 200), (1, 1, 5), (3, 2, 1), (30, 50, 33)])
def test_offspring_have_the_shape_asked_for_and_stay_in_the_unit_cube(random, shares, dimensions, size, count):
    parents, losses = random.random((dimensions, size)).round(1), random.random((3, size))
    parents.flags.writeable = losses.flags.writeable = False
    counts = split(count, shares)
    assert sum(counts) == count
    children = offspring(parents, losses, counts, fresh=2, random=random)
    assert children.shape == (dimensions, count)
    assert ((children >= 0.0) & (children <= 1.0)).all()


def test_neighbours_are_the_nearest_in_the_scaled_losses(random):
    losses = random.random((3, 60)) * np.array([[1.0], [1e6], [1e-6]])
    scaled = losses / np.ptp(losses, axis=1, keepdims=True)
    distance = np.linalg.norm(scaled[:, :, None] - scaled[:, None, :], axis=0)
    np.testing.assert_array_equal(np.sort(neighbours(losses, 5)), np.sort(np.argsort(distance, axis=1)[:, :6]))


def test_children_of_neighbours_stay_near_the_front(random):
    """On a quarter circle, differences of neighbours keep children near it, differences of anyone do not."""
    angle = np.sort(random.random(200)) * np.pi / 2
    parents = 0.5 + 0.4 * np.array([np.cos(angle), np.sin(angle)])
    off = [np.abs(np.hypot(*(v(4000) - 0.5)) - 0.4) for v in (
        lambda n: followed(parents, parents, n, random),
        lambda n: differed(parents, n, random),
    )]  # fmt: skip
    assert np.median(off[0]) < 0.2 * np.median(off[1])


def test_shares_move_towards_the_variation_whose_offspring_improve_the_population():
    shares, counts = (0.4, 0.3, 0.3), (400, 300, 300)
    moved = rewarded(shares, counts, np.arange(400, 600), 3)
    assert moved[1] > shares[1]
    assert sum(moved) == pytest.approx(1.0)
    for _ in range(100):
        moved = rewarded(moved, counts, np.arange(400, 600), 3)
    assert min(moved) >= 0.9 * LEAST_SHARE, "none is lost"
    for _ in range(100):
        moved = rewarded(moved, counts, np.arange(0), 3)
    np.testing.assert_allclose(moved, SETTLED_SHARES, atol=0.01, err_msg="nothing improves: the front is followed")
    np.testing.assert_allclose(rewarded(SHARES, counts, np.arange(0), 1), SHARES, err_msg="one goal has no front")
    assert rewarded(shares, (), np.arange(2), 3) == shares, "the first sample was made by none of them"


def test_tournaments_prefer_the_better_design_as_two_draws_do(random):
    """The better of two draws of n is at position k with probability (2 (n - k) - 1) / n^2."""
    wins = np.bincount(tournament(4, (40_000,), random), minlength=4) / 40_000
    np.testing.assert_allclose(wins, [7 / 16, 5 / 16, 3 / 16, 1 / 16], atol=0.01)


def test_crossover_keeps_the_mean_of_two_parents_and_their_spread(random):
    """Far from the bounds SBX keeps the mean; children no farther out than parents for every second pair on average.

    Deb, Agrawal, Simulated binary crossover, Complex Systems 9, 1995: spread factors below and above 1 are equally
    likely, and P(spread < b) = b^(eta + 1) / 2 below 1.
    """
    parents = np.array([[0.49, 0.51]])
    children = crossed(parents, 80_000, random)[0].reshape(2, -1)
    moved = ~np.isin(children, parents).any(axis=0)
    np.testing.assert_allclose(children[:, moved].sum(axis=0), 1.0, atol=1e-12)
    spread = np.abs(children[0, moved] - children[1, moved]) / 0.02
    assert np.mean(spread < 1.0) == pytest.approx(0.5, abs=0.02)
    assert np.mean(spread < 0.95) == pytest.approx(0.5 * 0.95 ** (SBX_ETA + 1.0), abs=0.02)


def test_crossover_of_equal_parents_gives_their_copies(random):
    parents = np.full((4, 10), 0.25)
    np.testing.assert_array_equal(crossed(parents, 7, random), np.full((4, 7), 0.25))


def test_mutation_changes_one_coordinate_on_average(random):
    vectors = np.full((8, 20_000), 0.5)
    changed = (mutated(vectors, random) != vectors).sum(axis=0)
    assert changed.mean() == pytest.approx(1.0, abs=0.03)


def test_mutation_is_polynomial(random):
    """P(|step| < d) = 1 - (1 - d)^(eta + 1) as long as the bounds are far (Deb, Goyal, 1996)."""
    vectors = np.full((1, 50_000), 0.5)
    steps = np.abs(mutated(vectors, random)[0] - 0.5)
    assert np.mean(steps < 0.03) == pytest.approx(1.0 - 0.97**21, abs=0.01)


def test_differences_vanish_in_a_population_of_equal_designs(random):
    parents = np.full((5, 20), 0.75)
    np.testing.assert_array_equal(differed(parents, 40, random), np.full((5, 40), 0.75))


def test_differences_move_along_the_line_that_all_parents_lie_on(random):
    """Children that change all coordinates stay on it: variation follows a front in any direction."""
    parents = np.linspace([0.4, 0.3, 0.5], [0.5, 0.5, 0.4], 20).T
    children = differed(parents, 4000, random)
    along = (children - parents[:, :1]) / (parents[:, -1:] - parents[:, :1])
    on_line = np.ptp(along, axis=0) < 1e-9
    expected = 0.5 * (0.9**2 + 0.2**2)  # one coordinate changes anyhow, the other two by lot
    assert on_line.mean() == pytest.approx(expected, abs=0.03)


def test_what_leaves_the_cube_is_put_on_its_bound(random):
    children = differed(random.integers(0, 2, (6, 30)).astype(float), 500, random)
    assert (children == 0.0).any()
    assert (children == 1.0).any()


def test_redrawn_designs_change_in_one_coordinate(random):
    vectors = random.random((5, 30))
    vectors.flags.writeable = False
    changed = (redrawn(vectors, 12, random) != vectors).sum(axis=0)
    assert sorted(changed) == [0] * 18 + [1] * 12
    assert redrawn(vectors, 99, random).shape == vectors.shape
