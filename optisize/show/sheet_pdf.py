"""The design sheet as a PDF of two A4 pages: the schematic with the results, then the tables; black and grey only."""

from __future__ import annotations

import io
import warnings
from typing import TYPE_CHECKING

import numpy as np

from optisize.show.schematic_shapes import Box, Schematic, text_width
from optisize.show.sheet import ROOM, Sheet, Table, magnification
from optisize.show.sheet_setting import (
    BLOCKS,
    INK,
    PITCH,
    SIZES,
    SOFT,
    SPREAD,
    draw_pairs,
    draw_table,
    fit_pairs,
    fit_tables,
    rule,
    table_height,
    table_width,
    wrapped,
    write,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDTH, HEIGHT, MARGIN = 841.9, 595.3, 28.4  # points: A4, lying
INNER = WIDTH - 2.0 * MARGIN
WIRE, STROKE, DOT = 0.75, 1.0, 1.35


def sheet_pdf(sheet: Sheet) -> bytes:
    """Return the PDF."""
    import matplotlib
    from matplotlib.backends.backend_pdf import PdfPages

    data = io.BytesIO()
    # Letters of a title that the font lacks are drawn as boxes.
    with warnings.catch_warnings(), matplotlib.rc_context({"pdf.fonttype": 42}):
        warnings.filterwarnings("ignore", "Glyph .* missing from font")
        about = {"Title": f"{sheet.title}: {sheet.design}", "CreationDate": None, "Creator": "optisize"}
        with PdfPages(data, metadata=about) as pages:
            for figure in pages_of(sheet):
                pages.savefig(figure)
    return data.getvalue()


def pages_of(sheet: Sheet) -> list[Figure]:
    """Return both pages as figures, in points of the paper."""
    first, second = _page(sheet, 1), _page(sheet, 2)
    _first(first.axes[0], sheet)
    _second(second.axes[0], sheet)
    return [first, second]


def _page(sheet: Sheet, number: int) -> Figure:
    """Return an empty page with its foot."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH / 72.0, HEIGHT / 72.0))
    spot = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    spot.set_xlim(0.0, WIDTH)
    spot.set_ylim(0.0, HEIGHT)
    spot.axis("off")
    rule(spot, MARGIN, INNER, MARGIN + 4.0)
    write(spot, MARGIN, MARGIN - 6.0, sheet.caution, 7.0, bold=True)
    write(spot, WIDTH - MARGIN, MARGIN - 6.0, f"{sheet.date}   {number} of 2", 7.0, "right", SOFT)
    return figure


def _first(spot: Axes, sheet: Sheet) -> None:
    """Draw title, facts, results and the schematic."""
    y = _heading(spot, sheet)
    low = MARGIN + 14.0 + ROOM[1] + 14.0
    facts, room = 0.40 * INNER, y - low
    draw_pairs(spot, sheet.facts, Box(MARGIN, low, MARGIN + facts, y), fit_pairs(sheet.facts, facts, room, 8.0))
    _results(spot, sheet.results, Box(MARGIN + facts + 24.0, low, WIDTH - MARGIN, y))
    box = Box(MARGIN, MARGIN + 24.0, WIDTH - MARGIN, MARGIN + 24.0 + ROOM[1])
    draw_schematic(spot, sheet.schematic, box)
    write(spot, MARGIN, MARGIN + 11.0, sheet.caption, 6.5, colour=SOFT)


def _heading(spot: Axes, sheet: Sheet) -> float:
    """Write title and design; return the height that is left below."""
    y = HEIGHT - MARGIN - 10.0
    size = next((s for s in (14.0, 12.0, 10.0, 9.0, 8.0) if text_width(sheet.title, s, True) <= INNER), 8.0)
    for line in wrapped(sheet.title, INNER, size, bold=True):
        write(spot, MARGIN, y, line, size, bold=True)
        y -= PITCH * size
    for line in wrapped(f"Design sheet of {sheet.design}", INNER, 8.0):
        write(spot, MARGIN, y, line, 8.0, colour=SOFT)
        y -= PITCH * 8.0
    rule(spot, MARGIN, INNER, y + 4.0)
    return y - 2.0


def _results(spot: Axes, table: Table, box: Box) -> None:
    """Draw goals and limits into a box, side by side where there are many."""
    width, height = box.right - box.left, box.top - box.bottom
    for size in SIZES:
        blocks = min(int(np.ceil(len(table.rows) / max(height / (PITCH * size) - 2.0, 1.0))), 3)
        each = -(-len(table.rows) // blocks)
        parts = [
            Table(table.title if i == 0 else "", table.headings, table.rows[i * each : (i + 1) * each], table.words)
            for i in range(blocks)
        ]
        wide = [table_width(part, size) for part in parts]
        if table_height(parts[0], size, width) <= height and sum(wide) + BLOCKS * size * (blocks - 1) <= width:
            break
    x, spare = box.left, (width - sum(wide) - BLOCKS * size * (blocks - 1)) / blocks
    for part, natural in zip(parts, wide, strict=True):
        room = natural + min(max(spare, 0.0), 0.3 * natural)
        draw_table(spot, part, x, box.top, room, size)
        x += room + BLOCKS * size


def _second(spot: Axes, sheet: Sheet) -> None:
    """Draw the tables in two columns, and where the figures come from below them."""
    top = HEIGHT - MARGIN - 10.0
    size = next((s for s in (9.0, 8.0, 7.0, 6.0) if text_width(f"{sheet.title}, {sheet.design}", s) <= INNER), 5.0)
    for line in wrapped(f"{sheet.title}, {sheet.design}", INNER, size):
        write(spot, MARGIN, top, line, size, colour=SOFT)
        top -= PITCH * size
    origins = fit_pairs(sheet.origins, INNER, 90.0, 6.5)
    low = MARGIN + 10.0 + origins.height
    rule(spot, MARGIN, INNER, low + 4.0)
    draw_pairs(spot, sheet.origins, Box(MARGIN, MARGIN + 8.0, WIDTH - MARGIN, low), origins)
    left, right, widths, size = fit_tables(sheet.tables, INNER, top - low - 6.0)
    for tables, x, width in ((left, MARGIN, widths[0]), (right, WIDTH - MARGIN - widths[1], widths[1])):
        y = top + 4.0
        for table in tables:
            room = min(width, SPREAD * table_width(table, size))
            y = draw_table(spot, table, x, y, room, size) - 0.5 * BLOCKS * size


def draw_schematic(spot: Axes, shown: Schematic, box: Box) -> None:
    """Draw a schematic into the middle of a box of the page, as large as it may be."""
    from matplotlib.collections import LineCollection, PatchCollection
    from matplotlib.patches import Circle, Polygon

    scale = magnification(shown, box.right - box.left, box.top - box.bottom)
    own = shown.box
    x0 = 0.5 * (box.left + box.right) - 0.5 * scale * (own.left + own.right)
    y0 = 0.5 * (box.bottom + box.top) - 0.5 * scale * (own.bottom + own.top)

    def at(point: tuple[float, float]) -> tuple[float, float]:
        return x0 + scale * point[0], y0 + scale * point[1]

    wires = [[at(w.a), at(w.b)] for w in shown.wires]
    strokes = [[at(p) for p in line] for s in shown.symbols for line in s.strokes]
    circles = [Circle(at(c), scale * r) for s in shown.symbols for c, r in s.circles]
    filled = [Polygon([at(p) for p in f]) for s in shown.symbols for f in s.fills]
    dots = [Circle(at(d), scale * DOT) for d in shown.dots]
    spot.add_collection(LineCollection(wires, colors=INK, linewidths=scale * WIRE, capstyle="projecting"))
    spot.add_collection(LineCollection(strokes, colors=INK, linewidths=scale * STROKE, capstyle="round"))
    spot.add_collection(PatchCollection(circles, facecolor="none", edgecolor=INK, linewidth=scale * STROKE))
    spot.add_collection(PatchCollection([*filled, *dots], facecolor=INK, linewidth=0.0))
    for label in shown.labels:
        align = {"left": "left", "right": "right", "centre": "center"}[label.align]
        for text, (x, y), bold in label.placed():
            px, py = at((x, y))
            write(spot, px, py, text, scale * label.size, align, SOFT if label.muted else INK, bold)
