"""Which devices make the offset of a design: the spread at the input by each kind of mismatch of each of them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from optisize.problem.evaluate import Problem
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.mismatch import Deviations, effects, spreads

SIDES = (".p", ".n")  # of a pair of devices that are drawn alike


@dataclass(frozen=True)
class Contributor:
    """What one kind of mismatch of a device, or of two that are drawn alike, does to the offset.

    Attributes:
        devices: their names.
        kind: ``threshold``, ``current factor`` or ``resistance``.
        sigma: standard deviation of the offset that it alone makes, referred to the input [V].
        share: of the variance of the offset.
    """

    devices: tuple[str, ...]
    kind: str
    sigma: float
    share: float


def offset_contributors(problem: Problem, sizes: Mapping[str, Array]) -> list[Contributor]:
    """Return what makes the offset of one design by mismatch, to first order, the largest first.

    The squares of all sigmas add up to that of `offset_sigma`; the method is that of `stage.mismatch`.

    Args:
        problem: its own.
        sizes: every size, each (1,), of a design that has an operating point.
    """
    a = Analysis(problem.circuit(sizes))
    of, spread = effects(a).output, spreads(a.circuit)
    gain = float(np.abs(a.adm[0]))
    variance: dict[tuple[str, str], float] = {}
    devices: dict[tuple[str, str], list[str]] = {}
    for name, kind, sigma in _alone(a, of, spread):
        base = next((name.removesuffix(side) for side in SIDES if name.endswith(side)), name)
        variance[base, kind] = variance.get((base, kind), 0.0) + (sigma / gain) ** 2
        devices.setdefault((base, kind), []).append(name)
    total = sum(variance.values())
    found = [
        Contributor(tuple(devices[key]), key[1], float(np.sqrt(value)), value / total)
        for key, value in variance.items()
        if value > 0.0
    ]
    return sorted(found, key=lambda c: -c.sigma)


def _alone(a: Analysis, of: Deviations, spread: Deviations) -> Iterator[tuple[str, str, float]]:
    """Return device, kind and the standard deviation of the output that it alone makes [V]."""
    transistors = [t.name for t in a.topology.transistors]
    resistors = [r.name for r in a.topology.resistors]
    for names, kind, effect, sigma in (
        (transistors, "threshold", of.threshold, spread.threshold),
        (transistors, "current factor", of.factor, spread.factor),
        (resistors, "resistance", of.resistance, spread.resistance),
    ):
        for i, name in enumerate(names):
            yield name, kind, float(np.abs(np.broadcast_to(effect * sigma, (len(names), 1))[i, 0]))
