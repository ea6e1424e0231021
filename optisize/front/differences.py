"""What differs between problems whose fronts are compared: stage, process, conditions and limits, in words."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from optisize.problem.evaluate import Limit, Problem
from optisize.problem.own_measures import label
from optisize.quantities import ZERO_CELSIUS, write

NONE = "none"


def stage_in_words(problem: Problem) -> str:
    """Return the kind of a stage: ``nmos pair, resistor load, single tail, single-ended``."""
    t = problem.topology
    parts = [f"{t.input} pair", f"{t.load} load", f"{t.tail} tail", t.output_kind]
    if t.form != "simple":
        parts.append(t.form)
    if t.bulk != "rail":
        parts.append(f"bulk at the {t.bulk}")
    return ", ".join(parts)


def _voltage(value: float | None) -> str:
    return NONE if value is None else write(value, "V")


def _common_mode(problem: Problem) -> str:
    low, high = problem.conditions.common_mode
    return _voltage(low) if low == high else f"{_voltage(low)} to {_voltage(high)}"


_CONDITIONS: dict[str, Callable[[Problem], str]] = {
    "stage": stage_in_words,
    "process": lambda p: p.process_name,
    "supply": lambda p: _voltage(p.conditions.supply),
    "common_mode": _common_mode,
    "output_common_mode": lambda p: _voltage(p.conditions.output_common_mode),
    "load_capacitance": lambda p: write(p.conditions.load_capacitance, "F"),
    "temperature": lambda p: write(p.conditions.temperature - ZERO_CELSIUS, "degC"),
    "corner": lambda p: p.conditions.corner,
}


def differences(problems: Sequence[Problem]) -> dict[str, list[str]]:
    """Return what is not the same in all problems: by its name, the words for each of them.

    Processes of one name and different parameters are told apart by the beginning of their files' hashes.
    """
    found = {name: [words(p) for p in problems] for name, words in _CONDITIONS.items()}
    hashes = [p.hashes["process"] for p in problems]
    if len(set(found["process"])) < len(set(hashes)):
        found["process"] = [f"{p.process_name} ({h[:8]})" for p, h in zip(problems, hashes, strict=True)]
    limits = [{label(x.measure): x for x in p.limits} for p in problems]
    for name in dict.fromkeys(name for known in limits for name in known):
        found[f"limit {name}"] = [_bounds(known.get(name)) for known in limits]
    return {name: words for name, words in found.items() if len(set(words)) > 1}


def _bounds(limit: Limit | None) -> str:
    if limit is None:
        return NONE
    return " and ".join(f"{name} {write(bound, limit.measure.unit)}" for name, bound in limit.bounds)
