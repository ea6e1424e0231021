"""At which sizes and voltages a library is swept: what the designer says, else a grid read from the library's own limits."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from optisize.errors import InputError
from optisize.process.law import Array
from optisize.process.spline import Axis, Box
from optisize.process.tabulated import Grids, Sizes
from optisize.quantities import write
from optisize.simulator.limits import Limits

BEYOND = 1.1  # of the supply; voltages go so far
BELOW = 0.3  # V; gate voltages begin so far below the source
FORWARD = 0.15  # V; so far may the source be below the bulk
FIRST = 5e-4  # V; the lowest drain voltage
GATE_STEP, SMALL_GATE_STEP = 0.088, 0.17  # V
DRAIN_BEND, DRAIN_STEP = 0.3, 0.065  # V, and of its logarithm
BODY_BEND, BODIES, SMALL_BODIES = 1.0, 8, 4
STRIDE = 4  # drain voltages of the current for one of vdsat
SMALL_DRAINS = 9
WIDTH_STEP = 0.2  # of 1/W, over that of the narrowest
WIDE_BIN = 2.0  # ratio of the ends of a bin with two lengths inside; a narrower one has one
LARGEST_FINGER = 50e-6  # m; wider fingers are not drawn


def grids(supply: float) -> Grids:
    """Return the voltages for a supply [V]."""
    high = BEYOND * supply
    gates = int(np.ceil((high + BELOW) / GATE_STEP)) + 1
    quarters = int(np.ceil(np.log1p((high - FIRST) / DRAIN_BEND) / DRAIN_STEP / STRIDE))
    vgs = Axis(-BELOW, high, gates, 3)
    few = Axis(-BELOW, high, int(np.ceil((high + BELOW) / SMALL_GATE_STEP)) + 1, 3)

    def drain(count: int, degree: int) -> Axis:
        return Axis(FIRST, high, count, degree, DRAIN_BEND)

    def body(count: int, degree: int) -> Axis:
        return Axis(-FORWARD, high, count, degree, BODY_BEND)

    return Grids(
        current=Box((vgs, drain(STRIDE * quarters + 1, 3), body(BODIES, 2))),
        vdsat=Box((vgs, drain(quarters + 1, 1), body(BODIES, 1))),
        small=Box((few, drain(SMALL_DRAINS, 3), body(SMALL_BODIES, 2))),
        reverse=np.linspace(-2.0 * FORWARD, 2.0 * high, 16),
    )


def sizes(limits: Limits, lengths: Sequence[float], widths: Sequence[float], device: str) -> Sizes:
    """Return the sizes of one channel.

    Args:
        limits: of the library's model.
        lengths, widths: what the designer says [m]; empty for what the limits suggest.
        device: for messages.

    Raises InputError when neither says, or what the designer says is beyond the library's limits.
    """
    for name, given, known in (("lengths", lengths, limits.lengths), ("widths", widths, limits.widths)):
        if not given and len(known) < 2:
            raise InputError(
                f"{device}: its model does not say between which {name} it holds; name them with --{name}"
            )
        if given and len(known) >= 2:
            low, high = float(known[0]), float(known[-1])
            for value in given:
                if not low * (1 - 1e-6) <= value <= high * (1 + 1e-6):
                    raise InputError(
                        f"--{name}: found {write(value, 'm')}; the model of {device} holds from {write(low, 'm')} to "
                        f"{write(high, 'm')}"
                    )
    chosen_lengths = np.unique(lengths) if lengths else default_lengths(limits.lengths)
    chosen_widths = np.unique(widths) if widths else default_widths(limits.widths)
    return Sizes(
        lengths=chosen_lengths,
        widths=chosen_widths,
        small_widths=few_widths(chosen_widths),
        length_edges=limits.lengths,
        width_edges=limits.widths,
    )


def few_widths(widths: Array) -> Array:
    """Return the narrowest, a middle and the widest of some widths."""
    return np.unique(widths[[0, len(widths) // 2, len(widths) - 1]])


def _rounded(value: float) -> float:
    """Return a size with three digits, a limit that is a hair beyond a round one as the round one."""
    return float(f"{value:.3g}")


def default_lengths(edges: Array) -> Array:
    """Return the ends of every bin of a model and some lengths inside each, evenly spaced in 1/sqrt(L)."""
    found = [_rounded(float(e)) for e in edges]
    for low, high in zip(edges[:-1], edges[1:], strict=True):
        ratio = high / low
        parts = 2 if ratio <= WIDE_BIN else max(3, int(np.ceil(1.1 * np.log2(ratio) - 0.5)))
        inside = np.linspace(low**-0.5, high**-0.5, parts + 1)[1:-1] ** -2.0
        found += [float(f"{x:.2g}") for x in inside]
    return np.unique(found)


def default_widths(edges: Array) -> Array:
    """Return the ends of every bin of a model and as many widths inside that the steps of 1/W are short."""
    widest = min(float(edges[-1]), LARGEST_FINGER)
    ends = [*edges[:-1][edges[:-1] < widest], widest]
    found = [_rounded(float(e)) for e in ends]
    for low, high in zip(ends[:-1], ends[1:], strict=True):
        parts = int(np.ceil((1.0 / low - 1.0 / high) * float(edges[0]) / WIDTH_STEP - 1e-6))
        inside = 1.0 / np.linspace(1.0 / low, 1.0 / high, parts + 1)[1:-1]
        found += [float(f"{x:.2g}") for x in inside]
    return np.unique(found)
