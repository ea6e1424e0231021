"""Figures for a design review: what a figure shows is computed as a plain record, then drawn."""

from __future__ import annotations

import contextlib
import textwrap
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from optisize.errors import OptisizeError
from optisize.front.run import Run
from optisize.front.table import measured
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import UNPREFIXED, written

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

_PREFIXES = (
    (1e12, "T"),
    (1e9, "G"),
    (1e6, "M"),
    (1e3, "k"),
    (1.0, ""),
    (1e-3, "m"),
    (1e-6, "u"),
    (1e-9, "n"),
    (1e-12, "p"),
)
FORMATS = ("png", "svg", "pdf")
BETTER = {"max": "higher", "min": "lower", "zero": "nearer to zero"}
LINE = 40  # letters that fit beside an axis
_LOG_SPAN = 8.0  # an axis whose figures span more than this factor is logarithmic


@dataclass(frozen=True)
class Axis:
    """One goal as an axis: values in a readable unit, and which way is better.

    Attributes:
        label: name, settings of its parameters, and unit.
        values: (N,), in that unit.
        better: ``max`` or ``min``.
        logarithmic: whether the axis is.
        bounds: limits on the same measure, in that unit.
    """

    label: str
    values: Array
    better: str
    logarithmic: bool
    bounds: tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class TradeOff:
    """Two goals against each other, the third as colour where there is one."""

    x: Axis
    y: Axis
    colour: Axis | None


@dataclass(frozen=True)
class History:
    """How a search went: hypervolume and feasible share over the evaluations."""

    evaluations: Array
    hypervolume: Array
    feasible_share: Array


def axis_of(run: Run, goal_index: int) -> Axis:
    """Return the axis of one goal."""
    goal = run.problem.goals[goal_index]
    m = goal.measure
    values = measured(run.front, m)
    factor, unit = readable(values, m.unit)
    bounds = tuple(
        (name, bound / factor) for x in run.problem.limits if x.measure.name == m.name for name, bound in x.bounds
    )
    positive = values[np.isfinite(values) & (values > 0)]
    wide = m.scale == "log" and len(positive) == len(values) > 0 and positive.max() / positive.min() > _LOG_SPAN
    name = label(m).replace("_", " ")
    return Axis(f"{name} [{unit}]" if unit else name, values / factor, goal.sense, bool(wide), bounds)


def readable(values: Array, unit: str) -> tuple[float, str]:
    """Return the factor and the prefixed unit in which the middle of the values reads well."""
    if unit == "m^2":
        return 1e-12, "um^2"
    if unit == "V/s":
        return 1e6, "V/us"
    finite = np.abs(values[np.isfinite(values)])
    middle = float(np.median(finite)) if len(finite) else 1.0
    if unit in UNPREFIXED or middle == 0.0:
        return 1.0, written(unit)
    factor, prefix = next(((f, p) for f, p in _PREFIXES if middle >= f), _PREFIXES[-1])
    return factor, f"{prefix.strip()}{written(unit)}"


def trade_offs(run: Run) -> list[TradeOff]:
    """Return every pair of goals; with three or more, the next goal that is not in the pair is the colour."""
    axes = [axis_of(run, i) for i in range(len(run.problem.goals))]
    result = []
    for i, j in combinations(range(len(axes)), 2):
        rest = [k for k in range(len(axes)) if k not in (i, j)]
        result.append(TradeOff(axes[j], axes[i], axes[rest[0]] if rest else None))
    return result


def history(run: Run) -> History:
    """Return how the search went."""
    table = run.history
    return History(*(table[c].to_numpy(dtype=float) for c in ("evaluations", "hypervolume", "feasible_share")))


def draw_trade_offs(run: Run) -> Figure:
    """Draw every pair of goals side by side."""
    figures = trade_offs(run)
    if not figures:
        axis = axis_of(run, 0)
        raise OptisizeError(f"one goal ({axis.label}) has no trade-off to draw; see `optisize front`")
    plt = pyplot()
    columns = min(len(figures), 3)
    rows = -(-len(figures) // columns)
    figure, axes = plt.subplots(rows, columns, figsize=(5.2 * columns, 4.5 * rows), squeeze=False, layout="constrained")
    for spot, trade_off in zip(axes.flat, figures, strict=False):
        _draw_trade_off(figure, spot, trade_off)
    for spot in axes.flat[len(figures) :]:
        spot.set_visible(False)
    figure.suptitle(f"{title_text(run.problem.title)}\n{len(run.front)} designs, each meets every limit", fontsize=11)
    return figure


def _draw_trade_off(figure: Figure, spot: Axes, shown: TradeOff) -> None:
    colour = shown.colour
    options: dict[str, Any] = {"s": 22, "linewidths": 0.3, "edgecolors": "0.25"}
    if colour is not None:
        norm = _norm(colour)
        drawn = spot.scatter(shown.x.values, shown.y.values, c=colour.values, cmap="viridis", norm=norm, **options)
        bar = figure.colorbar(drawn, ax=spot)
        bar.set_label(heading(colour.label, colour.better))
    else:
        spot.scatter(shown.x.values, shown.y.values, color="#31688e", **options)
    for axis, set_label, set_scale, line in (
        (shown.x, spot.set_xlabel, spot.set_xscale, spot.axvline),
        (shown.y, spot.set_ylabel, spot.set_yscale, spot.axhline),
    ):
        set_label(heading(axis.label, axis.better))
        if axis.logarithmic:
            set_scale("log")
        for name, bound in axis.bounds:
            if _near(bound, axis.values):
                line(bound, color="#b5367a", linestyle="--", linewidth=1)
                _label_bound(spot, axis is shown.x, bound, f"{name} {bound:g}")
    _mark_better(spot, shown)
    _plain_ticks(spot, shown)
    spot.grid(True, which="major", color="0.9", linewidth=0.6)
    spot.set_axisbelow(True)


def heading(label: str, better: str) -> str:
    """Return what stands at an axis, and which way is better, in lines that are no longer than the axis."""
    way = f"{BETTER[better]} is better"
    whole = f"{label}, {way}"
    return whole if len(whole) <= LINE else f"{textwrap.fill(label, LINE)},\n{way}"


def _norm(axis: Axis) -> Any:
    from matplotlib.colors import LogNorm, Normalize

    return LogNorm() if axis.logarithmic else Normalize()


def _near(bound: float, values: Array) -> bool:
    """Tell whether a limit is near enough to the designs to be drawn with them."""
    low, high = float(values.min()), float(values.max())
    span = max(high - low, abs(high) * 1e-3)
    return low - 0.25 * span <= bound <= high + 0.25 * span


def _label_bound(spot: Axes, vertical: bool, bound: float, text: str) -> None:
    if vertical:
        spot.text(bound, 0.02, f" {text}", transform=spot.get_xaxis_transform(), fontsize=8, color="#b5367a")
    else:
        spot.text(0.02, bound, text, transform=spot.get_yaxis_transform(), fontsize=8, color="#b5367a", va="bottom")


def _mark_better(spot: Axes, shown: TradeOff) -> None:
    """Point above the picture to the corner where both goals are at their best; inside it would hide designs."""
    right, up = shown.x.better == "max", shown.y.better == "max"
    arrow = {(True, True): "\u2197", (True, False): "\u2198", (False, True): "\u2196", (False, False): "\u2199"}
    text = f"better {arrow[right, up]}" if right else f"{arrow[right, up]} better"
    spot.set_title(text, fontsize=10, color="0.2", loc="right" if right else "left")


def _plain_ticks(spot: Axes, shown: TradeOff) -> None:
    """Write ticks of logarithmic axes as plain numbers."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    for axis, ticks in ((shown.x, spot.xaxis), (shown.y, spot.yaxis)):
        if axis.logarithmic:
            ticks.set_major_locator(LogLocator(base=10, subs=(1.0, 2.0, 5.0)))
            ticks.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
            ticks.set_minor_formatter(NullFormatter())


def draw_history(run: Run) -> Figure:
    """Draw hypervolume and feasible share over the evaluations."""
    record = history(run)
    plt = pyplot()
    figure, spot = plt.subplots(figsize=(6.4, 4.0), layout="constrained")
    spot.plot(record.evaluations, record.hypervolume, color="#31688e", drawstyle="steps-post", label="hypervolume")
    spot.set_xlabel("evaluations")
    spot.set_ylabel("hypervolume of the archive, higher is better")
    spot.set_ylim(bottom=0)
    spot.set_xlim(left=0)
    other = spot.twinx()
    other.plot(record.evaluations, 100 * record.feasible_share, color="#b5367a", linestyle="--", label="feasible share")
    other.set_ylabel("feasible share of the population [%]")
    other.set_ylim(0, 105)
    lines = [*spot.get_lines(), *other.get_lines()]
    spot.legend(lines, [str(line.get_label()) for line in lines], loc="lower right", frameon=False)
    spot.grid(True, color="0.9", linewidth=0.6)
    figure.suptitle(f"Search history: {title_text(run.problem.title)}", fontsize=11)
    return figure


def title_text(text: str) -> str:
    """Return a title without what matplotlib would read as mathematics or lines."""
    return "".join(c if c.isprintable() else " " for c in text).replace("$", r"\$")


def pyplot() -> Any:
    """Return matplotlib's interface, drawing into files only."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    return plt


def write_figures(run: Run, directory: Path, formats: Sequence[str] = ("png",), dpi: int = 150) -> list[Path]:
    """Draw the figures of a run into a directory, each file whole or not at all; return their paths.

    Raises OptisizeError when they cannot be written.
    """
    plt = pyplot()
    drawings = {"history": draw_history}
    if len(run.problem.goals) > 1 and len(run.front):
        drawings = {"trade-offs": draw_trade_offs, **drawings}
    written = []
    for name, draw in drawings.items():
        figure = draw(run)
        try:
            written += [write_figure(figure, directory / f"{name}.{kind}", kind, dpi) for kind in formats]
        finally:
            plt.close(figure)
    return written


def write_figure(figure: Figure, path: Path, kind: str, dpi: int) -> Path:
    """Write one figure beside its place, then put it there; a letter that the font lacks is drawn as a box."""
    beside = path.with_name(f".{path.name}")
    try:
        with warnings.catch_warnings():
            warnings.filterwarnings("ignore", "Glyph .* missing from font")
            figure.savefig(beside, dpi=dpi, format=kind)
        beside.replace(path)
    except OSError as error:
        raise OptisizeError(f"{path.name}: cannot be written: {error.strerror or error}") from None
    finally:
        with contextlib.suppress(OSError):
            beside.unlink()
    return path
