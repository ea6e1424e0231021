"""From a problem file to a problem: every key checked against the stage and the process, with one clear message."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from optisize.errors import InputError, listing, nearest, shorten
from optisize.files import near_file, read_bytes, read_toml, validated
from optisize.problem.evaluate import Goal, Limit, Problem
from optisize.problem.own_measures import own_measures
from optisize.problem.schema import ProblemFile, SizingFile, flatten, read_size
from optisize.problem.space import SizeRange, SizingSpace
from optisize.process.card import Process, load_process, locate_process
from optisize.process.law import Array
from optisize.quantities import QuantityError, read, write
from optisize.stage.assembly import Topology, build
from optisize.stage.circuit import Conditions
from optisize.stage.elements import Size
from optisize.stage.measures import CATALOGUE, FIGURES, Measure, find
from optisize.stage.topology import DEGENERATION


def load_problem(path: str | Path, process_file: Path | None = None) -> Problem:
    """Read a problem file.

    Args:
        path: of the problem file.
        process_file: the process file to take in place of the one that the problem names.

    Raises InputError for anything in it that is wrong.
    """
    path = Path(path)
    data = read_toml(path)
    file = validated(ProblemFile, data, str(path))
    try:
        source = process_file or _process_source(file.process, path.parent)
        process = load_process(source)
        topology = build(**file.stage.model_dump(), degenerated=_degenerated(file.sizes))
        _check_corner(file.conditions.corner, process)
        conditions = Conditions(**file.conditions.model_dump())
        _check_conditions(conditions)
        _check_output_common_mode(conditions, topology)
        space = SizingSpace(topology, process, _ranges(file.sizes, topology, process))
        own = own_measures(file.measures, topology)
        goals = _goals(file.goals, topology, own)
        limits = _limits(file.limits, topology, own)
        if not space.dimensions:
            raise InputError("sizes: every size is fixed; free one by giving it two values, or use assess")
    except InputError as error:
        text = str(error)
        raise InputError(text if text.startswith(str(path)) else f"{path}: {text}") from None
    return Problem(
        title=file.title,
        process_name=file.process,
        process=process,
        topology=topology,
        conditions=conditions,
        space=space,
        goals=goals,
        limits=limits,
        settings=file.search,
        text=read_bytes(path).decode("utf-8"),
        process_text=read_bytes(source).decode("utf-8"),
        source=str(path),
        own_measures=own,
        hashes={
            "problem": hashlib.sha256(read_bytes(path)).hexdigest(),
            "process": hashlib.sha256(read_bytes(source)).hexdigest(),
        },
    )


def load_sizing(path: str | Path, problem: Problem) -> dict[str, Array]:
    """Read a manual sizing for a problem's stage: every size (1,) in SI units, snapped to the grid.

    Raises InputError.
    """
    path = Path(path)
    file = validated(SizingFile, read_toml(path), str(path))
    try:
        ranges = _ranges(file.sizes, problem.topology, problem.process)
    except InputError as error:
        raise InputError(f"{path}: {error}") from None
    for r in ranges:
        if r.free:
            raise InputError(f"{path}: sizes.{r.size.name}: a range, but one value is needed")
    return problem.space.snapped({r.size.name: np.array([r.low]) for r in ranges})


def _process_source(name: str, beside: Path) -> Path:
    try:
        return locate_process(name, beside)
    except InputError as error:
        hint = "" if "did you mean" in str(error) or os.path.exists(beside / name) else near_file(beside / name)
        raise InputError(f"process: {str(error).removeprefix('process ')}{hint}") from None


def _check_corner(name: str, process: Process) -> None:
    try:
        process.corner(name)
    except InputError as error:
        raise InputError(f"conditions.corner: {str(error).removeprefix('corner ')}") from None


def _check_conditions(conditions: Conditions) -> None:
    low, high = conditions.common_mode
    if low < 0.0 or high > conditions.supply:
        found = write(low, "V") if low == high else f"{write(low, 'V')} to {write(high, 'V')}"
        raise InputError(
            f"conditions.common_mode: found {found}; it must lie between the rails, "
            f"0 V and {write(conditions.supply, 'V')}"
        )


def _degenerated(sizes: Mapping[str, Any]) -> bool:
    """Tell whether the sizes ask for resistors under the sources of the pair."""
    inner = sizes.get("input")
    names = [size.name for size in DEGENERATION.sizes]
    return any(name in sizes or (isinstance(inner, dict) and name.split(".")[1] in inner) for name in names)


def _check_output_common_mode(conditions: Conditions, topology: Topology) -> None:
    found, key = conditions.output_common_mode, "conditions.output_common_mode"
    if found is None:
        if topology.controls:
            raise InputError(f'{key}: is missing; load "{topology.load}" holds its outputs there')
    elif not 0.0 < found < conditions.supply:
        allowed = f"0 V and {write(conditions.supply, 'V')}"
        raise InputError(f"{key}: found {write(found, 'V')}; it must lie between the rails, {allowed}")
    elif not topology.controls and topology.output_kind == "differential":
        raise InputError(
            f'{key}: nothing holds the outputs of load "{topology.load}" there; remove it, or take load "source"'
        )


def _ranges(table: Mapping[str, Any], topology: Topology, process: Process) -> tuple[SizeRange, ...]:
    """Return the range of every size of the stage, in the stage's order."""
    known = {size.name: size for size in topology.sizes}
    given = flatten(table, lambda name, _: name in known, "sizes")
    for name in given:
        if name not in known:
            kind = f"input {topology.input}, load {topology.load}, tail {topology.tail}"
            kin = [other for other in known if other.split(".")[0] == name.split(".")[0]]
            hint = nearest(name, kin) or nearest(name, known)
            raise InputError(f"sizes.{name}: no size of this stage ({kind}); its sizes are {listing(known)}{hint}")
    missing = [name for name in known if name not in given]
    if missing:
        what = "is missing" if len(missing) == 1 else f"is missing, and so are {listing(missing[1:])}"
        raise InputError(f"sizes.{missing[0]}: {what}; every size of the stage needs a value or a range")
    return tuple(_range(size, given[size.name], topology, process) for size in topology.sizes)


def _range(size: Size, value: object, topology: Topology, process: Process) -> SizeRange:
    try:
        low, high = read_size(value, size.unit)
    except QuantityError as error:
        raise InputError(f"sizes.{size.name}: {error}") from None
    smallest, largest = _drawable(size, topology, process)
    if low < smallest * (1 - 1e-9) or high > largest * (1 + 1e-9):
        parts = value if isinstance(value, list) else [value]
        bare = size.unit and any(not isinstance(part, str) for part in parts)
        raise InputError(
            f"sizes.{size.name}: found {shorten(value)}; "
            f"{'allowed are' if size.kind in ('current', 'count') else 'the process can draw'} "
            f"{write(smallest, size.unit)} to {write(largest, size.unit)}"
            f"{f' (a bare number is in {size.unit})' if bare else ''}"
        )
    if size.kind == "count" and (low != round(low) or high != round(high)):
        raise InputError(f"sizes.{size.name}: found {shorten(value)}; whole numbers are needed")
    if low < high:
        low, high = SizingSpace(topology, process, ()).fitted(size, low, high)
    return SizeRange(size, low, high)


def _drawable(size: Size, topology: Topology, process: Process) -> tuple[float, float]:
    """Return the smallest and the largest value of a size that the process can draw."""
    grid = process.grid
    if size.kind == "length":
        return grid.minimum_length, grid.maximum_length
    if size.kind == "width":
        group = size.name.rpartition(".")[0]
        even = any(t.even_fingers for t in topology.transistors if t.group == group)
        return grid.minimum_width * (2.0 if even else 1.0), 1e-1
    if size.kind == "resistance":
        return process.resistor.sheet_resistance * grid.step / process.resistor.width, 1e12
    return (1.0, 1e5) if size.kind == "count" else (1e-12, 10.0)


def _goals(table: Mapping[str, Any], topology: Topology, own: Mapping[str, Measure]) -> tuple[Goal, ...]:
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


def _limits(table: Mapping[str, Any], topology: Topology, own: Mapping[str, Measure]) -> tuple[Limit, ...]:
    def is_leaf(name: str, value: Any) -> bool:
        return _is_measure(name, topology, own) or not any(isinstance(part, dict) for part in value.values())

    limits = []
    for name, bounds in flatten(table, is_leaf, "limits").items():
        measure = _find(name, topology, own, "limits")
        if not isinstance(bounds, dict) or not bounds:
            example = shorten(bounds) if isinstance(bounds, str) else f'"… {measure.unit}"'
            raise InputError(
                f"limits.{name}: found {shorten(bounds)}; a table with min, max or both is needed, "
                f"such as {{ {'min' if measure.better == 'max' else 'max'} = {example} }}"
            )
        values = {}
        for key, value in bounds.items():
            if key not in ("min", "max"):
                raise InputError(
                    f"limits.{name}.{key}: unknown key; allowed are min, max{nearest(key, ('min', 'max'))}"
                )
            try:
                values[key] = read(value, measure.unit)
            except QuantityError as error:
                raise InputError(f"limits.{name}.{key}: found {shorten(value)}; {error}") from None
            if measure.scale == "log" and values[key] <= 0.0:
                raise InputError(f"limits.{name}.{key}: found {shorten(value)}; a value above zero is needed")
        if values.get("min", -np.inf) > values.get("max", np.inf):
            raise InputError(f"limits.{name}: found {shorten(bounds)}; the bounds are inverted: min is above max")
        limits.append(Limit(measure, values.get("min"), values.get("max")))
    if not any(limit.measure.name == "headroom" for limit in limits):
        limits.append(Limit(find("headroom", topology), 0.0, None, implied=True))
    return tuple(limits)
