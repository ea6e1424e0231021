"""A stage as a schematic: its elements in their places, as near to each other as their labels allow.

The supply is always above: the schematic of a p-channel input is that of an n-channel one upside down, with other
symbols.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from optisize.show import schematic_symbols as draw
from optisize.show.schematic_layout import Element, Texts, elements, label_box, row_heights
from optisize.show.schematic_places import COLUMNS, LEFT
from optisize.show.schematic_shapes import (
    PITCH,
    SMALL,
    TOUCH,
    UNIT,
    Box,
    Label,
    Point,
    Schematic,
    Symbol,
    Wire,
    block_size,
    hull,
)
from optisize.show.schematic_wires import Line, Spot, levels_of, pins_of, port_lines, wires_of
from optisize.stage.assembly import Topology

CLEAR = 1.1 * UNIT  # between what stands in different columns
OVERHANG = 2.2 * UNIT  # of the rails
ALOOF = (1.2 * UNIT, 0.9 * UNIT, 0.6 * UNIT, 0.1 * UNIT)  # of a voltage from the wires of other nodes, the best first
LEAST_HALF = 7.0 * UNIT  # between the pair and its tail


@dataclass(frozen=True)
class _Part:
    """What takes room beside the line of a column: x from that line."""

    column: str
    box: Box


@dataclass(frozen=True)
class _Page:
    """Where columns stand, and which way is up."""

    x: dict[str, float]
    sign: float

    def point(self, spot: Spot) -> Point:
        return self.x[spot.column] + spot.x, self.sign * spot.y

    def box(self, column: str, box: Box) -> Box:
        x, low, high = self.x[column], self.sign * box.bottom, self.sign * box.top
        return Box(x + box.left, min(low, high), x + box.right, max(low, high))

    def at(self, element: Element, y: float) -> draw.At:
        """Return where the points of an element's drawing are on the page."""
        x, mirror = self.x[element.place.column], -1.0 if element.mirrored else 1.0
        turn = 1.0 if element.upright else -1.0
        return lambda dx, dy: (x + mirror * dx * UNIT, self.sign * (y + turn * dy * UNIT))


def schematic(topology: Topology, texts: Texts) -> Schematic:
    """Return the schematic of a stage.

    Args:
        topology: the stage.
        texts: what is written at its parts.
    """
    found = elements(topology, texts)
    heights, top = row_heights(found, levels_of(topology))
    lines = wires_of(topology, found, heights, top)
    ports = port_lines(topology, pins_of(found, heights), heights)
    parts = [*_rooms(found, heights), *_wire_rooms([*lines, *ports.values()]), *_port_rooms(ports, texts)]
    page = _Page(_columns(parts), topology.polarity)
    symbols = [e.build(page.at(e, heights[e.place.row])) for e in found]
    labels = [_label(e, page, heights) for e in found]
    wires = [Wire(line.net, page.point(line.a), page.point(line.b)) for line in (*lines, *ports.values())]
    for node, line in ports.items():
        symbol, label = _port(node, line, page, texts)
        symbols.append(symbol)
        labels.append(label)
    for wire, symbol, label in _rails(topology, wires, page, top, texts):
        wires.append(wire)
        symbols.append(symbol)
        labels.append(label)
    labels += _voltages(texts, wires, symbols, labels)
    boxes = [*(x.box for x in symbols), *(x.box for x in wires), *(x.box for x in labels)]
    return Schematic(tuple(symbols), tuple(wires), tuple(_dots(wires, symbols)), tuple(labels), hull(boxes))


def _rooms(found: Iterable[Element], heights: dict[str, float]) -> Iterator[_Part]:
    """Return the room that each element and its label take."""
    origin = _Page(dict.fromkeys(COLUMNS, 0.0), 1.0)
    for e in found:
        y = heights[e.place.row]
        yield _Part(e.place.column, e.build(origin.at(e, y)).box)
        yield _Part(e.place.column, label_box(e, y))


def _wire_rooms(lines: Iterable[Line]) -> Iterator[_Part]:
    """Return the room that wires within a column take; one between columns has a level for itself."""
    for line in lines:
        if line.a.column == line.b.column:
            low, high = sorted((line.a.y, line.b.y))
            left, right = sorted((line.a.x, line.b.x))
            yield _Part(line.a.column, Box(left, low, right, high))


def _port_rooms(ports: dict[str, Line], texts: Texts) -> Iterator[_Part]:
    """Return the room that ports and what is written there take."""
    for node, line in ports.items():
        box = _port_box(node, line, texts)
        yield _Part(line.a.column, Box(min(box.left, line.a.x), box.bottom, max(box.right, line.a.x), box.top))


def _port_box(node: str, line: Line, texts: Texts) -> Box:
    """Return where a port's text is, x from the line of its column."""
    width, height = block_size(_port_text(texts, node))
    near = line.b.x + (1.0 if line.b.x > 0.0 else -1.0) * 0.95 * UNIT
    left = near if line.b.x > 0.0 else near - width
    return Box(left, line.b.y - 0.5 * height, left + width, line.b.y + 0.5 * height)


def _port_text(texts: Texts, node: str) -> tuple[str, ...]:
    return tuple(texts.ports[node].split("\n"))


def _columns(parts: list[_Part]) -> dict[str, float]:
    """Return where the line of every column that is used stands, as near to the others as what is in it allows."""
    used = [c for c in COLUMNS if any(p.column == c for p in parts)]
    x: dict[str, float] = {}
    for column in used:
        x[column] = max((x[other] + _apart(parts, other, column) for other in x), default=0.0)
        if column == "right":  # the pair stands evenly about its tail
            half = max(x["centre"] - x["left"], x["right"] - x["centre"], 0.5 * (x["right"] - x["left"]), LEAST_HALF)
            x["centre"], x["right"] = x["left"] + half, x["left"] + 2.0 * half
    return x


def _apart(parts: list[_Part], left: str, right: str) -> float:
    """Return how far apart the lines of two columns have to be."""
    there = [p.box for p in parts if p.column == right]
    here = [p.box for p in parts if p.column == left]
    return max(
        (
            a.right - b.left + CLEAR
            for a in here
            for b in there
            if a.bottom < b.top + 0.4 * UNIT and b.bottom < a.top + 0.4 * UNIT
        ),
        default=0.0,
    )


def _label(e: Element, page: _Page, heights: dict[str, float]) -> Label:
    box = page.box(e.place.column, label_box(e, heights[e.place.row]))
    return Label(e.lines, box, "right" if e.place.side == LEFT else "left", bold=True)


def _port(node: str, line: Line, page: _Page, texts: Texts) -> tuple[Symbol, Label]:
    """Return a port at the end of its wire, and what is written there."""
    x, y = page.point(line.b)
    side = 1.0 if line.b.x > 0.0 else -1.0
    symbol = draw.port(node, lambda dx, dy: (x + side * dx * UNIT, y + dy * UNIT))
    box = page.box(line.a.column, _port_box(node, line, texts))
    return symbol, Label(_port_text(texts, node), box, "left" if side > 0.0 else "right")


def _rails(
    topology: Topology, wires: list[Wire], page: _Page, top: float, texts: Texts
) -> Iterator[tuple[Wire, Symbol, Label]]:
    """Return both rails, each with its sign and what is written there at its left end."""
    heights = {topology.rail("tail_rail"): 0.0, topology.rail("load_rail"): page.sign * top}
    left, right = min(page.x.values()) - OVERHANG, max(page.x.values()) + OVERHANG
    for net, sign in (("supply", draw.supply), ("ground", draw.ground)):
        y = heights[net]
        symbol = sign(lambda dx, dy, y=y: (left + dx * UNIT, y + dy * UNIT))  # type: ignore[misc]
        width, height = block_size((texts.ports[net],))
        middle = y + (1.0 if net == "supply" else -1.2) * UNIT
        start = left + 1.7 * UNIT
        box = Box(start, middle - 0.5 * height, start + width, middle + 0.5 * height)
        yield Wire(net, (left, y), (right, y)), symbol, Label((texts.ports[net],), box)


def _dots(wires: list[Wire], symbols: list[Symbol]) -> Iterator[Point]:
    """Return where three wires or more meet; wires that only cross meet nowhere."""
    pins = [where for symbol in symbols for _, where in symbol.pins]
    seen: set[tuple[float, float]] = set()
    for point in [*(end for w in wires for end in (w.a, w.b)), *pins]:
        key = (round(point[0], 3), round(point[1], 3))
        if key in seen:
            continue
        seen.add(key)
        arms = sum(_same(point, pin) for pin in pins)
        for wire in wires:
            if wire.holds(point):
                arms += 1 if _same(point, wire.a) or _same(point, wire.b) else 2
        if arms > 2:
            yield point


def _same(a: Point, b: Point) -> bool:
    return abs(a[0] - b[0]) < TOUCH and abs(a[1] - b[1]) < TOUCH


def _voltages(texts: Texts, wires: list[Wire], symbols: list[Symbol], labels: list[Label]) -> list[Label]:
    """Return the voltage of each node beside one of its wires, where there is room for it."""
    placed: list[Label] = []
    taken = [*(x.box for x in labels), *(x.box for x in symbols)]
    for net, text in texts.nodes.items():
        width = block_size((text,), SMALL)[0]
        own, others = [w for w in wires if w.net == net], [w.box for w in wires if w.net != net]
        box = _free(list(_beside(own, width, PITCH * SMALL)), taken, [w.box for w in own], others)
        if box is not None:
            placed.append(Label((text,), box, "centre", SMALL, muted=True))
            taken.append(box)
    return placed


def _free(boxes: list[Box], taken: list[Box], own: list[Box], others: list[Box]) -> Box | None:
    """Return the first box in nobody's way; one that stands off from the wires of other nodes, if there is any."""
    for away in ALOOF:
        for box in boxes:
            near = [(taken, 0.2 * UNIT), (own, 0.1 * UNIT), (others, away)]
            if not any(box.overlaps(x, gap) for there, gap in near for x in there):
                return box
    return None


def _beside(wires: list[Wire], width: float, height: float) -> Iterator[Box]:
    """Return where a text could stand beside wires: over and under level ones first, then beside upright ones."""
    near = 0.45 * UNIT
    level = [w for w in wires if w.a[1] == w.b[1]]
    for share in (0.5, 0.25, 0.75, 0.1, 0.9):
        for w in sorted(level, key=lambda w: w.box.left - w.box.right):
            x = w.box.left + share * (w.box.right - w.box.left) - 0.5 * width
            for low in (w.a[1] + near, w.a[1] - near - height):
                yield Box(x, low, x + width, low + height)
    for share in (0.5, 0.3, 0.7, 0.2, 0.8, 0.1, 0.9):
        for w in wires:
            if w not in level:
                y = w.box.bottom + share * (w.box.top - w.box.bottom) - 0.5 * height
                for left in (w.a[0] + near, w.a[0] - near - width):
                    yield Box(left, y, left + width, y + height)
