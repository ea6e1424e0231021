"""The card of one sizing, printed and as plain data: sizes as they are drawn, operating point, limits, measures."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from optisize.front.card import Card
from optisize.front.details import Resistors, Transistors
from optisize.problem.own_measures import label
from optisize.quantities import write
from optisize.show.terminal import json_number, print_table

# Columns of the operating point: the figure's name in `Details`, its heading, its unit.
_POINT = (
    ("id", "id", "A"), ("vgs", "vgs", "V"), ("vds", "vds", "V"), ("vdsat", "vdsat", "V"),
    ("margin", "vds-vdsat", "V"), ("gm", "gm", "S"), ("gm_per_id", "gm/id", "1/V"), ("gds", "gds", "S"),
    ("inversion", "inversion", ""),
)  # fmt: skip
_DRAWN = 7  # digits of a drawn length: all that a grid has
_CHANNELS = {"n": "nmos", "p": "pmos"}


def print_card(card: Card, simulated: Mapping[str, float] | None = None) -> None:
    """Print one sizing: how it is drawn, its operating point, its measures against limits.

    Args:
        card: of the sizing.
        simulated: what the circuit simulator said of measures, by name, where there is such a thing.
    """
    print_drawn(card)
    print_operating_point(card)
    print_limits(card)
    print_measures(card, simulated or {})


def print_drawn(card: Card) -> None:
    """Print every device as it is drawn, and the currents that are set."""
    rows = []
    for d in drawn_record(card):
        each = ["", ""] if d["kind"] == "current" else [str(d["units"]), _shape(d)]
        rows.append([d["devices"], d["kind"], *each, write(d["total"], d["unit"], _DRAWN)])
    print_table("sizes, as drawn on the process grid", ["device", "kind", "units", "each unit", "in all"], rows, left=2)


def _shape(d: Mapping[str, Any]) -> str:
    length = write(d["length"], "m", _DRAWN)
    if d["kind"] == "resistor":
        return f"{d['squares']:.6g} squares, {write(d['width'], 'm', _DRAWN)} wide and {length} long"
    fingers = "1 finger" if d["fingers"] == 1 else f"{d['fingers']} fingers"
    return f"{fingers} of {write(d['finger_width'], 'm', _DRAWN)} / {length}"


def drawn_record(card: Card) -> list[dict[str, Any]]:
    """Return the devices as they are drawn, equal ones together, and the currents that are set, in SI units."""
    rows = _transistor_rows(card.details.transistors) + _resistor_rows(card.details.resistors)
    currents = [s for s in card.problem.topology.sizes if s.kind == "current"]
    rows += [{"devices": s.name, "kind": "current", "total": card.sizes[s.name], "unit": "A"} for s in currents]
    return rows


def _transistor_rows(t: Transistors) -> list[dict[str, Any]]:
    alike: dict[tuple[str, str, int, int, float, float], list[str]] = {}
    for i, name in enumerate(t.names):
        units, fingers = round(float(t.units[i, 0])), round(float(t.fingers[i, 0]))
        width, length = float(t.finger_width[i, 0]), float(t.length[i, 0])
        alike.setdefault((t.groups[i], _CHANNELS[t.channels[i]], units, fingers, width, length), []).append(name)
    return [
        {
            "devices": ", ".join(names), "kind": kind, "units": units, "fingers": fingers, "finger_width": width,
            "length": length, "total": units * fingers * width, "unit": "m",
        }
        for (_, kind, units, fingers, width, length), names in alike.items()
    ]  # fmt: skip


def _resistor_rows(r: Resistors) -> list[dict[str, Any]]:
    alike: dict[tuple[float, float, float], list[str]] = {}
    for i, name in enumerate(r.names):
        key = (float(r.resistance[i, 0]), float(r.squares[i, 0]), float(r.length[i, 0]))
        alike.setdefault(key, []).append(name)
    return [
        {
            "devices": ", ".join(names), "kind": "resistor", "units": 1, "squares": squares, "width": r.width,
            "length": length, "total": resistance, "unit": "ohm",
        }
        for (resistance, squares, length), names in alike.items()
    ]  # fmt: skip


def print_operating_point(card: Card) -> None:
    """Print where each transistor works; one that need not be saturated has no margin."""
    rows = []
    for point in point_record(card):
        cells = [write(point[key], unit, 3) for key, _, unit in _POINT]
        if not point["saturates"]:
            cells[[key for key, _, _ in _POINT].index("margin")] = "-"
        rows.append([point["transistor"], *cells])
    print_table("\noperating point", ["transistor", *(heading for _, heading, _ in _POINT)], rows)


def point_record(card: Card) -> list[dict[str, Any]]:
    """Return the figures of each transistor in SI units."""
    t = card.details.transistors
    return [
        {"transistor": name, "saturates": t.saturates[i], **{key: float(t.figures[key][i, 0]) for key, _, _ in _POINT}}
        for i, name in enumerate(t.names)
    ]


def print_limits(card: Card) -> None:
    """Print every bound, what the sizing has, and whether it is met."""
    rows = [
        [
            x["name"],
            f"{x['kind']} {write(x['bound'], x['unit'])}{' (implied)' if x['implied'] else ''}",
            write(x["value"], x["unit"]),
            _left(x),
            "met" if x["met"] else "MISSED",
        ]
        for x in card.limits
    ]
    print_table("\nlimits", ["limit", "bound", "value", "left", ""], rows)


def _left(x: Mapping[str, Any]) -> str:
    """Return how far a value is inside of its bound, negative where it is beyond."""
    value = abs(x["value"]) if x["bound"] >= 0.0 else x["value"]
    left = value - x["bound"] if x["kind"] == "min" else x["bound"] - value
    if not np.isfinite(left):
        return "-"
    share = f" ({100.0 * left / abs(x['bound']):.3g} %)" if x["bound"] and x["unit"] != "dB" else ""
    return f"{write(float(left), x['unit'], 3)}{share}"


def print_measures(card: Card, simulated: Mapping[str, float]) -> None:
    """Print the measures, as predicted and, where there is such a thing, as simulated."""
    rows = []
    for name, value in card.measures.items():
        if "." not in name or name in card.problem.needed:
            m = card.problem.find(name)
            more = [write(simulated[name], m.unit) if name in simulated else ""] if simulated else []
            rows.append([label(m), write(value, m.unit), *more])
    print_table("\nmeasures", ["measure", "value", *(["simulated"] if simulated else [])], rows)


def card_record(card: Card) -> dict[str, Any]:
    """Return the card as plain data in SI units."""
    return {
        "sizes": card.sizes,
        "drawn": drawn_record(card),
        "operating_point": [
            {k: json_number(v) if isinstance(v, float) else v for k, v in p.items()} for p in point_record(card)
        ],
        "measures": {name: json_number(value) for name, value in card.measures.items() if "." not in name},
        "limits": [{**row, "value": json_number(row["value"])} for row in card.limits],
        "feasible": card.feasible,
    }
