"""The wires of a laid-out schematic, from the pins of its elements: straight lines between points of columns.

Pins that face each other in a column are joined, gates of a row are joined by a line, a diode-connected transistor
has a strap from its gate to its drain, and what is left apart of a node meets at its level.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from optisize.show import schematic_symbols as draw
from optisize.show.schematic_layout import Element
from optisize.show.schematic_places import COLUMNS, LEVELS
from optisize.show.schematic_shapes import UNIT
from optisize.stage.assembly import Topology


@dataclass(frozen=True)
class Spot:
    """A point of a column: x from its line, and y, in points."""

    column: str
    x: float
    y: float

    @property
    def order(self) -> tuple[int, float]:
        """Where it stands from left to right."""
        return COLUMNS.index(self.column), self.x


@dataclass(frozen=True)
class Line:
    """A wire between two spots, on one level or in one column."""

    net: str
    a: Spot
    b: Spot


@dataclass(frozen=True)
class Pin:
    """A terminal that a wire comes to: from above (1), from below (-1) or from the side (0)."""

    net: str
    spot: Spot
    way: float
    row: str


@dataclass(frozen=True)
class Joined:
    """A part of a node whose wires hang together, by what can lead to a level.

    Attributes:
        low, high: ends of an upright wire, or the same pin twice.
        gates: the gates of a row instead, from left to right.
    """

    low: Spot | None = None
    high: Spot | None = None
    gates: tuple[Pin, ...] = ()


def levels_of(topology: Topology) -> set[str]:
    """Return the rows of the levels that the nodes of a topology have."""
    return {LEVELS[node].row for node in topology.unknown if node in LEVELS}


def pins_of(found: Iterable[Element], heights: dict[str, float]) -> list[Pin]:
    """Return the pins of elements whose rows have heights."""
    pins = []
    for element in found:
        y = heights[element.place.row]
        mirror, turn = (-1.0 if element.mirrored else 1.0), (1.0 if element.upright else -1.0)
        symbol = element.build(
            lambda dx, dy, m=mirror, t=turn, y=y: (m * dx * UNIT, y + t * dy * UNIT)  # type: ignore[misc]
        )
        for terminal, (x, height) in symbol.pins:
            if terminal != "bulk":
                way = 0.0 if terminal in ("gate", "reference") else 1.0 if height > y else -1.0
                spot = Spot(element.place.column, x, height)
                pins.append(Pin(element.nets[terminal], spot, way, element.place.row))
    return pins


def wires_of(topology: Topology, found: list[Element], heights: dict[str, float], top: float) -> list[Line]:
    """Return the wires between elements, and from them to the rails at the heights 0 and `top`."""
    pins = pins_of(found, heights)
    lines: list[Line] = []
    parts: dict[str, list[Joined]] = {}
    rails = {topology.rail("tail_rail"): 0.0, topology.rail("load_rail"): top}
    for net, low, high in _columns(pins):
        if net in rails:
            lines.append(Line(net, low, Spot(low.column, low.x, rails[net])))
            continue
        parts.setdefault(net, []).append(Joined(low, high))
        if low != high:
            lines.append(Line(net, low, high))
    for gates in _rows_of_gates(pins):
        if gates[0].net not in topology.unknown:
            continue
        straps = list(_straps(gates, pins))
        lines += straps
        if not straps:
            parts.setdefault(gates[0].net, []).append(Joined(gates=gates))
        elif len(gates) > 1:
            lines.append(Line(gates[0].net, gates[0].spot, gates[-1].spot))
    for net, joined in parts.items():
        lines += _meeting(net, joined, heights)
    return lines


def _columns(pins: Iterable[Pin]) -> Iterator[tuple[str, Spot, Spot]]:
    """Return each upright wire between pins that face each other, low end first, and each pin that faces none."""
    by_line: dict[tuple[str, float], list[Pin]] = {}
    for pin in pins:
        if pin.way:
            by_line.setdefault((pin.spot.column, round(pin.spot.x, 3)), []).append(pin)
    for line in by_line.values():
        line.sort(key=lambda p: p.spot.y)
        while line:
            pin = line.pop(0)
            if line and pin.way > 0.0 > line[0].way and line[0].net == pin.net:
                yield pin.net, pin.spot, line.pop(0).spot
            else:
                yield pin.net, pin.spot, pin.spot


def _rows_of_gates(pins: Iterable[Pin]) -> Iterator[tuple[Pin, ...]]:
    """Return the gates of one node in one row, from left to right."""
    rows: dict[tuple[str, str], list[Pin]] = {}
    for pin in pins:
        if not pin.way:
            rows.setdefault((pin.net, pin.row), []).append(pin)
    for gates in rows.values():
        yield tuple(sorted(gates, key=lambda p: p.spot.order))


def _straps(gates: tuple[Pin, ...], pins: list[Pin]) -> Iterator[Line]:
    """Return the straps from gates to the drains of the same transistors, where those are of the same node."""
    for gate in gates:
        for pin in pins:
            own = pin.row == gate.row and pin.spot.column == gate.spot.column and pin.spot.x == 0.0
            if own and pin.way and pin.net == gate.net:
                corner = Spot(gate.spot.column, gate.spot.x, pin.spot.y)
                yield Line(gate.net, gate.spot, corner)
                yield Line(gate.net, corner, pin.spot)


def _meeting(net: str, joined: list[Joined], heights: dict[str, float]) -> Iterator[Line]:
    """Return the wires that bring the parts of a node together, at its level or on a line of gates."""
    rows = [j for j in joined if j.gates]
    if net not in LEVELS and rows:  # what faces a line of gates goes there
        row = rows[0]
        ends = [p.spot for p in row.gates]
        yield Line(net, ends[0], ends[-1])
        for j in joined:
            if j.high is not None:
                yield Line(net, j.high, Spot(j.high.column, j.high.x, ends[0].y))
        return
    if len(joined) == 1:
        return
    level, met = LEVELS[net], []
    y = heights[level.row]
    for j in joined:
        if j.gates:
            spots = sorted([*(p.spot for p in j.gates), Spot(level.column, level.offset * UNIT, j.gates[0].spot.y)],
                           key=lambda s: s.order)  # fmt: skip
            yield Line(net, spots[0], spots[-1])
            start = Spot(level.column, level.offset * UNIT, spots[0].y)
        else:
            assert j.low is not None
            assert j.high is not None
            start = min((j.low, j.high), key=lambda s: abs(s.y - y))
            if j.low.y <= y <= j.high.y:
                met.append(Spot(start.column, start.x, y))
                continue
        met.append(Spot(start.column, start.x, y))
        yield Line(net, start, met[-1])
    met.sort(key=lambda s: s.order)
    yield Line(net, met[0], met[-1])


def port_lines(topology: Topology, pins: Iterable[Pin], heights: dict[str, float]) -> dict[str, Line]:
    """Return a wire from the stage to where each port is, by the node of the port."""
    found = {}
    for pin in pins:
        if not pin.way and pin.net not in topology.unknown:
            side = 1.0 if pin.spot.x > 0.0 else -1.0
            away = 0.6 if pin.net not in ("in+", "in-") else draw.STUB
            found[pin.net] = Line(pin.net, pin.spot, Spot(pin.spot.column, pin.spot.x + side * away * UNIT, pin.spot.y))
    for node, _ in topology.output:
        level = LEVELS[node]
        y = heights[level.row]
        found[node] = Line(node, Spot(level.column, 0.0, y), Spot(level.column, level.port * 3.0 * UNIT, y))
    return found
