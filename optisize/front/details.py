"""Designs in detail: how each device is drawn, where each transistor works, where a design stands on its front."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from optisize.problem.evaluate import Goal, Problem
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.measures import FIGURES


@dataclass(frozen=True)
class Transistors:
    """The transistors of N designs, each array (T, N), in the order of the topology.

    Attributes:
        names, groups, channels: of each of the T transistors: ``input.p``, ``input``, ``n`` or ``p``.
        units: how many equal units each is made of.
        fingers: of one unit.
        finger_width, length: as drawn [m].
        saturates: which have to be saturated, (T,) of bool.
        figures: of the operating point, by the names of `FIGURES` in their units, and ``margin``, vds - vdsat [V], and
            ``gm_per_id`` [1/V].
    """

    names: tuple[str, ...]
    groups: tuple[str, ...]
    channels: tuple[str, ...]
    units: Array
    fingers: Array
    finger_width: Array
    length: Array
    saturates: tuple[bool, ...]
    figures: Mapping[str, Array]


@dataclass(frozen=True)
class Resistors:
    """The resistors of N designs, each array (R, N).

    Attributes:
        names: of each of the R resistors.
        resistance: nominal [ohm].
        length: as drawn [m].
        squares: length over the matched width.
        width: the matched width [m].
    """

    names: tuple[str, ...]
    resistance: Array
    length: Array
    squares: Array
    width: float


@dataclass(frozen=True)
class Details:
    """N designs in detail."""

    transistors: Transistors
    resistors: Resistors


def details(problem: Problem, sizes: Mapping[str, Array]) -> Details:
    """Return drawn shapes and operating points of designs that have one.

    Args:
        problem: theirs.
        sizes: every size, each (N,).
    """
    a = Analysis(problem.circuit(sizes))
    circuit, t, shape = a.circuit, a.topology.transistors, a.drain.id.shape
    figures = {name: np.broadcast_to(FIGURES[name].of(a), shape) for name in FIGURES}
    with np.errstate(divide="ignore", invalid="ignore"):
        figures["gm_per_id"] = figures["gm"] / figures["id"]
    figures["margin"] = figures["vds"] - figures["vdsat"]
    drawn = circuit.drawn
    return Details(
        transistors=Transistors(
            names=tuple(x.name for x in t),
            groups=tuple(x.group for x in t),
            channels=tuple(a.topology.channel(x) for x in t),
            units=np.broadcast_to(circuit.units, shape),
            fingers=np.broadcast_to(drawn.fingers, shape),
            finger_width=np.broadcast_to(drawn.finger_width, shape),
            length=np.broadcast_to(circuit.length, shape),
            saturates=tuple(x.saturates for x in t),
            figures=figures,
        ),
        resistors=Resistors(
            names=tuple(r.name for r in a.topology.resistors),
            resistance=circuit.resistances,
            length=circuit.resistor_lengths,
            squares=circuit.resistor_lengths / problem.process.resistor.width,
            width=problem.process.resistor.width,
        ),
    )


def places(goals: tuple[Goal, ...], values: Mapping[str, Array]) -> dict[str, Array]:
    """Return where designs stand between the extremes of their front: 0 for the worst of a goal, 1 for the best.

    Args:
        goals: of the problem.
        values: of the whole front, each (N,).

    Returns:
        By the name of the goal, (N,); one where all designs have the same.
    """
    found = {}
    for goal in goals:
        loss = goal.loss(values[goal.measure.name])
        worst, best = loss.max(), loss.min()
        found[goal.measure.name] = (worst - loss) / (worst - best) if worst > best else np.ones(len(loss))
    return found
