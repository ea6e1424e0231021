"""Schematics for the tests: the longest texts that the grid allows, and nets read back from what is drawn."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from itertools import pairwise

from optisize.show.schematic_layout import Texts
from optisize.show.schematic_shapes import Point, Schematic
from optisize.stage.assembly import Topology

NEAR = 1e-3  # points


def texts_of(topology: Topology, size: str = "16 x 99.995 um / 9.995 um", voltage: str = "-999.9 mV") -> Texts:
    """Return a text of the longest kind for every part of a topology."""
    one = len(topology.output) == 1
    outputs = {node: "out" if one else "out+" if sign > 0 else "out-" for node, sign in topology.output}
    ports = {"in+": "in+", "in-": "in-", "supply": "supply", **outputs}
    lines = tuple(size.split("|"))
    return Texts(
        transistors={t.name: (t.name, *(("64 units of",) if t.units else ()), *lines) for t in topology.transistors},
        resistors={r.name: (r.name, "308.385 kohm", "308.385 squares") for r in topology.resistors},
        sources={s.name: (s.size, "343.125 nA") for s in topology.sources},
        controls={c.name: ("ideal", "control") for c in topology.controls},
        ports={
            **{node: f"{name}  {voltage}" for node, name in ports.items()},
            "ground": "ground",
            "reference": f"output common\nmode {voltage}",
        },
        nodes=dict.fromkeys((n for n in topology.unknown if n not in outputs), voltage),
    )


def same(a: Point, b: Point) -> bool:
    """Tell whether two points are one."""
    return abs(a[0] - b[0]) < NEAR and abs(a[1] - b[1]) < NEAR


def on(point: Point, a: Point, b: Point) -> bool:
    """Tell whether a point lies on a straight line between two others that is level or upright."""
    x, y = point
    across = min(a[0], b[0]) - NEAR <= x <= max(a[0], b[0]) + NEAR
    return across and min(a[1], b[1]) - NEAR <= y <= max(a[1], b[1]) + NEAR


def meeting(a: tuple[Point, Point], b: tuple[Point, Point]) -> Point | None:
    """Return where a level and an upright line cross; None where they do not, or lie side by side."""
    if abs(a[0][1] - a[1][1]) > NEAR:
        a, b = b, a
    if abs(a[0][1] - a[1][1]) > NEAR or abs(b[0][0] - b[1][0]) > NEAR:
        return None
    point = (b[0][0], a[0][1])
    return point if on(point, *a) and on(point, *b) else None


def read_back(drawn: Schematic) -> set[frozenset[tuple[str, str, str]]]:
    """Return the nets of a drawn schematic by geometry alone: sets of (kind, name, terminal).

    Wires are one where an end of one lies on the other, or where they cross at a dot. A pin belongs to the wire that it
    lies on, and to other pins at the same point.
    """
    lines = [(w.a, w.b) for w in drawn.wires]
    root = list(range(len(lines)))

    def find(i: int) -> int:
        while root[i] != i:
            i = root[i]
        return i

    for i, first in enumerate(lines):
        for j, second in enumerate(lines[:i]):
            ends = any(on(p, *second) for p in first) or any(on(p, *first) for p in second)
            cross = meeting(first, second)
            if ends or (cross is not None and any(same(cross, dot) for dot in drawn.dots)):
                root[find(i)] = find(j)
    nets: dict[int, set[tuple[str, str, str]]] = {}
    for kind, name, terminal, point in pins(drawn):
        touched = {find(i) for i, line in enumerate(lines) if on(point, *line)}
        if terminal == "bulk":  # it lies on the lead of its own source
            touched = {find(i) for i, line in enumerate(lines) if on(source_of(drawn, name), *line)}
        assert len(touched) == 1, f"{kind} {name} {terminal}: touches {len(touched)} nets"
        nets.setdefault(touched.pop(), set()).add((kind, name, terminal))
    assert len(nets) == len({find(i) for i in range(len(lines))}), "a wire leads nowhere"
    return {frozenset(net) for net in nets.values()}


def pins(drawn: Schematic) -> Iterator[tuple[str, str, str, Point]]:
    """Return kind, name, terminal and place of every pin."""
    for symbol in drawn.symbols:
        for terminal, point in symbol.pins:
            yield symbol.kind, symbol.name, terminal, point


def source_of(drawn: Schematic, name: str) -> Point:
    """Return where the source of a transistor is, when the drawn strap of its bulk leads there."""
    symbol = next(s for s in drawn.symbols if s.kind == "transistor" and s.name == name)
    at = dict(symbol.pins)
    strap = next(line for line in symbol.strokes if same(line[-1], at["bulk"]))
    lead = next(line for line in symbol.strokes if same(line[-1], at["source"]))
    assert any(on(strap[-1], a, b) for a, b in pairwise(lead))
    return at["source"]


def netlist(topology: Topology) -> set[frozenset[tuple[str, str, str]]]:
    """Return the nets of a topology, with its ports, in the same form."""
    by_node: dict[str, set[tuple[str, str, str]]] = {}

    def enter(kind: str, name: str, ends: Iterable[tuple[str, str]]) -> None:
        for terminal, node in ends:
            by_node.setdefault(node, set()).add((kind, name, terminal))

    for t in topology.transistors:
        bulk = topology.bulk_node(t)
        tied = [("bulk", bulk)] if bulk not in ("supply", "ground") else []
        enter("transistor", t.name, [("drain", t.drain), ("gate", t.gate), ("source", t.source), *tied])
    for r in topology.resistors:
        enter("resistor", r.name, [("a", r.a), ("b", r.b)])
    for s in topology.sources:
        enter("source", s.name, [("a", s.a), ("b", s.b)])
    for c in topology.controls:
        senses = [(f"senses {node}", node) for node in c.senses]
        enter("control", c.name, [("node", c.node), ("reference", c.reference), *senses])
    for node in (*topology.driven, *(node for node, _ in topology.output)):
        enter("port", node, [(node, node)])
    return {frozenset(net) for net in by_node.values()}
