"""The fronts of several runs over each other, as a figure."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from optisize.front.fronts import Fronts
from optisize.front.table import measured
from optisize.process.law import Array
from optisize.show.plots import Axis, dress, goal_axis, pyplot, title_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

# One a run: marker and colour, each darker or lighter than its neighbours so that they part when printed grey.
MARKS = (
    ("o", "#16325c"),
    ("^", "#ef9b3a"),
    ("s", "#1f7f74"),
    ("D", "#a11d5b"),
    ("v", "#7fb2e5"),
    ("P", "#6b4c9a"),
    ("X", "#c9a227"),
    ("<", "#4d4d4d"),
)
LETTER = 0.075  # inches that one takes in the legend
NAME = 45  # letters of a run's name that there is room for


@dataclass(frozen=True)
class Layer:
    """One run in a picture.

    Attributes:
        name: what to call it.
        x, y: its designs, (N,) each.
        joint: which of them are on the joint front, (N,).
        edge: corners of the stairs that its designs reach in these two goals alone, (2, K).
    """

    name: str
    x: Array
    y: Array
    joint: NDArray[np.bool_]
    edge: Array


@dataclass(frozen=True)
class Picture:
    """Two shared goals against each other; the axes hold the values of all designs."""

    x: Axis
    y: Axis
    layers: tuple[Layer, ...]


def pictures(fronts: Fronts) -> list[Picture]:
    """Return every pair of the shared goals."""
    axes = [
        goal_axis(goal, np.concatenate([measured(entry.run.front, goal.measure) for entry in fronts.entries]))
        for goal in fronts.goals
    ]
    return [_picture(fronts, axes[j], axes[i]) for i, j in combinations(range(len(axes)), 2)]


def _picture(fronts: Fronts, x: Axis, y: Axis) -> Picture:
    layers = []
    for i, name in enumerate(fronts.names):
        own = fronts.owner == i
        xs, ys = x.values[own], y.values[own]
        layers.append(Layer(name, xs, ys, fronts.joint[i], stairs(xs, ys, x.better, y.better)))
    return Picture(x, y, tuple(layers))


def stairs(x: Array, y: Array, better_x: str, better_y: str) -> Array:
    """Return the corners of the stairs between what designs (N,) reach in two goals and what they do not, (2, K)."""
    sign_x, sign_y = (-1.0 if better == "max" else 1.0 for better in (better_x, better_y))
    order = np.lexsort((sign_y * y, sign_x * x))
    x, y = x[order], y[order]
    best = np.minimum.accumulate(sign_y * y)
    first = np.append(True, best[1:] < best[:-1])
    x, y = x[first], y[first]
    return np.array([np.repeat(x, 2)[1:], np.repeat(y, 2)[:-1]])


def draw_overlay(fronts: Fronts) -> Figure:
    """Draw the fronts over each other."""
    shown = pictures(fronts)
    plt = pyplot()
    columns = min(len(shown), 3)
    rows = -(-len(shown) // columns)
    width = max(4.8 * columns, 7.0)
    figure, axes = plt.subplots(rows, columns, figsize=(width, 4.6 * rows + 0.8), squeeze=False, layout="constrained")
    for spot, picture in zip(axes.flat, shown, strict=False):
        _draw(spot, picture)
    for spot in axes.flat[len(shown) :]:
        spot.set_visible(False)
    handles, labels = axes.flat[0].get_legend_handles_labels()
    fitting = int(width / (LETTER * max(map(len, labels)) + 0.7))
    figure.legend(
        handles, labels, loc="outside lower center", ncols=max(1, min(len(labels), fitting)), fontsize=9, frameon=False
    )
    key = "filled: on the joint front; hollow: beaten by another design", "line: the best in these two goals alone"
    figure.suptitle(
        f"{len(fronts.entries)} fronts in the goals that they share\n{('; ' if columns > 1 else chr(10)).join(key)}",
        fontsize=11,
    )
    return figure


def _short(name: str) -> str:
    return name if len(name) <= NAME else f"…{name[1 - NAME :]}"


def _draw(spot: Axes, shown: Picture) -> None:
    size = float(np.clip(2400.0 / max(len(layer.x) for layer in shown.layers), 10.0, 24.0))
    for layer, (marker, colour) in zip(shown.layers, MARKS, strict=False):
        spot.plot(*layer.edge, color=colour, linewidth=0.9, alpha=0.7, zorder=1)
        for chosen, face, order in ((~layer.joint, "none", 2), (layer.joint, colour, 3)):
            spot.scatter(
                layer.x[chosen], layer.y[chosen], s=size, marker=marker, facecolors=face, edgecolors=colour,
                linewidths=0.8, zorder=order,
            )  # fmt: skip
        words = f"{title_text(_short(layer.name))} ({int(layer.joint.sum())} of {len(layer.joint)} on the joint front)"
        spot.plot([], [], marker=marker, markersize=5.5, linestyle="none", color=colour, label=words)
    dress(spot, shown.x, shown.y)
