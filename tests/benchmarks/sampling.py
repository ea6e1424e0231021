"""A Monte Carlo of mismatch against the evaluation of half as many designs again of the same problem."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from typing import Any

import numpy as np

from optisize.front.spread import OWN, spread
from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from tests.benchmarks.timing import spent

SAMPLES, DESIGNS = 100_000, 150_000
SOUGHT = 4000  # random designs among which the one to sample is the best


def random_sizes(problem: Problem, count: int) -> dict[str, Array]:
    """Return the sizings of random vectors of the space."""
    return problem.space.decode(np.random.default_rng(1).random((problem.space.dimensions, count)))


def one_design(problem: Problem, count: int = SOUGHT) -> Mapping[str, Array]:
    """Return the random sizing that comes closest to the limits, each size (1,)."""
    sizes = random_sizes(problem, count)
    best = int(np.argmin(problem.assess(sizes).violation))
    return {name: v[best : best + 1] for name, v in sizes.items()}


def against_evaluation(
    problem: Problem, *, samples: int = SAMPLES, designs: int = DESIGNS, repeats: int = 3
) -> dict[str, Any]:
    """Time samples of one design and random designs of the space, with the same measures and on one thread each.

    Random designs take longer than good ones where many of them cannot work: ``ratio_to_copies`` is that to as many
    copies of the design itself.
    """
    design, sizes = one_design(problem), random_sizes(problem, designs)
    copies = {name: np.repeat(v, designs) for name, v in design.items()}
    names = list(dict.fromkeys([*problem.needed, *OWN]))
    spread(problem, design, samples=100)  # loads what is loaded when it is first asked for
    rounds = []
    for _ in range(repeats):
        sampled = spent(lambda: spread(problem, design, samples=samples))
        rounds.append([sampled, *(spent(partial(problem.measure, x, names)) for x in (sizes, copies))])
    sampled, evaluated, copied = np.array(rounds).T
    return {
        "ratio": float(np.median(sampled / evaluated)),
        "ratio_to_copies": float(np.median(sampled / copied)),
        "sample_us": 1e6 * float(np.median(sampled)) / samples,
        "evaluation_us": 1e6 * float(np.median(evaluated)) / designs,
        "measures": len(names),
    }
