"""Mismatch of one design: a Monte Carlo of the nonlinear stage on arrays, the yield, and the first-order prediction.

Each sample is a stage whose transistors and resistors deviate at random (see `stage.mismatch`), with its offset taken
out by the input as in use; its measures are those of the catalogue. Measures that count standard deviations read, of a
sample, what it has itself: `offset` its own offset, `cmrr_mismatch` its own rejection.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from optisize.errors import InputError
from optisize.problem.evaluate import CHUNK, Limit, Problem, measured
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.catalogue import Measure
from optisize.stage.measures import CATALOGUE, decibels
from optisize.stage.mismatch import Deviations, Sampled, spreads, varied

CONFIDENCE = 0.95
BINS = 40
ROUNDING = 1e-9  # relative; a measure that varies by no more does not vary
STEP = 0.5  # standard deviations, either way, over which the first-order prediction is taken
SHOWN = (0.00135, 0.5, 0.99865)  # the quantiles of three standard deviations of a normal distribution
OWN = ("offset_systematic", "cmrr_mismatch")  # shown of every stage, since they are what mismatch makes


def _offset(a: Analysis) -> Array:
    return a.offset


def _common(a: Analysis) -> Array:
    return a.wiring.output(a.responses[:, 1])


def _differential(a: Analysis) -> Array:
    return a.adm


# What is not straight in the deviations although these are: a magnitude, and a ratio to a gain that crosses zero.
STRAIGHT: tuple[Callable[[Analysis], Array], ...] = (_offset, _differential, _common)
FOLDED: dict[str, Callable[[Array, Array, Array], Array]] = {
    "offset": lambda offset, adm, acm: np.abs(offset),
    "cmrr_mismatch": lambda offset, adm, acm: decibels(adm / acm),
}


@dataclass(frozen=True)
class Distribution:
    """One measure over the samples.

    Attributes:
        measure: the measure.
        matched: without mismatch.
        values: of the samples, (N,); not a number where one has no operating point.
        linear: the same samples to first order, (N,).
    """

    measure: Measure
    matched: float
    values: Array
    linear: Array

    @property
    def linear_sigma(self) -> float:
        """The standard deviation of the same samples to first order."""
        found = self.linear[np.isfinite(self.linear)]
        return float(found.std(ddof=1)) if len(found) > 1 and self.sigma > 0.0 else 0.0

    @property
    def finite(self) -> Array:
        """The values that are finite."""
        return self.values[np.isfinite(self.values)]

    @property
    def mean(self) -> float:
        """The mean of the samples."""
        return float(self.finite.mean()) if len(self.finite) else float("nan")

    @property
    def sigma(self) -> float:
        """The standard deviation of the samples."""
        found = self.finite
        if len(found) < 2:
            return float("nan")
        return float(found.std(ddof=1)) if np.ptp(found) > ROUNDING * np.abs(found).max() else 0.0

    @property
    def quantiles(self) -> tuple[float, ...]:
        """The values below which 0.135 %, half and 99.865 % of the samples lie."""
        found = self.finite
        return tuple(float(q) for q in np.quantile(found, SHOWN)) if len(found) else (float("nan"),) * len(SHOWN)

    def histogram(self, bins: int = BINS) -> tuple[Array, NDArray[np.intp]]:
        """Return edges (B + 1,) and counts (B,) of the finite samples."""
        found = self.finite
        if not len(found):
            return np.zeros(1), np.zeros(0, dtype=np.intp)
        low, high = float(found.min()), float(found.max())
        least = ROUNDING * max(abs(low), abs(high), 1e-300)  # bins that can be told apart
        if high - low < least:
            low, high = low - 0.5 * least, high + 0.5 * least
        counts, edges = np.histogram(found, bins=bins, range=(low, high))
        return edges, counts


@dataclass(frozen=True)
class Yield:
    """How many samples meet a limit, or all of them.

    Attributes:
        name: of the limit, or ``all limits``.
        passed, samples: counts.
        interval: the Clopper-Pearson interval of the yield.
        linear: the share of the same samples that meet it to first order.
    """

    name: str
    passed: int
    samples: int
    interval: tuple[float, float]
    linear: float

    @property
    def share(self) -> float:
        """The share of the samples that pass."""
        return self.passed / self.samples


@dataclass(frozen=True)
class Spread:
    """The spread of one design.

    Attributes:
        problem: whose limits the yield is against.
        sizes: of the design.
        samples, seed: of the Monte Carlo.
        unsolved: samples without an operating point at which the output stands as it does without mismatch.
        distributions: of goals and limits, and of each other measure that varies.
        yields: of each limit, then of all of them together.
    """

    problem: Problem
    sizes: Mapping[str, float]
    samples: int
    seed: int
    unsolved: int
    distributions: tuple[Distribution, ...]
    yields: tuple[Yield, ...]


def clopper_pearson(passed: int, samples: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Return the exact interval of a share: Clopper and Pearson, Biometrika 26, 1934, as scipy computes it."""
    from scipy.stats import binomtest

    interval = binomtest(passed, samples).proportion_ci(confidence, method="exact")
    return float(interval.low), float(interval.high)


def spread(
    problem: Problem,
    sizes: Mapping[str, Array],
    samples: int = 10_000,
    seed: int = 1,
    names: Sequence[str] | None = None,
    threads: int = 1,
    watch: Callable[[int], None] | None = None,
) -> Spread:
    """Return the spread of one sizing by mismatch.

    Args:
        problem: conditions, process and limits.
        sizes: every size of the stage, each (1,).
        samples: of the Monte Carlo.
        seed: the same seed gives the same samples, whatever the threads.
        names: measures to look at beside those of limits and goals; those that mismatch makes where None.
        threads: how many chunks are solved at the same time.
        watch: called with the number of samples that are done.

    Raises InputError when the sizing has no operating point.
    """
    matched = Analysis(problem.circuit(sizes))
    if not matched.converged[0]:
        raise InputError(f"the sizing: {matched.why_unsolved}")
    wanted = [problem.find(n) for n in dict.fromkeys([*problem.needed, *(OWN if names is None else names)])]
    without_mismatch = [m.at(m.name, dict(m.settings) | {"sigmas": 0.0}) if counts_sigmas(m) else m for m in wanted]
    spread_of = spreads(matched.circuit)
    values = np.concatenate(_sampled(matched, spread_of, wanted, samples, seed, threads, watch), axis=1)
    linear = _first_order(matched, spread_of, wanted, seed, samples)
    at_rest = measured(matched, without_mismatch)
    distributions = [
        Distribution(m, float(rest[0]), row, expected)
        for m, rest, row, expected in zip(wanted, at_rest, values, linear, strict=True)
    ]
    return Spread(
        problem=problem,
        sizes={name: float(v[0]) for name, v in sizes.items()},
        samples=samples,
        seed=seed,
        unsolved=int(np.isnan(values).all(axis=0).sum()),
        distributions=tuple(d for d in distributions if _tells(d, problem)),
        yields=_yields(problem.limits, [m.name for m in wanted], values, linear),
    )


def check_measures(problem: Problem, names: Sequence[str]) -> None:
    """Raise InputError for a name of the option ``--measure`` that no measure has."""
    for name in names:
        try:
            problem.find(name)
        except InputError as error:
            raise InputError(f"--measure: {error}") from None


def counts_sigmas(measure: Measure) -> bool:
    """Tell whether a measure counts standard deviations of mismatch; of a sample it reads what that has itself."""
    return any(p.name == "sigmas" for p in measure.parameters)


def _tells(found: Distribution, problem: Problem) -> bool:
    """Tell whether a measure varies from sample to sample, or is a goal or a limit."""
    return found.measure.name in problem.needed or found.sigma > 0.0


def _yields(limits: Sequence[Limit], names: list[str], values: Array, linear: Array) -> tuple[Yield, ...]:
    rows, good, predicted = [], np.ones(values.shape[1], bool), np.ones(values.shape[1], bool)
    for limit in limits:
        row = names.index(limit.measure.name)
        met, expected = limit.met(values[row]), limit.met(linear[row])
        good &= met
        predicted &= expected
        rows.append(_yield(limit.measure.name, met, expected))
    return (*rows, _yield("all limits", good, predicted))


def _yield(name: str, met: NDArray[np.bool_], expected: NDArray[np.bool_]) -> Yield:
    passed, samples = int(met.sum()), len(met)
    return Yield(name, passed, samples, clopper_pearson(passed, samples), float(expected.mean()))


def _chunks(samples: int) -> int:
    return -(-samples // CHUNK)


def _normal(a: Analysis, seed: int, chunk: int, samples: int) -> Array:
    """Return the standard normal deviates of one chunk of samples, (2T + R, N): the same whatever the threads."""
    count = min(CHUNK, samples - chunk * CHUNK)
    parameters = 2 * len(a.wiring.transistors) + len(a.wiring.resistors)
    return np.random.default_rng([seed, chunk]).standard_normal((parameters, count))


def _deviations(a: Analysis, spread_of: Deviations, normal: Array) -> Deviations:
    """Return deviations of N samples from standard normal deviates (2T + R, N)."""
    t = len(a.wiring.transistors)
    parts = normal[:t], normal[t : 2 * t], normal[2 * t :]
    return Deviations(*(sigma * part for sigma, part in zip(spread_of, parts, strict=True)))


def _sampled(
    matched: Analysis,
    spread_of: Deviations,
    wanted: Sequence[Measure],
    samples: int,
    seed: int,
    threads: int,
    watch: Callable[[int], None] | None,
) -> list[Array]:
    def part(chunk: int) -> Array:
        normal = _normal(matched, seed, chunk, samples)
        return np.array(measured(_sampled_analysis(matched, _deviations(matched, spread_of, normal)), wanted))

    done, parts = 0, []
    with ThreadPoolExecutor(threads) as pool:
        for values in pool.map(part, range(_chunks(samples))):
            parts.append(values)
            done += values.shape[1]
            if watch is not None:
                watch(done)
    return parts


def _first_order(matched: Analysis, spread_of: Deviations, wanted: Sequence[Measure], seed: int, samples: int) -> Array:
    """Return what the measures of the same samples would be if they were straight in the deviations, (M, N)."""
    parameters = 2 * len(matched.wiring.transistors) + len(matched.wiring.resistors)
    unit = np.eye(parameters) * STEP
    normal = np.concatenate([unit, -unit, np.zeros((parameters, 1))], axis=1)
    a = _sampled_analysis(matched, _deviations(matched, spread_of, normal))
    values = np.array([*measured(a, wanted), *(f(a) for f in STRAIGHT)])
    with np.errstate(invalid="ignore"):
        slopes = (values[:, :parameters] - values[:, parameters:-1]) / (2.0 * STEP)
    chunks = [slopes @ _normal(matched, seed, k, samples) for k in range(_chunks(samples))]
    straight: Array = values[:, -1:] + np.concatenate(chunks, axis=1)
    plain = straight[len(wanted) :]
    for row, m in enumerate(wanted):
        name = next((n for n in FOLDED if CATALOGUE[n].function is m.function), None)
        if name is not None:
            straight[row] = FOLDED[name](*plain)
    return straight[: len(wanted)]


def _sampled_analysis(matched: Analysis, deviations: Deviations) -> Sampled:
    """Return the analysis of samples with deviations, (N,) of them."""
    count = deviations.threshold.shape[1]
    return Sampled(varied(matched.circuit.take(np.zeros(count, dtype=np.intp)), deviations), matched)
