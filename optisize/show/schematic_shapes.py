"""What a drawn schematic is made of: symbols with pins, wires, dots and labels, in points on a page, y upwards.

Both the PDF and the page in HTML are drawn from these shapes, and what they connect can be read back from where they
touch. Lengths are in points at the size at which a schematic is laid out; a page scales all of it together.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from functools import lru_cache

Point = tuple[float, float]

UNIT = 6.0  # the grid of the symbols
LETTERS, SMALL = 7.0, 6.2  # sizes of the letters of labels and of node voltages
PITCH = 1.2  # from one line of a label to the next, over the size of its letters
ASCENT = 0.76  # how high letters stand over their line, over their size


@dataclass(frozen=True)
class Box:
    """A rectangle."""

    left: float
    bottom: float
    right: float
    top: float

    def overlaps(self, other: Box, gap: float = 0.0) -> bool:
        """Tell whether two rectangles share an area, or come nearer to each other than a gap."""
        return (
            self.left < other.right + gap
            and other.left < self.right + gap
            and self.bottom < other.top + gap
            and other.bottom < self.top + gap
        )


def hull(boxes: Iterable[Box]) -> Box:
    """Return the smallest rectangle around others."""
    every = list(boxes)
    return Box(
        min(b.left for b in every), min(b.bottom for b in every),
        max(b.right for b in every), max(b.top for b in every),
    )  # fmt: skip


@dataclass(frozen=True)
class Wire:
    """A straight wire between two points; `net` is the node that it belongs to."""

    net: str
    a: Point
    b: Point

    @property
    def box(self) -> Box:
        """The rectangle around it, without an area of its own."""
        (x1, y1), (x2, y2) = self.a, self.b
        return Box(min(x1, x2), min(y1, y2), max(x1, x2), max(y1, y2))

    def holds(self, point: Point) -> bool:
        """Tell whether a point lies on the wire, its ends included."""
        box = self.box
        return box.left - TOUCH <= point[0] <= box.right + TOUCH and box.bottom - TOUCH <= point[1] <= box.top + TOUCH


TOUCH = 1e-6  # points this near to each other are one


@dataclass(frozen=True)
class Symbol:
    """An element, a port or a rail's sign as it is drawn.

    Attributes:
        kind, name: such as ``transistor`` and ``input.p``; an element and a port of other kinds may share a name.
        strokes: lines through points.
        circles: centre and radius.
        fills: filled polygons.
        pins: terminal and where a wire may meet it.
        box: what no wire may cross: all of the symbol, the pins on its border.
    """

    kind: str
    name: str
    strokes: tuple[tuple[Point, ...], ...]
    circles: tuple[tuple[Point, float], ...]
    fills: tuple[tuple[Point, ...], ...]
    pins: tuple[tuple[str, Point], ...]
    box: Box


@dataclass(frozen=True)
class Label:
    """Lines of text in a box of their own.

    Attributes:
        align: ``left``, ``right`` or ``centre``.
        size: of the letters.
        bold: whether the first line is.
        muted: whether it is drawn lighter, as node voltages are.
    """

    lines: tuple[str, ...]
    box: Box
    align: str = "left"
    size: float = LETTERS
    bold: bool = False
    muted: bool = False

    def placed(self) -> Iterator[tuple[str, Point, bool]]:
        """Return each line with the point on its base line where it begins, ends or is centred, and whether bold."""
        x = {"left": self.box.left, "right": self.box.right, "centre": 0.5 * (self.box.left + self.box.right)}
        room = 0.5 * (PITCH - ASCENT) * self.size
        for i, line in enumerate(self.lines):
            base = self.box.top - (i + 1) * PITCH * self.size + room
            yield line, (x[self.align], base), self.bold and i == 0


@dataclass(frozen=True)
class Schematic:
    """A drawn schematic; `box` is the rectangle around all of it."""

    symbols: tuple[Symbol, ...]
    wires: tuple[Wire, ...]
    dots: tuple[Point, ...]
    labels: tuple[Label, ...]
    box: Box


def text_width(text: str, size: float, bold: bool = False) -> float:
    """Return how wide a text is [points] in the letters that the PDF has, which are wider than those of most pages."""
    return size * _relative_width(text, bold)


@lru_cache(maxsize=8192)
def _relative_width(text: str, bold: bool) -> float:
    """Return the width of a text over the size of its letters."""
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import text_to_path

    font = FontProperties(family="DejaVu Sans", weight="bold" if bold else "normal", size=1.0)
    width, _, _ = text_to_path.get_text_width_height_descent(text, font, ismath=False)
    return float(width)


def block_size(lines: tuple[str, ...], size: float = LETTERS, bold: bool = False) -> tuple[float, float]:
    """Return width and height [points] of lines of text, the first one perhaps bold."""
    width = max((text_width(line, size, bold and i == 0) for i, line in enumerate(lines)), default=0.0)
    return width, PITCH * size * len(lines)
