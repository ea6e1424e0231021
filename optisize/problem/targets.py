"""The goals and limits of a problem file."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from optisize.errors import InputError, listing, nearest, shorten
from optisize.problem.evaluate import Goal, Limit
from optisize.problem.schema import flatten
from optisize.quantities import QuantityError, read
from optisize.stage.assembly import Topology
from optisize.stage.measures import CATALOGUE, FIGURES, Measure, find

LIMIT_KEYS = ("min", "max", "margin")


def read_goals(table: Mapping[str, Any], topology: Topology, own: Mapping[str, Measure]) -> tuple[Goal, ...]:
    """Return the goals of a table that may be nested; `own` are the problem's own measures.

    Raises InputError for a measure that the stage does not have, another sense than max and min, or no goal at all.
    """
    goals = []
    for name, value in flatten(table, lambda name, _: _is_measure(name, topology, own), "goals").items():
        measure = _find(name, topology, own, "goals")
        if value not in ("max", "min"):
            raise InputError(
                f'goals.{name}: found {shorten(value)}; allowed are "max" and "min"'
                f"{nearest(str(value).lower()[:3], ('max', 'min'))}"
            )
        goals.append(Goal(measure, value))
    if not goals:
        raise InputError("goals: there is none; name at least one measure to trade")
    return tuple(goals)


def _is_measure(name: str, topology: Topology, own: Mapping[str, Measure]) -> bool:
    try:
        find(name, topology, own)
    except InputError:
        return False
    return True


def _find(name: str, topology: Topology, own: Mapping[str, Measure], table: str) -> Measure:
    """Return the measure that a key of a table names."""
    if not _is_measure(name, topology, own):
        known = [*own, *CATALOGUE, *(f"{t.name}.{figure}" for t in topology.transistors for figure in FIGURES)]
        kind = "a size, not a measure" if name in topology.size_names else "no measure"
        raise InputError(f'{table}.{name}: {kind}; "optisize measures" lists them{nearest(name, known)}')
    return find(name, topology, own)


def _margin(name: str, bounds: Mapping[str, Any], bound: float | None, measure: Measure) -> float:
    """Return how far inside a bound a search keeps, in the measure's unit."""
    value = bounds.get("margin")
    if value is None or bound is None:
        return 0.0
    try:
        relative = isinstance(value, str) and value.rstrip().endswith("%")
        margin = read(value, "") * abs(bound) if relative else read(value, measure.unit)
    except QuantityError as error:
        raise InputError(f"limits.{name}.margin: found {shorten(value)}; {error}") from None
    if margin < 0.0 or (measure.scale == "log" and margin >= bound):
        raise InputError(
            f"limits.{name}.margin: found {shorten(value)}; at least zero and less than the bound is allowed"
        )
    return margin


def read_limits(table: Mapping[str, Any], topology: Topology, own: Mapping[str, Measure]) -> tuple[Limit, ...]:
    """Return the limits of a table that may be nested, and one on headroom if it has none.

    Raises InputError for a measure that the stage does not have, and for bounds and margins that make no sense.
    """

    def is_leaf(name: str, value: Any) -> bool:
        return _is_measure(name, topology, own) or not any(isinstance(part, dict) for part in value.values())

    limits = []
    for name, bounds in flatten(table, is_leaf, "limits").items():
        measure = _find(name, topology, own, "limits")
        if not isinstance(bounds, dict) or not bounds or bounds.keys() == {"margin"}:
            example = shorten(bounds) if isinstance(bounds, str) else f'"… {measure.unit}"'
            raise InputError(
                f"limits.{name}: found {shorten(bounds)}; a table with min, max or both is needed, "
                f"such as {{ {'min' if measure.better == 'max' else 'max'} = {example} }}"
            )
        values = {}
        for key, value in bounds.items():
            if key not in LIMIT_KEYS:
                raise InputError(
                    f"limits.{name}.{key}: unknown key; allowed are {listing(LIMIT_KEYS)}{nearest(key, LIMIT_KEYS)}"
                )
            if key == "margin":
                continue
            try:
                values[key] = read(value, measure.unit)
            except QuantityError as error:
                raise InputError(f"limits.{name}.{key}: found {shorten(value)}; {error}") from None
            if measure.scale == "log" and values[key] <= 0.0:
                raise InputError(f"limits.{name}.{key}: found {shorten(value)}; a value above zero is needed")
        if values.get("min", -np.inf) > values.get("max", np.inf):
            raise InputError(f"limits.{name}: found {shorten(bounds)}; the bounds are inverted: min is above max")
        low, high = values.get("min"), values.get("max")
        margins = (_margin(name, bounds, low, measure), _margin(name, bounds, high, measure))
        limits.append(Limit(measure, low, high, margins=margins))
        narrow = limits[-1].narrowed()
        if narrow.low is not None and narrow.high is not None and narrow.low > narrow.high:
            raise InputError(
                f"limits.{name}.margin: found {shorten(bounds['margin'])}; it leaves nothing between the bounds"
            )
    if not any(limit.measure.name == "headroom" for limit in limits):
        limits.append(Limit(find("headroom", topology), 0.0, None, implied=True))
    return tuple(limits)
