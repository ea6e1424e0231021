"""The designs to either side of one design: what a step along the front gives and costs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from optisize.front.aims import Aim, Axis
from optisize.process.law import Array

STEP = 0.05  # of the range of the front: what a designer would call another design


@dataclass(frozen=True)
class Neighbour:
    """A design to one side of another.

    Attributes:
        axis: the name of the goal or measure along which it lies.
        better: whether it is on the better side.
        position: its row on the front.
        changes: by the name of each axis, its value less that of the design in the middle [the axis' unit].
        misses: the conditions that it does not meet although the design in the middle does, as they were asked.
    """

    axis: str
    better: bool
    position: int
    changes: dict[str, float]
    misses: tuple[str, ...]


def neighbours(axes: Sequence[Axis], at: int, asked: Sequence[Aim] = ()) -> list[Neighbour]:
    """Return the neighbours of one design along every axis, first the better side.

    The neighbour is the nearest design, over all axes in ranges of the front, of those that are at least a twentieth
    of the range away on that side; where the front ends before that, the end of the front.

    Args:
        axes: the goals, and what else the design was chosen by.
        at: its row.
        asked: the conditions.
    """
    shares = np.array([a.losses / a.span for a in axes])
    with np.errstate(invalid="ignore"):  # of unlimited figures there is no difference
        away = shares - shares[:, at, None]
    distance = np.where(np.isnan(away).any(axis=0), np.inf, np.sqrt((np.nan_to_num(away) ** 2).sum(axis=0)))
    found = []
    for axis, along in zip(axes, away, strict=True):
        for better in (True, False):
            position = _nearest(-along if better else along, distance)
            if position is not None:
                changes = {a.name: float(a.values[position]) - float(a.values[at]) for a in axes}
                misses = tuple(aim.text for aim in asked if aim.holds[at] and not aim.holds[position])
                found.append(Neighbour(axis.name, better, position, changes, misses))
    return found


def _nearest(along: Array, distance: Array) -> int | None:
    """Return the nearest design a step or more along, or the furthest along where there is no such; None at an end."""
    beyond = (along >= STEP) & np.isfinite(distance)
    if beyond.any():
        return int(np.argmin(np.where(beyond, distance, np.inf)))
    some = (along > 1e-9) & np.isfinite(distance)
    return int(np.argmax(np.where(some, along, -np.inf))) if some.any() else None
