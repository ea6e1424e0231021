"""What the figures for a design review share: goals as axes, how an axis is dressed, and writing files.

What a figure shows is computed as a plain record, then drawn; each figure has a file of its own beside this one.
"""

from __future__ import annotations

import contextlib
import textwrap
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from optisize.errors import InputError, OptisizeError, nearest
from optisize.front.run import Run
from optisize.front.table import measured
from optisize.problem.evaluate import Goal, Limit
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
LIMIT = "#b5367a"  # the colour of a limit
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


def axis_of(run: Run, goal_index: int) -> Axis:
    """Return the axis of one goal of a run."""
    goal = run.problem.goals[goal_index]
    return goal_axis(goal, measured(run.front, goal.measure), run.problem.limits)


def goal_axis(goal: Goal, values: Array, limits: Sequence[Limit] = ()) -> Axis:
    """Return the axis of a goal for designs with these values of its measure (N,), with the limits on it."""
    m = goal.measure
    factor, unit = readable(values, m.unit)
    bounds = tuple((name, bound / factor) for x in limits if x.measure.name == m.name for name, bound in x.bounds)
    positive = values[np.isfinite(values) & (values > 0)]
    wide = m.scale == "log" and len(positive) == len(values) > 0 and positive.max() / positive.min() > _LOG_SPAN
    name = label(m).replace("_", " ")
    return Axis(f"{name} [{unit}]" if unit else name, values / factor, goal.sense, bool(wide), bounds)


def row_of(run: Run, design: int) -> int:
    """Return the row of a design of the front, by its number.

    Raises InputError when there is none.
    """
    rows = np.flatnonzero(run.front["design"] == design)
    if not len(rows):
        raise InputError(f"design {design}: the front has no such design")
    return int(rows[0])


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


def heading(label: str, better: str) -> str:
    """Return what stands at an axis, and which way is better, in lines that are no longer than the axis."""
    way = f"{BETTER[better]} is better"
    lines = textwrap.wrap(f"{label},", LINE)
    if len(f"{lines[-1]} {way}") <= LINE:
        lines[-1] += f" {way}"
    else:
        lines.append(way)
    return "\n".join(lines)


def dress(spot: Axes, x: Axis, y: Axis) -> None:
    """Give a picture its labels, scales, limits and grid, and say above it to which corner both goals get better."""
    for axis, set_label, set_scale, line in (
        (x, spot.set_xlabel, spot.set_xscale, spot.axvline),
        (y, spot.set_ylabel, spot.set_yscale, spot.axhline),
    ):
        set_label(heading(axis.label, axis.better))
        if axis.logarithmic:
            set_scale("log")
        for name, bound in axis.bounds:
            if near(bound, axis.values):
                line(bound, color=LIMIT, linestyle="--", linewidth=1)
                _label_bound(spot, axis is x, name, bound)
    _mark_better(spot, x, y)
    _plain_ticks(x, spot.xaxis)
    _plain_ticks(y, spot.yaxis)
    spot.grid(True, which="major", color="0.9", linewidth=0.6)
    spot.set_axisbelow(True)


def near(bound: float, values: Array) -> bool:
    """Tell whether a limit is near enough to the designs to be drawn with them."""
    low, high = float(values.min()), float(values.max())
    span = max(high - low, abs(high) * 1e-3)
    return low - 0.25 * span <= bound <= high + 0.25 * span


def _label_bound(spot: Axes, vertical: bool, name: str, bound: float) -> None:
    """Write a limit along its line, on the side where no design can be."""
    style: dict[str, Any] = {"fontsize": 8, "color": LIMIT, "textcoords": "offset points", "rotation": 90 * vertical}
    text, away = f"{name} {bound:g}", -1 if name == "min" else 1
    if vertical:
        style |= {"xycoords": spot.get_xaxis_transform(), "va": "bottom", "ha": "right" if away < 0 else "left"}
        spot.annotate(text, (bound, 0.02), (away, 0), **style)
    else:
        style |= {"xycoords": spot.get_yaxis_transform(), "va": "top" if away < 0 else "bottom"}
        spot.annotate(text, (0.02, bound), (0, away), **style)


def _mark_better(spot: Axes, x: Axis, y: Axis) -> None:
    """Point above the picture to the corner where both goals are at their best; inside it would hide designs."""
    right, up = x.better == "max", y.better == "max"
    arrow = {(True, True): "\u2197", (True, False): "\u2198", (False, True): "\u2196", (False, False): "\u2199"}
    text = f"better {arrow[right, up]}" if right else f"{arrow[right, up]} better"
    spot.set_title(text, fontsize=10, color="0.2", loc="right" if right else "left")


def _plain_ticks(axis: Axis, ticks: Any) -> None:
    """Write the ticks of a logarithmic axis as plain numbers."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

    if axis.logarithmic:
        ticks.set_major_locator(LogLocator(base=10, subs=(1.0, 2.0, 5.0)))
        ticks.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        ticks.set_minor_formatter(NullFormatter())


def plain_bar(bar: Any, axis: Axis) -> None:
    """Write the ticks of a logarithmic colour bar as plain numbers."""
    _plain_ticks(axis, bar.ax.yaxis)


def title_text(text: str) -> str:
    """Return a title without what matplotlib would read as mathematics or lines."""
    return "".join(c if c.isprintable() else " " for c in text).replace("$", r"\$")


def pyplot() -> Any:
    """Return matplotlib's interface, drawing into files only."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    return plt


def panels(count: int, columns: int, width: float) -> tuple[Figure, list[Axes]]:
    """Return a figure with so many panels, in rows of at most so many columns, each of a width [inch]."""
    columns = min(max(count, 1), columns)
    rows = max(-(-count // columns), 1)
    size = width * columns, 3.6 * rows
    figure, axes = pyplot().subplots(rows, columns, figsize=size, squeeze=False, layout="constrained")
    for spot in axes.flat[count:]:
        spot.set_visible(False)
    return figure, list(axes.flat[:count])


def write_figure(figure: Figure, path: Path, kind: str, dpi: int) -> Path:
    """Write one figure beside its place, then put it there; a letter that the font lacks is drawn as a box."""
    beside = path.with_name(f".{path.name}")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
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


def write_one(figure: Figure, path: Path, dpi: int = 150) -> None:
    """Write a figure in the format of its file's name, and close it.

    Raises OptisizeError when it cannot be written.
    """
    write_formats(figure, path.parent, path.stem, [path.suffix[1:]], dpi)


def write_formats(figure: Figure, directory: Path, name: str, formats: Sequence[str], dpi: int) -> list[Path]:
    """Write one figure in several formats, and close it; return the paths.

    Raises OptisizeError when they cannot be written.
    """
    try:
        return [write_figure(figure, directory / f"{name}.{kind}", kind, dpi) for kind in formats]
    finally:
        pyplot().close(figure)


def check_figure(option: str, path: Path) -> None:
    """Raise InputError for a figure file, given with an option, of a kind that cannot be drawn."""
    kinds = [f".{kind}" for kind in FORMATS]
    if path.suffix not in kinds:
        raise InputError(f'{option}: found "{path.name}"; allowed are {", ".join(kinds)}{nearest(path.suffix, kinds)}')
