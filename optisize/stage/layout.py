"""What a sizing means in drawn shapes: fingers, junctions, area.

An estimate, not a layout: fingers share their diffusions, resistors have their matched width, units of a mirror are
drawn alike, and a spacing factor stands for wells, guards and wiring. Common practice, no source.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from optisize.process.card import Grid, ResistorParameters
from optisize.process.law import Array


def steps(length: Array, step: float) -> Array:
    """Return a drawn length as a whole number of grid steps."""
    return np.rint(np.asarray(length) / step)


def on_grid(count: Array, step: float) -> Array:
    """Return whole grid steps as a length [m]; dividing by a whole number keeps decimal lengths exact (0.18 um)."""
    per_metre = 1.0 / step
    whole = np.rint(per_metre)
    return count / whole if abs(per_metre - whole) < 1e-6 * per_metre else count * step


def finger_count(width: Array, grid: Grid, even: bool | Array) -> Array:
    """Return how many fingers a width is drawn with: as few as the widest finger allows, even where asked.

    Args:
        width: channel width [m], any shape.
        grid: the process grid.
        even: whether the number has to be even, so that a pair can be drawn cross-coupled; broadcasts with the width.
    """
    widest = steps(np.array(grid.maximum_finger), grid.step)
    fingers = np.maximum(np.ceil(steps(width, grid.step) / widest), 1.0)
    return fingers + even * np.mod(fingers, 2.0)


def snap_width(width: Array, grid: Grid, even: bool) -> Array:
    """Return the nearest width that whole fingers of a whole number of grid steps can have.

    Snapping a snapped width changes nothing: a second pass settles widths that rounding moved to where fewer fingers
    would do.
    """
    narrowest = np.ceil(grid.minimum_width / grid.step - 1e-9)
    for _ in range(2):
        fingers = finger_count(width, grid, even)
        finger_steps = np.maximum(np.rint(steps(width, grid.step) / fingers), narrowest)
        width = on_grid(fingers * finger_steps, grid.step)
    return width


def snap_length(length: Array, grid: Grid) -> Array:
    """Return the nearest channel length on the grid."""
    shortest = np.ceil(grid.minimum_length / grid.step - 1e-9)
    return on_grid(np.maximum(steps(length, grid.step), shortest), grid.step)


def snap_resistance(resistance: Array, resistor: ResistorParameters, grid: Grid) -> Array:
    """Return the nearest resistance whose length is on the grid, at the matched width."""
    per_step = resistor.sheet_resistance * grid.step / resistor.width
    return np.round(np.maximum(np.rint(resistance / per_step), 1.0) * per_step, 6)


@dataclass(frozen=True)
class Drawn:
    """The drawn shape of transistors, each array (T, N).

    Attributes:
        fingers: fingers of one unit.
        finger_width: width of one finger [m].
        drain_area, source_area: junction areas of all units [m^2].
        drain_edge, source_edge: junction perimeters without the gate edge [m].
        area: area of the devices [m^2], without spacing.
    """

    fingers: Array
    finger_width: Array
    drain_area: Array
    source_area: Array
    drain_edge: Array
    source_edge: Array
    area: Array


def draw_transistors(width: Array, length: Array, units: Array, even: Array, grid: Grid) -> Drawn:
    """Return the shapes of transistors.

    Drains and sources alternate between the fingers, a source at both ends where the number of fingers is even.

    Args:
        width: channel width of one unit [m], (T, N).
        length: channel length [m], (T, N).
        units: number of units, (T, N).
        even: whether the number of fingers is even, (T, 1) of bool.
        grid: the process grid.
    """
    fingers = finger_count(width, grid, even)
    finger = width / fingers
    is_even = np.mod(fingers, 2.0) == 0.0
    drains = np.where(is_even, fingers / 2.0, (fingers + 1.0) / 2.0)
    sources = np.where(is_even, fingers / 2.0 + 1.0, (fingers + 1.0) / 2.0)
    ends_drain, ends_source = np.where(is_even, 0.0, 1.0), np.where(is_even, 2.0, 1.0)
    d = grid.diffusion
    across = fingers * length + (fingers + 1.0) * d
    return Drawn(
        fingers=fingers,
        finger_width=finger,
        drain_area=units * drains * finger * d,
        source_area=units * sources * finger * d,
        drain_edge=units * (drains * 2.0 * d + ends_drain * finger),
        source_edge=units * (sources * 2.0 * d + ends_source * finger),
        area=units * across * (finger + 2.0 * d),
    )


def resistor_length(resistance: Array, resistor: ResistorParameters) -> Array:
    """Return the drawn length [m] of resistors at the matched width."""
    return resistance / resistor.sheet_resistance * resistor.width


def resistor_area(resistance: Array, resistor: ResistorParameters) -> Array:
    """Return the area [m^2] of resistors: matched width and as much spacing, with two squares of contact."""
    return (resistor_length(resistance, resistor) + 2.0 * resistor.width) * 2.0 * resistor.width
