"""The symbols of a schematic, drawn in plain lines on a grid of their own.

Each is drawn once: a transistor with its gate to the left and its source below, everything else with its first end
above. `at` puts a point of that drawing onto the page, where it may be mirrored and turned upside down.
"""

from __future__ import annotations

from collections.abc import Callable

from optisize.show.schematic_shapes import UNIT, Box, Point, Symbol
from optisize.stage.elements import Channel

At = Callable[[float, float], Point]  # from units of the drawing to points on the page

REACH = 2.0  # units from the middle of an element to its upper and lower pin
GATE = 2.5  # units from the line through drain and source to the gate's pin
STUB = 1.5  # units of wire between a gate and its port
SENSE = 1.2  # units from the middle of a control to what it senses
SIDE = 3.0  # units from the middle of a control to its reference
_LEAD, _CHANNEL, _PLATE, _BUBBLE = 0.8, 0.95, 1.4, 0.3
_ARROW = ((0.62, 0.0), (0.0, 0.3), (0.0, -0.3))


def _box(at: At, left: float, low: float, right: float, high: float) -> Box:
    (x1, y1), (x2, y2) = at(left, low), at(right, high)
    return Box(min(x1, x2), min(y1, y2), max(x1, x2), max(y1, y2))


def _lines(at: At, *lines: tuple[Point, ...]) -> tuple[tuple[Point, ...], ...]:
    return tuple(tuple(at(x, y) for x, y in line) for line in lines)


def transistor(name: str, at: At, channel: Channel, tied: bool) -> Symbol:
    """Return a transistor: an arrow at its source, along the current; a bubble at the gate of a p-channel one.

    Args:
        name: its own.
        at: where it stands.
        channel: ``n`` or ``p``.
        tied: whether its bulk is drawn, tied to its source.
    """
    plate = -_PLATE if channel == "n" else -_PLATE - 2.0 * _BUBBLE
    lines: list[tuple[Point, ...]] = [
        ((-_CHANNEL, 1.25), (-_CHANNEL, -1.25)),
        ((-_PLATE, 0.95), (-_PLATE, -0.95)),
        ((-_CHANNEL, _LEAD), (0.0, _LEAD), (0.0, REACH)),
        ((-_CHANNEL, -_LEAD), (0.0, -_LEAD), (0.0, -REACH)),
        ((plate, 0.0), (-GATE, 0.0)),
    ]
    pins = [("drain", (0.0, REACH)), ("gate", (-GATE, 0.0)), ("source", (0.0, -REACH))]
    if tied:
        lines.append(((-_CHANNEL, 0.0), (0.0, 0.0), (0.0, -_LEAD)))
        pins.append(("bulk", (0.0, -_LEAD)))
    tip = (-0.1, 1.0) if channel == "n" else (-_CHANNEL + 0.1, -1.0)
    arrow = tuple(at(tip[0] - tip[1] * (0.62 - x), -_LEAD + y) for x, y in _ARROW)
    return Symbol(
        "transistor",
        name,
        _lines(at, *lines),
        ((at(-_PLATE - _BUBBLE, 0.0), _BUBBLE * UNIT),) if channel == "p" else (),
        (arrow,),
        tuple((terminal, at(*where)) for terminal, where in pins),
        _box(at, -GATE, -REACH, 0.0, REACH),
    )


def resistor(name: str, at: At, ends: tuple[str, str]) -> Symbol:
    """Return a resistor; `ends` are its terminals, the upper one first."""
    body, half, teeth = 1.3, 0.55, 6
    step = 2.0 * body / teeth
    zigzag = [(half * (1 if i % 2 == 0 else -1), body - (i + 0.5) * step) for i in range(teeth)]
    line = ((0.0, REACH), (0.0, body), *zigzag, (0.0, -body), (0.0, -REACH))
    pins = ((ends[0], at(0.0, REACH)), (ends[1], at(0.0, -REACH)))
    return Symbol("resistor", name, _lines(at, line), (), (), pins, _box(at, -half, -REACH, half, REACH))


def source(name: str, at: At, ends: tuple[str, str], downward: bool) -> Symbol:
    """Return a current source; `ends` are its terminals, the upper one first.

    Args:
        name: its own.
        at: where it stands.
        ends: its terminals.
        downward: whether the current flows from the first of them to the second.
    """
    radius, sign = 1.2, -1.0 if downward else 1.0
    lines = (
        ((0.0, REACH), (0.0, radius)),
        ((0.0, -radius), (0.0, -REACH)),
        ((0.0, -0.75 * sign), (0.0, 0.3 * sign)),
    )
    arrow = tuple(at(y, sign * (0.2 + x)) for x, y in _ARROW)
    pins = ((ends[0], at(0.0, REACH)), (ends[1], at(0.0, -REACH)))
    circle = (at(0.0, 0.0), radius * UNIT)
    return Symbol("source", name, _lines(at, *lines), (circle,), (arrow,), pins, _box(at, -1.2, -REACH, 1.2, REACH))


def control(name: str, at: At, senses: tuple[str, str]) -> Symbol:
    """Return an ideal amplifier that sets the node above it by the mean of what it senses less a reference.

    Args:
        name: its own.
        at: where it stands.
        senses: the terminals of what it senses, from left to right.
    """
    tip, base, half = 1.5, -1.3, 1.9
    side = half * tip / (tip - base)  # of its right edge, at the height of the reference
    lines = (
        ((-half, base), (half, base), (0.0, tip), (-half, base)),
        ((0.0, tip), (0.0, REACH)),
        *(((sign * SENSE, base), (sign * SENSE, -REACH)) for sign in (-1.0, 1.0)),
        ((side, 0.0), (SIDE, 0.0)),
        *(((sign * SENSE * 0.75 - 0.25, -0.9), (sign * SENSE * 0.75 + 0.25, -0.9)) for sign in (-1.0, 1.0)),
        *(((sign * SENSE * 0.75, -1.15), (sign * SENSE * 0.75, -0.65)) for sign in (-1.0, 1.0)),
        ((side - 0.75, -0.05), (side - 0.3, -0.05)),
    )
    pins = (
        ("node", at(0.0, REACH)),
        (senses[0], at(-SENSE, -REACH)),
        (senses[1], at(SENSE, -REACH)),
        ("reference", at(SIDE, 0.0)),
    )
    return Symbol("control", name, _lines(at, *lines), (), (), pins, _box(at, -half, -REACH, SIDE, REACH))


def port(name: str, at: At) -> Symbol:
    """Return the end of a wire that leaves the stage, which comes from the left."""
    circle = (at(0.3, 0.0), 0.3 * UNIT)
    return Symbol("port", name, (), (circle,), (), ((name, at(0.0, 0.0)),), _box(at, 0.0, -0.3, 0.6, 0.3))


def supply(at: At) -> Symbol:
    """Return the sign of the supply over its rail."""
    lines = _lines(at, ((0.0, 0.0), (0.0, 1.0)), ((-1.0, 1.0), (1.0, 1.0)))
    return Symbol("port", "supply", lines, (), (), (("supply", at(0.0, 0.0)),), _box(at, -1.0, 0.0, 1.0, 1.0))


def ground(at: At) -> Symbol:
    """Return the sign of the ground under its rail."""
    bars = tuple(((-half, y), (half, y)) for half, y in ((1.1, -0.9), (0.7, -1.3), (0.3, -1.7)))
    lines = _lines(at, ((0.0, 0.0), (0.0, -0.9)), *bars)
    return Symbol("port", "ground", lines, (), (), (("ground", at(0.0, 0.0)),), _box(at, -1.1, -1.7, 1.1, 0.0))
