"""The search on problems whose exact fronts are published: 40 000 evaluations reach 99 % of the exact hypervolume."""

import numpy as np
import pytest

from optisize.evolution.genetic import run

from .problems import begin, bnh, dtlz1, dtlz2, simplex_volume, sphere_volume, volume, zdt, zdt_front

SEEDS = [1, 2, 3]


def searched(evaluate, dimensions, goals, seed, reference=11.0):
    """The front after 200 generations of 200."""
    return run(begin(evaluate, dimensions, goals, seed=seed, patience=0, reference=reference), evaluate).front


def exact_zdt(number, reference):
    """Hypervolume of the ZDT front from its curve, by the staircase under two million points of it."""
    f1 = np.linspace(0.0, 1.0, 2_000_001)
    f2 = np.minimum.accumulate(zdt_front(number, f1, f1))
    inner = f1 <= reference
    return float(np.sum(np.diff(np.append(f1[inner], reference)) * np.clip(reference - f2[inner], 0.0, None)))


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize(("number", "published"), [(1, 120.6667), (2, 120.3333), (3, 128.778116)])
def test_zdt(number, published, seed):
    """Zitzler, Deb, Thiele, Evol. Comput. 8, 2000, 30 variables; hypervolumes at (11, 11) as in CHECKS row 18."""
    assert exact_zdt(number, 11.0) == pytest.approx(published, rel=1e-6)
    front = searched(zdt(number), 30, 2, seed)
    assert 0.999 * published <= volume(front, 11.0) <= published * (1.0 + 1e-6)
    assert volume(front, 1.1) >= 0.99 * exact_zdt(number, 1.1), "also from a reference close to the front"


@pytest.mark.parametrize("seed", SEEDS)
def test_dtlz1(seed):
    """Deb, Thiele, Laumanns, Zitzler, 2005: sum f = 0.5; 7 variables, of which 5 with eleven local optima each."""
    front = searched(dtlz1(3), 7, 3, seed)
    assert front.losses.sum(axis=0).min() >= 0.5 - 1e-9
    assert 0.99 * simplex_volume(3, 0.6) <= volume(front, 0.6) <= simplex_volume(3, 0.6)


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize(("goals", "published"), [(2, 0.424602), (3, 0.807401)])
def test_dtlz2(goals, published, seed):
    """Deb, Thiele, Laumanns, Zitzler, 2005: sum f^2 = 1; 10 variables beside the position; hypervolume at 1.1."""
    exact = sphere_volume(goals, 1.1)
    assert exact == pytest.approx(published, abs=1e-6)
    front = searched(dtlz2(goals), goals + 9, goals, seed, reference=1.1)
    assert (front.losses**2).sum(axis=0).min() >= 1.0 - 1e-9
    assert 0.99 * exact <= volume(front, 1.1) <= exact


@pytest.mark.parametrize("seed", SEEDS)
def test_bnh(seed):
    """Binh, Korn, 1997 (as in pymoo.problems): a constrained problem whose front ends at (0, 50) and (136, 4)."""
    front = searched(bnh, 2, 2, seed, reference=140.0)
    first, last = front.losses[:, front.losses[0].argmin()], front.losses[:, front.losses[0].argmax()]
    np.testing.assert_allclose(first, [0.0, 50.0], atol=0.01)
    np.testing.assert_allclose(last, [136.0, 4.0], atol=0.05)
    assert (bnh(front.vectors).violation == 0.0).all()


@pytest.mark.parametrize(("goals", "share", "distance"), [(4, 0.96, 0.02), (5, 0.94, 0.03)])
def test_more_than_three_goals(goals, share, distance):
    """DTLZ2 with NSGA-III (Deb, Jain, IEEE TEC 18, 2014): close to the sphere, and spread over it."""
    state = run(begin(dtlz2(goals), goals + 9, goals, patience=0, generations=150, reference=1.1), dtlz2(goals))
    radius = np.sqrt((state.population.losses**2).sum(axis=0))
    assert np.median(radius) - 1.0 < distance
    assert share * sphere_volume(goals, 1.1) <= volume(state.front, 1.1) <= 1.01 * sphere_volume(goals, 1.1)
    assert state.population.losses.max(axis=1).min() > 0.95, "no goal's end of the front is lost"


def test_one_goal():
    """The sphere function; a single best design, at the exact optimum's bound on the first coordinate."""

    def sphere(vectors):
        return zdt(1)(vectors).__class__(
            vectors, ((vectors - 0.3) ** 2).sum(axis=0, keepdims=True), np.zeros(vectors.shape[1])
        )

    front = run(begin(sphere, 8, 1, population=60, generations=120, patience=0), sphere).front
    assert front.size == 1
    assert front.losses[0, 0] < 1e-5
    np.testing.assert_allclose(front.vectors[:, 0], 0.3, atol=1e-3)
