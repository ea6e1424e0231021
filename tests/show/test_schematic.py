"""Schematics of every kind of stage: they say what the topology says, and nothing on them is in the way of another."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from itertools import combinations, pairwise

import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from optisize.show import schematic_places as places
from optisize.show.schematic import schematic
from optisize.show.schematic_shapes import UNIT, Box, Schematic
from optisize.show.sheet_setting import write
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind
from tests.show.schematics import meeting, netlist, on, pins, read_back, same, texts_of

BOTH = [
    Kind(k.input, k.load, k.tail, k.output, "source", k.form, True)
    for k in EVERY_KIND
    if k.tail in ("ideal", "cascode") and k.input == "pmos"
]
KINDS = [*EVERY_KIND, *SOURCE_TIED, *DEGENERATED, *BOTH]
NARROW, WIDE = "16 x 99.995 um|/ 9.995 um", "116 x 100.995 um / 119.995 um"
FINE = 6  # dots of a point
every_kind = pytest.mark.parametrize("kind", KINDS, ids=str)


def ink(drawn: Schematic) -> Iterator[Box]:
    """Return a box around every line, circle and filled polygon of the symbols."""
    for symbol in drawn.symbols:
        shapes = [*symbol.fills, *(pair for line in symbol.strokes for pair in pairwise(line))]
        shapes += [((x - r, y - r), (x + r, y + r)) for (x, y), r in symbol.circles]
        for shape in shapes:
            across, up = [x for x, _ in shape], [y for _, y in shape]
            yield Box(min(across), min(up), max(across), max(up))


def shown(kind: Kind, size: str = WIDE) -> Schematic:
    return schematic(kind.topology, texts_of(kind.topology, size))


@every_kind
def test_what_is_drawn_is_the_netlist_of_the_stage(kind: Kind) -> None:
    """Nets are read back from where drawn lines and pins touch."""
    assert read_back(shown(kind)) == netlist(kind.topology)


def test_reading_back_sees_a_wire_that_is_wrong() -> None:
    """The check above is worth something: a wire too short, a dot too many, a dot too few are all found."""
    kind = Kind("nmos", "mirror", "cascode", form="telescopic")
    drawn, right = shown(kind), netlist(kind.topology)
    crossing = next(
        p
        for a, b in combinations(drawn.wires, 2)
        if (p := meeting((a.a, a.b), (b.a, b.b))) and not any(on(p, e, e) for w in (a, b) for e in (w.a, w.b))
    )
    assert read_back(replace(drawn, dots=(*drawn.dots, crossing))) != right
    for i in range(len(drawn.wires)):
        rest = (*drawn.wires[:i], *drawn.wires[i + 1 :])
        with pytest.raises(AssertionError):
            assert read_back(replace(drawn, wires=rest)) == right


@every_kind
def test_a_dot_stands_where_three_wires_meet_and_nowhere_else(kind: Kind) -> None:
    drawn = shown(kind)
    leads = [point for *_, terminal, point in pins(drawn) if terminal != "bulk"]
    ends = [*(e for w in drawn.wires for e in (w.a, w.b)), *leads]
    for point in ends:
        arms = sum(same(point, lead) for lead in leads)
        arms += sum(1 if same(point, w.a) or same(point, w.b) else 2 for w in drawn.wires if on(point, w.a, w.b))
        dotted = sum(same(point, dot) for dot in drawn.dots)
        assert dotted == (arms > 2), point
    for dot in drawn.dots:
        assert any(same(dot, end) for end in ends)


@every_kind
def test_labels_are_in_the_way_of_nothing_and_wires_cross_no_symbol(kind: Kind) -> None:
    for size in (NARROW, WIDE):
        drawn = shown(kind, size)
        wires, symbols = [w.box for w in drawn.wires], [s.box for s in drawn.symbols]
        labels, lines = [label.box for label in drawn.labels], list(ink(drawn))
        for label in labels:
            assert sum(label.overlaps(x) for x in labels) == 1  # itself
            assert not any(label.overlaps(x) for x in (*wires, *lines))
        for symbol in symbols:
            inside = Box(symbol.left + 0.01, symbol.bottom + 0.01, symbol.right - 0.01, symbol.top - 0.01)
            assert not any(inside.overlaps(wire) for wire in wires)
            assert sum(inside.overlaps(x) for x in symbols) == 1


@every_kind
def test_every_text_is_drawn_within_its_box_and_the_page(kind: Kind) -> None:
    """Extents are measured by matplotlib as it draws."""
    drawn = shown(kind)
    box = drawn.box
    figure = Figure(figsize=((box.right - box.left) / 72.0, (box.top - box.bottom) / 72.0), dpi=72 * FINE)
    renderer = FigureCanvasAgg(figure).get_renderer()
    spot = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    spot.set_xlim(box.left, box.right)
    spot.set_ylim(box.bottom, box.top)
    boxes = []
    for label in drawn.labels:
        for text, (x, y), bold in label.placed():
            align = {"centre": "center"}.get(label.align, label.align)
            write(spot, x, y, text, label.size, align, bold=bold)
            boxes.append(label.box)
    slack = 4.0 / FINE  # points: letters on pixels are wider than those of the PDF, by a dot or two
    for text, own in zip(spot.texts, boxes, strict=True):
        extent = text.get_window_extent(renderer).transformed(spot.transData.inverted())
        assert own.left - slack <= extent.x0 < extent.x1 <= own.right + slack
        assert own.bottom - slack <= extent.y0 < extent.y1 <= own.top + slack
        assert box.left <= own.left < own.right <= box.right
        assert box.bottom <= own.bottom < own.top <= box.top


@every_kind
def test_symbols_say_channel_and_current(kind: Kind) -> None:
    """Currents flow down the page; arrows show it at sources and in current sources; p-channel gates have a bubble."""
    drawn, topology = shown(kind), kind.topology
    channels = {t.name: topology.channel(t) for t in topology.transistors}
    for symbol in drawn.symbols:
        at = dict(symbol.pins)
        if symbol.kind == "transistor":
            channel = channels[symbol.name]
            assert len(symbol.circles) == (channel == "p")
            upper = at["source"] if channel == "p" else at["drain"]
            assert upper[1] == max(y for _, y in at.values())
            (tip, *base) = symbol.fills[0]
            towards_lead = abs(tip[0] - at["source"][0]) < abs(base[0][0] - at["source"][0])
            assert towards_lead == (channel == "n")
            assert abs(tip[1] - at["source"][1]) < abs(tip[1] - at["drain"][1])
        if symbol.kind == "source":
            (tip, *base) = symbol.fills[0]
            assert tip[1] < base[0][1]
        if symbol.kind == "port" and symbol.name in ("supply", "ground"):
            ends = [y for w in drawn.wires for _, y in (w.a, w.b)]
            assert at[symbol.name][1] == (max(ends) if symbol.name == "supply" else min(ends))


@every_kind
def test_the_pair_stands_evenly_about_its_tail(kind: Kind) -> None:
    drawn = shown(kind)
    x = {(s.kind, s.name): dict(s.pins) for s in drawn.symbols}
    left, right = x["transistor", "input.p"]["drain"], x["transistor", "input.n"]["drain"]
    assert left[1] == right[1]
    tail = next(pins for (kind, name), pins in x.items() if name == "tail" and kind != "port")
    middle = next(iter(tail.values()))[0] if "drain" not in tail else tail["drain"][0]
    assert middle == pytest.approx(0.5 * (left[0] + right[0]))
    assert x["transistor", "input.p"]["gate"][0] < left[0] - UNIT
    assert x["transistor", "input.n"]["gate"][0] > right[0] + UNIT


@every_kind
def test_every_node_has_its_voltage(kind: Kind) -> None:
    drawn, texts = shown(kind), texts_of(kind.topology)
    muted = [label.lines for label in drawn.labels if label.muted]
    assert muted == [(text,) for text in texts.nodes.values()]


@every_kind
def test_the_same_stage_upside_down_is_the_same_picture(kind: Kind) -> None:
    """A p-channel input mirrors the wires of an n-channel one."""
    other = replace(kind, input="nmos" if kind.input == "pmos" else "pmos")
    here, there = (
        {(*sorted([(round(w.a[0], 3), sign * round(w.a[1], 3)), (round(w.b[0], 3), sign * round(w.b[1], 3))]),)
         for w in shown(k).wires}
        for k, sign in ((kind, 1.0), (other, -1.0))
    )  # fmt: skip
    assert here == there


def test_every_place_is_in_a_row_and_a_column() -> None:
    every = [*places.TRANSISTORS.values(), *places.RESISTORS.values(), *places.SOURCES.values()]
    for place in (*every, *places.CONTROLS.values()):
        assert place.column in places.COLUMNS
        assert place.row in places.ROWS
    assert {level.row for level in places.LEVELS.values()} <= set(places.ROWS)
