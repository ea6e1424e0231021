"""The plots of the page: figures over one shared source, so that what is brushed in one is brushed in all.

An axis holds places, not values: the decimal logarithm of a logarithmic measure, the value otherwise. One figure can
then show any measure; ticks and their text are made by the page's own script, which also sets labels, ranges and
colours. Designs are drawn three times: all of them as small dots, those that are left as circles that can be brushed,
and the two that were picked as a ring and a square with their letters.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import combinations
from typing import TYPE_CHECKING, Any

import numpy as np

from optisize.process.law import Array

if TYPE_CHECKING:
    from bokeh.models import CDSView, ColumnDataSource, LinearColorMapper, Plot

PAIRS = 6  # views of goals against each other; the view of any two has the rest
TALL, SMALL = 360, 280  # pixels
SHADE, TOLD = "#shade", "#told"  # columns of the source that no measure can be named like
NAMES = ("picked", "compared")  # of what is marked A and B
_TICKS = "return optisizePage.ticks({axis!r}, cb_data.start, cb_data.end)"
_TEXT = "return optisizePage.tickText({axis!r}, tick)"


def place_columns(columns: Sequence[Mapping[str, Any]], values: Mapping[str, Array]) -> dict[str, Array]:
    """Return where designs stand on the axis of each column, (N,); not a number where there is no finite figure.

    Args:
        columns: with ``key``, and ``log`` for a logarithmic axis.
        values: SI values by key, (N,).
    """
    places = {}
    for c in columns:
        v = np.asarray(values[c["key"]], dtype=float)
        finite = np.where(np.isfinite(v), v, np.nan)
        places[c["key"]] = np.log10(finite) if c["log"] else finite
    return places


def view_axes(columns: Sequence[Mapping[str, Any]], goals: Sequence[str]) -> dict[str, tuple[str, str]]:
    """Return the measures (x, y) that each view shows at first, by the name of the view.

    ``goals-0`` and so on are pairs of goals, ``any`` is the reader's own choice, ``size-0`` and so on are the free
    sizes against a goal.
    """
    views = {}
    for number, (i, j) in enumerate([*combinations(range(len(goals)), 2)][:PAIRS]):
        views[f"goals-{number}"] = (goals[j], goals[i])
    others = [c["key"] for c in columns if c["kind"] in ("named", "other")]
    views["any"] = ((others or goals)[0], goals[0])
    free = [c["key"] for c in columns if c["kind"] == "free"]
    views |= {f"size-{number}": (key, goals[0]) for number, key in enumerate(free)}
    return views


def document_json(columns: Sequence[Mapping[str, Any]], values: Mapping[str, Array], goals: Sequence[str]) -> Any:
    """Return a document with a figure for each view, as bokeh's script in a browser reads it.

    Args:
        columns, values: as for `place_columns`.
        goals: names of measures.
    """
    from bokeh.document import Document
    from bokeh.models import BooleanFilter, CDSView, ColumnDataSource, IndexFilter, LinearColorMapper
    from bokeh.palettes import cividis

    places = place_columns(columns, values)
    count = len(next(iter(places.values())))
    shade = np.full(count, 0.5)
    source = ColumnDataSource({**places, SHADE: shade, TOLD: [""] * count}, name="designs")
    left = CDSView(filter=BooleanFilter(booleans=[True] * count, name="kept"))
    marked = [CDSView(filter=IndexFilter(indices=[], name=name)) for name in NAMES]
    colours = LinearColorMapper(palette=cividis(64), low=0.0, high=1.0, nan_color="gray", name="colours")
    document = Document()
    with document.models.freeze():  # otherwise every figure has bokeh look through all of them again
        for name, axes in view_axes(columns, goals).items():
            document.add_root(_figure(name, axes, source, left, marked, colours))
    return document.to_json(deferred=False)


def _figure(
    name: str,
    axes: tuple[str, str],
    source: ColumnDataSource,
    left: CDSView,
    marked: Sequence[CDSView],
    colours: LinearColorMapper,
) -> Plot:
    from bokeh.models import CustomJSTicker, CustomJSTickFormatter, Range1d
    from bokeh.plotting import figure

    small = name.startswith("size-")
    plot = figure(
        name=name,
        tags=list(axes),
        height=SMALL if small else TALL,
        sizing_mode="stretch_width",
        x_range=Range1d(),
        y_range=Range1d(),
        tools=[],
        toolbar_location=None if small else "above",
        output_backend="canvas",
        min_border_right=14,
    )
    for axis, which in ((plot.xaxis[0], f"{name}.x"), (plot.yaxis[0], f"{name}.y")):
        axis.ticker = CustomJSTicker(major_code=_TICKS.format(axis=which))
        axis.formatter = CustomJSTickFormatter(code=_TEXT.format(axis=which))
    for grid, axis in ((plot.xgrid[0], plot.xaxis[0]), (plot.ygrid[0], plot.yaxis[0])):
        grid.ticker = axis.ticker
    _add_bounds(plot)
    _add_designs(plot, axes, source, left, marked, colours)
    plot.toolbar.logo = None
    return plot


def _add_bounds(plot: Plot) -> None:
    """Add the lines of limits, which the page's script puts into place."""
    from bokeh.models import Span

    for dimension, axis in (("height", "x"), ("width", "y")):
        for bound in ("min", "max"):
            plot.add_layout(
                Span(
                    dimension=dimension,
                    name=f"{axis}.{bound}",
                    visible=False,
                    line_dash="dashed",
                    line_width=2,
                    level="underlay",
                )
            )


def _add_designs(
    plot: Any,
    axes: tuple[str, str],
    source: ColumnDataSource,
    left: CDSView,
    marked: Sequence[CDSView],
    colours: LinearColorMapper,
) -> None:
    from bokeh.models import BoxSelectTool, HoverTool, LassoSelectTool, PanTool, ResetTool, Scatter, TapTool, Text
    from bokeh.models import WheelZoomTool as Wheel

    at: dict[str, Any] = dict(zip("xy", axes, strict=True))
    shade = {"field": SHADE, "transform": colours}
    _add_alike(plot, source, Scatter(**at, size=4, marker="x"), name="all")
    left_over = plot.add_glyph(
        source,
        Scatter(**at, size=10, fill_color=shade, line_width=1),
        selection_glyph=Scatter(**at, size=12, fill_color=shade, line_width=2.2),
        nonselection_glyph=Scatter(**at, size=8, fill_color=shade, fill_alpha=0.25, line_alpha=0.25),
        view=left,
        name="left",
    )
    # As annotations, marks of designs at the edge are not cut off there.
    for view, letter, shape, side in zip(marked, "AB", ("circle", "square"), (-1, 1), strict=True):
        ring = Scatter(**at, size=22, marker=shape, fill_color=None, line_width=3.5)
        _add_alike(plot, source, ring, view=view, name=f"ring-{letter}", level="annotation")
        written = Text(
            **at,
            text={"value": letter},
            x_offset=13 * side,
            y_offset=-9,
            text_align="right" if side < 0 else "left",
            text_font_size="14px",
            text_font_style="bold",
            padding=2,
        )
        _add_alike(plot, source, written, view=view, name=f"letter-{letter}", level="annotation")
    only = [left_over]
    box, tap = BoxSelectTool(renderers=only), TapTool(renderers=only)
    tools = [box, LassoSelectTool(renderers=only, continuous=False), tap, PanTool(), Wheel(), ResetTool()]
    plot.add_tools(
        *tools,
        HoverTool(
            renderers=only, visible=False, tooltips="<div style='white-space: pre-line; font-size: 14px'>@{#told}</div>"
        ),
    )
    plot.toolbar.active_drag, plot.toolbar.active_tap, plot.toolbar.active_scroll = box, tap, None


def _add_alike(plot: Any, source: ColumnDataSource, glyph: Any, **options: Any) -> None:
    """Add what looks alike whether selected or not; otherwise bokeh draws copies that no later change reaches."""
    plot.add_glyph(source, glyph, selection_glyph=glyph, nonselection_glyph=glyph, **options)
