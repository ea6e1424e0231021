"""The trade-offs of a front: every pair of goals, the third one as colour."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING, Any

from optisize.errors import OptisizeError
from optisize.front.run import Run
from optisize.show.plots import Axis, axis_of, dress, heading, plain_bar, pyplot, row_of, title_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure


@dataclass(frozen=True)
class TradeOff:
    """Two goals against each other, the third as colour where there is one."""

    x: Axis
    y: Axis
    colour: Axis | None


def trade_offs(run: Run) -> list[TradeOff]:
    """Return every pair of goals; with three or more, the next goal that is not in the pair is the colour."""
    axes = [axis_of(run, i) for i in range(len(run.problem.goals))]
    result = []
    for i, j in combinations(range(len(axes)), 2):
        rest = [k for k in range(len(axes)) if k not in (i, j)]
        result.append(TradeOff(axes[j], axes[i], axes[rest[0]] if rest else None))
    return result


def draw_trade_offs(run: Run, design: int | None = None) -> Figure:
    """Draw every pair of goals side by side; mark one design by its number."""
    marked = None if design is None else row_of(run, design)
    figures = trade_offs(run)
    if not figures:
        axis = axis_of(run, 0)
        raise OptisizeError(f"one goal ({axis.label}) has no trade-off to draw; see `optisize front`")
    plt = pyplot()
    columns = min(len(figures), 3)
    rows = -(-len(figures) // columns)
    figure, axes = plt.subplots(rows, columns, figsize=(5.2 * columns, 4.5 * rows), squeeze=False, layout="constrained")
    figure.get_layout_engine().set(wspace=0.06)  # between a colour bar and the next picture
    for spot, trade_off in zip(axes.flat, figures, strict=False):
        _draw(figure, spot, trade_off)
        if marked is not None:
            _mark(spot, trade_off, marked)
    for spot in axes.flat[len(figures) :]:
        spot.set_visible(False)
    ring = "" if design is None else f"; ring: design {design}"
    words = f"{len(run.front)} designs, each meets every limit{ring}"
    figure.suptitle(f"{title_text(run.problem.title)}\n{words}", fontsize=11)
    return figure


def _draw(figure: Figure, spot: Axes, shown: TradeOff) -> None:
    colour = shown.colour
    options: dict[str, Any] = {"s": 22, "linewidths": 0.3, "edgecolors": "0.25"}
    if colour is not None:
        norm = _norm(colour)
        drawn = spot.scatter(shown.x.values, shown.y.values, c=colour.values, cmap="viridis", norm=norm, **options)
        bar = figure.colorbar(drawn, ax=spot)
        bar.set_label(heading(colour.label, colour.better))
        plain_bar(bar, colour)
    else:
        spot.scatter(shown.x.values, shown.y.values, color="#31688e", **options)
    dress(spot, shown.x, shown.y)


def _mark(spot: Axes, shown: TradeOff, row: int) -> None:
    """Put a ring around one design; its number stands in the title, where it hides no other design."""
    place = [shown.x.values[row]], [shown.y.values[row]]
    spot.scatter(*place, s=130, facecolors="none", edgecolors="black", linewidths=1.8, zorder=4)


def _norm(axis: Axis) -> Any:
    from matplotlib.colors import LogNorm, Normalize

    return LogNorm() if axis.logarithmic else Normalize()
