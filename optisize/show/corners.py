"""A design at the corners of its process, in the terminal."""

from __future__ import annotations

from typing import Any

import numpy as np

from optisize.front.corners import Corners
from optisize.quantities import ZERO_CELSIUS, write
from optisize.show.terminal import console, json_number, print_caution, print_table


def _heading(corner: str, kelvin: float) -> str:
    return f"{corner} {kelvin - ZERO_CELSIUS:.4g} degC"


def print_corners(found: Corners, label: str) -> None:
    """Print every measure at every corner, whether every limit is met first; a figure that misses one is marked."""
    headings = ["measure", *(_heading(*column) for column in found.conditions)]
    rows = [["limits", *("met" if met else "MISSED" for met in found.limits_met)]]
    for name, values in found.measures.items():
        unit = found.problem.find(name).unit
        missed = np.zeros(len(values), dtype=bool)
        for limit in found.problem.limits:
            if limit.measure.name == name:
                missed |= ~limit.met(values)
        marks = ["! " if miss else "" for miss in missed]
        rows.append([name, *(mark + write(float(value), unit) for mark, value in zip(marks, values, strict=True))])
    print_table(f"{found.problem.title}: {label} at the corners of {found.problem.process_name}", headings, rows)
    if not all(found.limits_met):
        console().print("!: misses its limit there")
    print_caution()


def corners_record(found: Corners) -> list[dict[str, Any]]:
    """Return the corners as plain data."""
    return [
        {
            "corner": corner,
            "temperature": kelvin,
            "limits_met": found.limits_met[k],
            "measures": {name: json_number(float(values[k])) for name, values in found.measures.items()},
        }
        for k, (corner, kelvin) in enumerate(found.conditions)
    ]
