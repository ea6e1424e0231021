"""Texts, pairs and tables set on a page of the PDF: how large their letters can be, and drawing them."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from optisize.show.schematic_shapes import Box, text_width
from optisize.show.sheet import MISSED, Table

if TYPE_CHECKING:
    from matplotlib.axes import Axes

INK, SOFT, RULE = "0", "0.35", "0.6"
FONT = "DejaVu Sans"
PITCH = 1.36  # from one line to the next, over the size of the letters
BELOW = 0.35  # of letters under their line, over their size
GAP, BLOCKS = 1.3, 2.2  # between columns of a table and between tables, over the size of the letters
SPREAD = 1.6  # of a table over its natural width, at the most
SIZES = [x / 4.0 for x in range(32, 7, -1)]  # of letters, the largest that fit are taken


def write(
    spot: Axes,
    x: float,
    y: float,
    text: str,
    size: float,
    align: str = "left",
    colour: str = INK,
    bold: bool = False,
) -> None:
    """Write a text with its base line at a point, letter by letter as it is."""
    if not text:
        return
    weight = "bold" if bold else "normal"
    spot.text(
        x, y, text, fontsize=size, ha=align, va="baseline", color=colour, weight=weight, family=FONT, parse_math=False
    )  # fmt: skip


def rule(spot: Axes, x: float, width: float, y: float, colour: str = RULE) -> None:
    """Draw a thin level line."""
    spot.plot([x, x + width], [y, y], color=colour, linewidth=0.5)


def wrapped(text: str, width: float, size: float, bold: bool = False) -> list[str]:
    """Return a text on as many lines as it needs; a word that is wider than a line is broken."""
    lines = [""]
    for word in text.split(" "):
        longer = f"{lines[-1]} {word}" if lines[-1] else word
        if text_width(longer, size, bold) <= width:
            lines[-1] = longer
            continue
        lines += [""] * bool(lines[-1])
        for letter in word:
            if text_width(lines[-1] + letter, size, bold) > width and lines[-1]:
                lines.append("")
            lines[-1] += letter
    return lines


@dataclass(frozen=True)
class Pairs:
    """Names and texts as they are set: letters, width of the names, and the lines of each text."""

    size: float
    names: float
    lines: tuple[tuple[str, ...], ...]

    @property
    def height(self) -> float:
        """How high they stand."""
        return PITCH * self.size * sum(len(lines) for lines in self.lines)


def fit_pairs(pairs: Sequence[tuple[str, str]], width: float, height: float, largest: float) -> Pairs:
    """Return pairs set in the largest letters that fit into a width and a height."""
    for size in [s for s in SIZES if s <= largest]:
        names = max(text_width(name, size) for name, _ in pairs) + GAP * size
        lines = tuple(tuple(wrapped(text, width - names, size)) for _, text in pairs)
        found = Pairs(size, names, lines)
        if found.height <= height:
            break
    return found


def draw_pairs(spot: Axes, pairs: Iterable[tuple[str, str]], box: Box, shown: Pairs) -> None:
    """Draw pairs into a box as they are set."""
    y = box.top - PITCH * shown.size
    for (name, _), lines in zip(pairs, shown.lines, strict=True):
        write(spot, box.left, y, name, shown.size, colour=SOFT)
        for line in lines:
            write(spot, box.left + shown.names, y, line, shown.size)
            y -= PITCH * shown.size


def column_widths(table: Table, size: float) -> list[float]:
    """Return how wide each column of a table has to be [points]."""
    lines = [table.headings, *table.rows]
    return [max(text_width(line[i], size, bold=True) for line in lines) for i in range(len(table.headings))]


def table_width(table: Table, size: float) -> float:
    """Return how wide a table is [points]."""
    return sum(column_widths(table, size)) + GAP * size * (len(table.headings) - 1)


def table_height(table: Table, size: float, width: float) -> float:
    """Return how high a table is [points], its title, headings and note with it."""
    note = len(wrapped(table.note, width, 0.9 * size)) if table.note else 0
    return PITCH * size * (len(table.rows) + 2 + 0.9 * note) + BELOW * size


def draw_table(spot: Axes, table: Table, x: float, top: float, width: float, size: float) -> float:
    """Draw a table and return the height of its lower end.

    Args:
        spot: the page.
        table: what is drawn.
        x, top: its upper left corner.
        width: over which its columns spread.
        size: of its letters.
    """
    widths = column_widths(table, size)
    gap = max((width - sum(widths)) / max(len(widths) - 1, 1), 0.0)
    y = top - PITCH * size
    write(spot, x, y, table.title, size, bold=True)
    y -= PITCH * size
    for k, line in enumerate((table.headings, *table.rows)):
        left = x
        for i, (text, room) in enumerate(zip(line, widths, strict=True)):
            align = "left" if i < table.words else "right"
            at = left if align == "left" else left + room
            write(spot, at, y, text, size, align, INK if k else SOFT, bold=text == MISSED)
            left += room + gap
        if k == 0:
            rule(spot, x, width, y - 0.3 * size)
        y -= PITCH * size
    for note in wrapped(table.note, width, 0.9 * size) if table.note else ():
        write(spot, x, y, note, 0.9 * size, colour=SOFT)
        y -= 0.9 * PITCH * size
    return y + (PITCH - BELOW) * size


def fit_tables(
    tables: Sequence[Table], width: float, height: float
) -> tuple[Sequence[Table], Sequence[Table], tuple[float, float], float]:
    """Return which tables stand left and right, how wide both columns are, and the largest letters that fit."""
    for size in SIZES:
        gap = 0.5 * BLOCKS * size
        for cut in range(1, len(tables)):
            sides = (tables[:cut], tables[cut:])
            wide = [max(table_width(t, size) for t in side) for side in sides]
            high = [
                sum(table_height(t, size, min(w, SPREAD * table_width(t, size))) + gap for t in side) - gap
                for side, w in zip(sides, wide, strict=True)
            ]
            if sum(wide) + 2.0 * BLOCKS * size <= width and max(high) <= height:
                spare = width - sum(wide) - 2.0 * BLOCKS * size
                return *sides, (wide[0] + min(0.5 * spare, 60.0), wide[1] + min(0.5 * spare, 60.0)), size
    return tables[:1], tables[1:], (0.6 * width, 0.35 * width), SIZES[-1]
