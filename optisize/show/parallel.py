"""The goals and the free sizes of every design side by side: one line a design, in parallel coordinates.

Source: Inselberg, The plane with parallel coordinates, The Visual Computer 1, 1985 (value from memory).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from optisize.front.run import Run
from optisize.front.table import column
from optisize.process.law import Array
from optisize.show.plots import LIMIT, Axis, axis_of, heading, near, plain_bar, pyplot, readable, row_of, title_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

ACROSS = 11  # axes that fit side by side; more go on below, with the first goal again
ROOM = 0.06  # beyond the figures of a goal, in ranges
DARK = 0.88  # of the colours, up to which a line can be seen on white paper
LETTERS = 12  # of a name that fit above an axis
WAYS = {"max": "\u2191 better", "min": "\u2193 better"}


@dataclass(frozen=True)
class Rail:
    """One axis of the figure.

    Attributes:
        lines: name and unit, broken so that neighbours do not touch.
        better: ``max`` or ``min`` for a goal, empty for a size.
        heights: of the designs on the axis, 0 at its lower end and 1 at its upper end, (N,).
        ticks: heights and figures in words.
        bounds: limits of a goal, heights and words.
        ends: whether its ends are those of the range that is searched.
    """

    lines: str
    better: str
    heights: Array
    ticks: tuple[tuple[float, str], ...]
    bounds: tuple[tuple[float, str], ...]
    ends: bool


@dataclass(frozen=True)
class Parallel:
    """The goals and free sizes of a front as rails, and the first goal as colour."""

    rails: tuple[Rail, ...]
    colour: Axis

    @property
    def rows(self) -> list[tuple[Rail, ...]]:
        """The rails as they stand below each other; each row begins with the first goal."""
        first, *rest = self.rails
        count = max(1, math.ceil(len(rest) / (ACROSS - 1)))
        parts = np.array_split(np.arange(len(rest)), count)
        return [(first, *(rest[i] for i in part)) for part in parts]


def parallel(run: Run) -> Parallel:
    """Return the goals and the free sizes of a run's designs side by side."""
    axes = [axis_of(run, i) for i in range(len(run.problem.goals))]
    rails = [_goal_rail(axis) for axis in axes]
    for r in run.problem.space.free:
        values = run.front[column(r.size.name, r.size.unit)].to_numpy(dtype=float)
        rails.append(_size_rail(r.size.name, r.size.unit, values, r.low, r.high))
    return Parallel(tuple(rails), axes[0])


def _goal_rail(axis: Axis) -> Rail:
    """Return the rail of a goal: from its worst to its best figure, and to a limit that is near."""
    shown = [(name, bound) for name, bound in axis.bounds if near(bound, axis.values)]
    every = np.append(axis.values, [bound for _, bound in shown])
    low, high = _widened(_scaled(every, axis.logarithmic))
    place = _Place(low, high, axis.logarithmic)
    ticks = _log_ticks(place) if axis.logarithmic else _linear_ticks(place)
    return Rail(
        lines=broken(axis.label),
        better=axis.better,
        heights=place(axis.values),
        ticks=tuple((float(place(np.array([t]))[0]), f"{t:g}") for t in ticks),
        bounds=tuple((float(place(np.array([b]))[0]), f"{name} {b:g}") for name, b in shown),
        ends=False,
    )


def _size_rail(name: str, unit: str, values: Array, low: float, high: float) -> Rail:
    """Return the rail of a size: the range that is searched, on the logarithmic scale of the search."""
    factor, shown = readable(np.array([math.sqrt(low * high)]), unit)
    place = _Place(math.log10(low / factor), math.log10(high / factor), True)
    inner = [t for t in _log_ticks(place) if 0.09 < float(place(np.array([t]))[0]) < 0.91]
    ticks = [low / factor, *inner, high / factor]
    return Rail(
        lines=broken(f"{name} [{shown}]" if shown else name),
        better="",
        heights=place(values / factor),
        ticks=tuple((float(place(np.array([t]))[0]), f"{t:.4g}") for t in ticks),
        bounds=(),
        ends=True,
    )


@dataclass(frozen=True)
class _Place:
    """Puts figures on a rail between two ends on its scale."""

    low: float
    high: float
    logarithmic: bool

    def __call__(self, values: Array) -> Array:
        """Return the heights of figures, 0 at the lower end and 1 at the upper one."""
        return (_scaled(values, self.logarithmic) - self.low) / (self.high - self.low)


def _scaled(values: Array, logarithmic: bool) -> Array:
    return np.log10(values) if logarithmic else values


def _widened(values: Array) -> tuple[float, float]:
    low, high = float(values.min()), float(values.max())
    room = ROOM * (high - low) or 0.05 * abs(high) or 1.0
    return low - room, high + room


def _log_ticks(place: _Place) -> list[float]:
    """Return 1, 2 and 5 of every decade on a rail, or the decades where these are many."""
    figures = (1.0, 2.0, 5.0) if place.high - place.low < 2.5 else (1.0,)
    decades = range(math.floor(place.low), math.ceil(place.high) + 1)
    every = [float(f"{m:g}e{d}") for d in decades for m in figures]
    return [t for t in every if place.low <= math.log10(t) <= place.high]


def _linear_ticks(place: _Place) -> list[float]:
    from matplotlib.ticker import MaxNLocator

    every = MaxNLocator(nbins=6, steps=[1, 2, 5, 10]).tick_values(place.low, place.high)
    return [float(f"{t:.12g}") for t in every if place.low <= t <= place.high]


def broken(label: str) -> str:
    """Return a label in lines that fit above an axis, broken at blanks, and after the dots of a size's name."""
    words, lines = label.replace(".", ". ").split(" "), [""]
    for word in words:
        glue = "" if lines[-1].endswith(".") or not lines[-1] else " "
        if lines[-1] and len(lines[-1] + glue + word) > LETTERS:
            lines.append(word)
        else:
            lines[-1] += glue + word
    return "\n".join(lines)


def draw_parallel(run: Run, design: int | None = None) -> Figure:
    """Draw the goals and the free sizes of every design side by side; mark one design by its number."""
    marked = None if design is None else row_of(run, design)
    shown = parallel(run)
    rows = shown.rows
    plt = pyplot()
    across = max(len(row) for row in rows)
    figure, axes = plt.subplots(
        len(rows), 1, figsize=(1.15 * across + 1.6, 4.6 * len(rows)), squeeze=False, layout="constrained"
    )
    colours = _colours(shown.colour)
    for spot, row in zip(axes.flat, rows, strict=True):
        _draw(spot, row, across, colours.to_rgba(shown.colour.values), shown.colour)
        if marked is not None:
            _mark(spot, row, marked)
    bar = figure.colorbar(colours, ax=list(axes.flat), pad=0.01, fraction=0.03)
    bar.set_label(heading(shown.colour.label, shown.colour.better))
    plain_bar(bar, shown.colour)
    figure.suptitle(
        f"{title_text(run.problem.title)}\n{len(run.front)} designs, a line each; goals, then free sizes over the "
        f"range that is searched{'' if design is None else f'; thick: design {design}'}",
        fontsize=11,
    )
    return figure


def _colours(axis: Axis) -> Any:
    """Return the colours of a goal; the lightest ones are left out, since lines in them would not show."""
    import matplotlib as mpl
    from matplotlib.cm import ScalarMappable
    from matplotlib.colors import ListedColormap, LogNorm, Normalize

    colours = ListedColormap(mpl.colormaps["viridis"](np.linspace(0.0, DARK, 256)))
    low, high = float(axis.values.min()), float(axis.values.max())
    return ScalarMappable((LogNorm if axis.logarithmic else Normalize)(low, high), colours)


def _draw(spot: Axes, rails: Sequence[Rail], across: int, colours: Any, colour: Axis) -> None:
    from matplotlib.collections import LineCollection

    heights = np.array([rail.heights for rail in rails])  # (A, N)
    order = np.argsort(colour.values if colour.better == "max" else -colour.values, kind="stable")
    places = np.broadcast_to(np.arange(len(rails)), heights.T.shape)
    lines = np.stack([places, heights.T], axis=-1)[order]
    spot.add_collection(LineCollection(list(lines), colors=colours[order], linewidths=0.7))
    for i, rail in enumerate(rails):
        _draw_rail(spot, i, rail)
    spot.set_xlim(-0.45, across - 0.45)
    spot.set_ylim(-0.04, 1.04)
    spot.set_axis_off()


def _mark(spot: Axes, rails: Sequence[Rail], row: int) -> None:
    """Draw the line of one design over all others."""
    heights = [float(rail.heights[row]) for rail in rails]
    spot.plot(heights, color="white", linewidth=4.5, zorder=2)
    spot.plot(heights, color="black", linewidth=2.4, zorder=2.1)


def _draw_rail(spot: Axes, i: int, rail: Rail) -> None:
    spot.plot([i, i], [0, 1], color="0.15", linewidth=1.1, zorder=3, solid_capstyle="butt")
    box = {"facecolor": "white", "edgecolor": "none", "alpha": 0.75, "pad": 0.6}
    for height, text in rail.ticks:
        spot.plot([i - 0.04, i], [height, height], color="0.15", linewidth=0.8, zorder=3)
        spot.text(i - 0.06, height, text, fontsize=7.5, ha="right", va="center", bbox=box, zorder=4)
    for height, text in rail.bounds:
        spot.plot([i, i + 0.14], [height, height], color=LIMIT, linewidth=2.2, zorder=5)
        spot.text(i + 0.16, height, text, fontsize=7.5, color=LIMIT, ha="left", va="center", bbox=box, zorder=5)
    for height in (0.0, 1.0) if rail.ends else ():
        spot.plot([i, i + 0.1], [height, height], color="0.15", linewidth=1.8, zorder=4)
    weight = "bold" if rail.better else "normal"
    spot.annotate(
        rail.lines, (i, 1.0), (0, 10), textcoords="offset points", fontsize=8.5, ha="center", va="bottom", weight=weight
    )
    if rail.better:
        spot.annotate(
            WAYS[rail.better], (i, 0.0), (0, -8), textcoords="offset points", fontsize=8.5, ha="center", va="top"
        )
