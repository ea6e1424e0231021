"""From a topology to a laid-out schematic that knows columns, but not yet how far apart they have to be.

Everything here is upright for an input of n-channel transistors, with y in points over the tail's rail and x in points
from the line of a column. Rows are as high as the labels in them need.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from optisize.show import schematic_symbols as draw
from optisize.show.schematic_places import (
    CONTROLS,
    RESISTORS,
    RIGHT,
    ROWS,
    SOURCES,
    TRANSISTORS,
    Place,
)
from optisize.show.schematic_shapes import LETTERS, PITCH, UNIT, Box, Symbol, block_size
from optisize.stage.assembly import Topology
from optisize.stage.elements import CurrentSource, Resistor, Transistor

ROW_GAP = 0.8 * UNIT
LEVEL = 0.95 * UNIT  # half of the height of a level of wires
Lines = tuple[str, ...]


@dataclass(frozen=True)
class Texts:
    """What is written at the parts of a schematic.

    Attributes:
        transistors, resistors, sources, controls: the lines at each element by its name, its name first.
        ports: what is written at in+, in-, each output node, the reference, the supply and the ground.
        nodes: voltages at rest of nodes that have no port.
    """

    transistors: Mapping[str, Lines]
    resistors: Mapping[str, Lines]
    sources: Mapping[str, Lines]
    controls: Mapping[str, Lines]
    ports: Mapping[str, str]
    nodes: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Element:
    """An element with its place: how it is drawn at a point, what is written beside it, where its terminals go.

    Attributes:
        build: from the drawing's point to the page's to the symbol.
        mirrored: whether it is drawn with its gate to the right.
        upright: whether the first end of its drawing is above, the source of a transistor below.
        nets: the node of each of its terminals.
    """

    place: Place
    build: Callable[[draw.At], Symbol]
    mirrored: bool
    upright: bool
    nets: Mapping[str, str]
    lines: Lines
    bare: float  # units from its line to its label


def elements(topology: Topology, texts: Texts) -> list[Element]:
    """Return every element of a topology with its place.

    Raises KeyError for an element that has no place: a test asks for every kind of stage.
    """
    found = [_transistor(topology, t, texts.transistors[t.name]) for t in topology.transistors]
    found += [_resistor(topology, r, texts.resistors[r.name]) for r in topology.resistors]
    found += [_source(topology, s, texts.sources[s.name]) for s in topology.sources]
    for c in topology.controls:
        ends = (f"senses {c.senses[0]}", f"senses {c.senses[1]}")
        nets = {"node": c.node, "reference": c.reference, **dict(zip(ends, c.senses, strict=True))}

        def build(at: draw.At, name: str = c.name, ends: tuple[str, str] = ends) -> Symbol:
            return draw.control(name, at, ends)

        found.append(Element(CONTROLS[c.name], build, False, True, nets, texts.controls[c.name], 2.4))
    return found


def _transistor(topology: Topology, t: Transistor, lines: Lines) -> Element:
    place, channel, bulk = TRANSISTORS[t.name], topology.channel(t), topology.bulk_node(t)
    tied = bulk == t.source and bulk not in ("supply", "ground")
    nets = {"drain": t.drain, "gate": t.gate, "source": t.source} | ({"bulk": bulk} if tied else {})
    return Element(
        place,
        lambda at: draw.transistor(t.name, at, channel, tied),
        place.gate == RIGHT,
        t.channel == "input",
        nets,
        lines,
        2.0 if place.under_gate else 0.8,
    )


def _ends(topology: Topology, a: str, b: str) -> tuple[str, str]:
    """Return the terminals of an element with two ends, the upper one first: the first end, unless rails say else."""
    return ("b", "a") if topology.rail("load_rail") == b or topology.rail("tail_rail") == a else ("a", "b")


def _resistor(topology: Topology, r: Resistor, lines: Lines) -> Element:
    ends, nets = _ends(topology, r.a, r.b), {"a": r.a, "b": r.b}
    return Element(RESISTORS[r.name], lambda at: draw.resistor(r.name, at, ends), False, True, nets, lines, 1.2)


def _source(topology: Topology, s: CurrentSource, lines: Lines) -> Element:
    ends, nets = _ends(topology, s.a, s.b), {"a": s.a, "b": s.b}
    downward = (ends[0] == "a") == (topology.polarity > 0.0)
    return Element(
        SOURCES[s.name], lambda at: draw.source(s.name, at, ends, downward), False, True, nets, lines, 1.8
    )  # fmt: skip


def label_box(element: Element, y: float) -> Box:
    """Return where the label of an element is, x from the line of its column, its row at a height y."""
    width, height = block_size(element.lines, bold=True)
    near, side = element.bare * UNIT, element.place.side
    top = y - 1.15 * UNIT if element.place.under_gate else y + 0.5 * height
    return Box(near, top - height, near + width, top) if side == RIGHT else Box(-near - width, top - height, -near, top)


def row_heights(found: list[Element], levels: set[str]) -> tuple[dict[str, float], float]:
    """Return the height of the middle of every row that is needed, and that of the load's rail.

    Args:
        found: the elements.
        levels: the levels that wires need.
    """
    heights: dict[str, float] = {}
    y = 1.2 * UNIT
    for row in ROWS:
        here = [e for e in found if e.place.row == row]
        if not here and row not in levels:
            continue
        below = above = LEVEL
        if row == "at output":
            below = above = max(LEVEL, 0.5 * PITCH * LETTERS)
        if here:
            boxes = [label_box(e, 0.0) for e in here]
            below = max(draw.REACH * UNIT, *(-b.bottom for b in boxes))
            above = max(draw.REACH * UNIT, *(b.top for b in boxes))
        heights[row] = y + below
        y += below + above + ROW_GAP
    return heights, y - ROW_GAP + 1.2 * UNIT
