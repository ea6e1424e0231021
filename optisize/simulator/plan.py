"""At which sizes and voltages a library is swept: as the designer says, else as the library's own limits suggest."""

from __future__ import annotations

import itertools
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
GATE_STEP, SMALL_GATE_STEP = 0.05, 0.14  # V
DRAIN_BEND, DRAIN_STEP = 0.15, 0.055  # V, and of its logarithm
BODY_BEND, BODIES, SMALL_BODIES = 2.0, 7, 3
FEWEST_STEPS = 7  # of the gate voltage
VDSAT_STRIDE, LEAK_STRIDE = 4, 2  # drain voltages of the current for one of vdsat, of the leak
LEAK_GATES = 2  # gate voltages of the current for one of the leak
GATE_DRAINS, NOISE_DRAINS = 13, 7
BESIDE = 0.01  # relative; how far above an edge the next model is sampled
WIDTH_STEP = 0.2  # of 1/W, over that of the narrowest
LENGTH_STEP, LENGTH_POWER = 0.07, 1.25  # of 1/sqrt(L), over that of the shortest; of where lengths are in a bin
LARGEST_FINGER = 50e-6  # m; wider fingers are not drawn


def grids(supply: float) -> Grids:
    """Return the voltages for a supply [V]."""
    high = BEYOND * supply
    return grids_between((-BELOW, high), (FIRST, high), (-FORWARD, high))


def grids_between(gate: tuple[float, float], drain: tuple[float, float], body: tuple[float, float]) -> Grids:
    """Return the voltages between ends of the gate's axis, of vds and of vsb [V]."""
    steps = _multiple(max((gate[1] - gate[0]) / GATE_STEP, LEAK_GATES * FEWEST_STEPS), LEAK_GATES)
    small = _multiple(max((gate[1] - gate[0]) / SMALL_GATE_STEP, FEWEST_STEPS), 1)
    across = _multiple(np.log1p((drain[1] - drain[0]) / DRAIN_BEND) / DRAIN_STEP, VDSAT_STRIDE)

    def along(steps: int) -> Axis:
        return Axis(*gate, steps + 1, 3)

    def drains(count: int, degree: int) -> Axis:
        return Axis(*drain, count, degree, DRAIN_BEND)

    def bodies(count: int, degree: int) -> Axis:
        return Axis(*body, count, degree, BODY_BEND)

    return Grids(
        current=Box((along(steps), drains(across + 1, 3), bodies(BODIES, 2))),
        vdsat=Box((along(steps), drains(across // VDSAT_STRIDE + 1, 1), bodies(BODIES, 1))),
        leak=Box((along(steps // LEAK_GATES), drains(across // LEAK_STRIDE + 1, 3), bodies(BODIES, 2))),
        gate=Box((along(small), drains(GATE_DRAINS, 3), bodies(SMALL_BODIES, 2))),
        noise=Box((along(small), drains(NOISE_DRAINS, 3), bodies(SMALL_BODIES, 2))),
        reverse=np.linspace(-2.0 * FORWARD, 2.0 * drain[1], 16),
    )


def _multiple(steps: float, of: int) -> int:
    """Return a number of steps that is enough, and so many times another number."""
    return of * int(np.ceil(steps / of - 1e-9))


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
            raise InputError(f"{device}: its model does not say between which {name} it holds; name them with --{name}")
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
        small_lengths=few_lengths(chosen_lengths, limits.lengths),
        small_widths=few_widths(chosen_widths, limits.widths),
        length_edges=limits.lengths,
        width_edges=limits.widths,
    )


def few_lengths(lengths: Array, edges: Array) -> Array:
    """Return the lengths for capacitances and noise: one more above each edge, where a model may jump."""
    inner = edges[(edges > lengths[0] * (1 + BESIDE)) & (edges < lengths[-1] * (1 - BESIDE))]
    return np.unique(np.concatenate([lengths, inner * (1.0 + BESIDE)]))


def few_widths(widths: Array, edges: Array) -> Array:
    """Return the widths for capacitances and noise: one in each bin of a model, or three if it has but one."""
    inner = edges[(edges > widths[0] * (1 + BESIDE)) & (edges < widths[-1] * (1 - BESIDE))]
    ends = np.concatenate([widths[:1], inner, widths[-1:]])
    if len(ends) > 2:
        return np.array([float(f"{np.sqrt(a * b):.3g}") for a, b in itertools.pairwise(ends)])
    return np.unique(widths[[0, len(widths) // 2, len(widths) - 1]])


def _rounded(value: float) -> float:
    """Return a size with three digits, a limit that is a hair beyond a round one as the round one."""
    return float(f"{value:.3g}")


def default_lengths(edges: Array) -> Array:
    """Return the ends of every bin of a model and some lengths inside each, spaced in 1/sqrt(L).

    They are closest above the lower end: a binned model is continuous there, but its impact ionisation bends.
    """
    found = [_rounded(float(e)) for e in edges]
    for low, high in itertools.pairwise(edges):
        parts = max(2, int(np.ceil((low**-0.5 - high**-0.5) * float(edges[0]) ** 0.5 / LENGTH_STEP)))
        along = (np.arange(1, parts) / parts) ** LENGTH_POWER
        inside = (low**-0.5 + along * (high**-0.5 - low**-0.5)) ** -2.0
        found += [float(f"{x:.2g}") for x in inside]
    return np.unique(found)


def default_widths(edges: Array) -> Array:
    """Return the ends of every bin of a model and as many widths inside that the steps of 1/W are short."""
    widest = min(float(edges[-1]), LARGEST_FINGER)
    ends = [*edges[:-1][edges[:-1] < widest], widest]
    found = [_rounded(float(e)) for e in ends]
    for low, high in itertools.pairwise(ends):
        parts = int(np.ceil((1.0 / low - 1.0 / high) * float(edges[0]) / WIDTH_STEP - 1e-6))
        inside = 1.0 / np.linspace(1.0 / low, 1.0 / high, parts + 1)[1:-1]
        found += [float(f"{x:.2g}") for x in inside]
    return np.unique(found)
