"""Why a design was chosen, in words: the rule, the designs it was chosen from, and what a step to either side costs."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from optisize.front.aims import Aim, Axis
from optisize.front.neighbours import Neighbour
from optisize.quantities import write

SAME = 1e-4  # of a figure; less is no change that a sentence would name


def _percent(share: float) -> str:
    return f"{100.0 * share:.0f} %" if abs(share) >= 0.1 else f"{100.0 * share:.2g} %"


def pool(count: int, allowed: int, bounds: Sequence[Aim]) -> str:
    """Return from which designs was chosen: ``the 6 of 200 designs with gain>=20 dB``."""
    if not bounds:
        return f"all {count} designs" if count > 1 else "the only design"
    which = "the one" if allowed == 1 else f"the {allowed}"
    return f"{which} of {count} designs with {' and '.join(b.text for b in bounds)}"


def of_extreme(axis: Axis, rule: str, at: int, chosen_from: str) -> str:
    """Return the reason of the design with least or most of something."""
    return f"the {rule} {axis.name}, {write(float(axis.values[at]), axis.unit)}, of {chosen_from}."


def of_knee(depth: float, goals: int, chosen_from: str) -> str:
    """Return the reason of the knee; `depth` as from `preference.bulge`."""
    if goals == 1:
        return f"the best in the only goal of {chosen_from}."
    where = "the straight line between the extremes" if goals == 2 else "every extreme, all goals weighed alike"
    return (
        f"the knee: of {chosen_from} the furthest ahead of {where} (by {_percent(depth)} of the front's range), "
        "so that any other costs more than it gives, both in ranges of the front."
    )


def of_balance(worst: float, chosen_from: str) -> str:
    """Return the reason of the most balanced design; `worst` as from `preference.imbalance`."""
    return (
        f"the balance: the front has no knee, and of {chosen_from} this one's worst goal stands highest, "
        f"{_percent(1.0 - worst)} of the way from the worst of the front to the best."
    )


def of_wishes(hopes: Sequence[Aim], meeting: int, at: int, free: Sequence[str], chosen_from: str) -> str:
    """Return the reason of a design that meets every wish; `free` are the goals without a wish."""
    asked = " and ".join(h.text for h in hopes)
    if meeting == 1:
        return f"the only one of {chosen_from} that meets {asked}."
    how = f"it is the best in {free[0]}" if len(free) == 1 else f"it has the best balance of {' and '.join(free)}"
    if not free:
        how = f"it exceeds them most evenly, each by at least {_percent(_margin(hopes, at))} of the front's range"
    return f"of {chosen_from}, {meeting} meet {asked}; of these {how}."


def _margin(hopes: Sequence[Aim], at: int) -> float:
    return -max(float(h.distances[at]) for h in hopes)


def of_nearest(asked: Sequence[Aim], what: str, at: int, chosen_from: str) -> str:
    """Return the reason of the design that comes nearest to conditions or wishes that none meets."""
    miss = max(float(a.distances[at]) for a in asked)
    far = f" ({_percent(miss)} of the front's range)" if np.isfinite(miss) else ""
    if len(asked) == 1:
        return f"of {chosen_from}, none meets {asked[0].text}; this one comes nearest{far}."
    return f"of {chosen_from}, none meets every {what}; of this one the largest miss is smallest{far}."


def step_text(axes: Sequence[Axis], neighbour: Neighbour, number: int) -> str:
    """Return what a neighbour gives and costs.

    ``Towards more gain, design 12 gives 1.2 dB more gain for 0.4 uA more supply_current.``
    """
    along = next(a for a in axes if a.name == neighbour.axis)
    gives: list[str] = []
    costs: list[str] = []
    for axis in axes:
        change = neighbour.changes[axis.name]
        here = float(np.max(np.abs(axis.values[np.isfinite(axis.values)]), initial=0.0))
        if not np.isfinite(change) or abs(change) <= SAME * here:
            continue
        text = f"{write(abs(change), axis.unit, 3)} {'more' if change > 0.0 else 'less'} {axis.name}"
        (gives if (change > 0.0) == (axis.sense == "max") else costs).append(text)
    more = (along.sense == "max") == neighbour.better
    toward = f"Towards {'more' if more else 'less'} {along.name}"
    misses = f", but misses {' and '.join(neighbour.misses)}" if neighbour.misses else ""
    trade = " for ".join(_listed(side) for side in (gives, costs) if side) or "much the same"
    return f"{toward}, design {number} {'has' if not gives else 'gives'} {trade}{misses}."


def _listed(parts: Sequence[str]) -> str:
    return parts[0] if len(parts) == 1 else f"{', '.join(parts[:-1])} and {parts[-1]}"


def end_text(axis: Axis) -> str:
    """Return that a front ends here: ``No design of the front has more gain.``"""
    return f"No design of the front has {'more' if axis.sense == 'max' else 'less'} {axis.name}."
