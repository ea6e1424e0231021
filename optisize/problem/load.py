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
from optisize.problem.evaluate import Problem
from optisize.problem.own_measures import own_measures
from optisize.problem.schema import ProblemFile, SizingFile, flatten, read_size
from optisize.problem.space import SizeRange, SizingSpace
from optisize.problem.targets import read_goals, read_limits
from optisize.process.card import Process, load_process, locate_process, standing_alone
from optisize.process.law import Array
from optisize.quantities import QuantityError, write
from optisize.stage.assembly import Topology, build
from optisize.stage.circuit import Conditions
from optisize.stage.elements import Size
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
        _check_tabulated(conditions, process)
        _check_output_common_mode(conditions, topology)
        tabulated = _tabulated(file.lengths, process)
        ranges = _ranges(file.sizes, SizingSpace(topology, process, (), tabulated))
        space = SizingSpace(topology, process, ranges, tabulated)
        own = own_measures(file.measures, topology)
        goals = read_goals(file.goals, topology, own)
        limits = read_limits(file.limits, topology, own)
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
        process_text=standing_alone(source, process),
        source=str(path),
        own_measures=own,
        hashes=_hashes(path, source, process),
    )


def _hashes(path: Path, source: Path, process: Process) -> dict[str, str]:
    hashes = {
        name: hashlib.sha256(read_bytes(file)).hexdigest() for name, file in (("problem", path), ("process", source))
    }
    if process.table is not None:
        with process.table.file.open("rb") as file:
            hashes["table"] = hashlib.file_digest(file, "sha256").hexdigest()
    return hashes


def load_sizing(path: str | Path, problem: Problem) -> dict[str, Array]:
    """Read a manual sizing for a problem's stage: every size (1,) in SI units, snapped to the grid.

    Raises InputError.
    """
    path = Path(path)
    file = validated(SizingFile, read_toml(path), str(path))
    try:
        ranges = _ranges(file.sizes, problem.space)
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


def _check_tabulated(conditions: Conditions, process: Process) -> None:
    """Raise InputError for a corner, temperature or supply that the tables of the process do not hold."""
    if process.tables is None:
        return
    try:
        process.tables.find(conditions.corner, conditions.temperature)
    except InputError as error:
        raise InputError(f"conditions: {error}") from None
    highest = process.tables.grids.current.axes[1].high
    if conditions.supply > highest:
        raise InputError(
            f"conditions.supply: found {write(conditions.supply, 'V')}; the tables of the process reach to "
            f"{write(highest, 'V')}"
        )


def _tabulated(lengths: str, process: Process) -> bool:
    """Tell whether lengths are only those of the tables; raises InputError when there are no tables."""
    if lengths == "tabulated" and process.tables is None:
        raise InputError(f'lengths: found "tabulated", but the process has law "{process.law}", which has no tables')
    return lengths == "tabulated"


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


def _ranges(table: Mapping[str, Any], space: SizingSpace) -> tuple[SizeRange, ...]:
    """Return the range of every size of the stage, in the stage's order."""
    topology = space.topology
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
    return tuple(_range(size, given[size.name], space) for size in topology.sizes)


def _range(size: Size, value: object, space: SizingSpace) -> SizeRange:
    try:
        low, high = read_size(value, size.unit)
    except QuantityError as error:
        raise InputError(f"sizes.{size.name}: {error}") from None
    smallest, largest = _drawable(size, space.topology, space.process)
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
        low, high = space.fitted(size, low, high)
    allowed = space.lengths(size) if size.kind == "length" else None
    if allowed is not None and not np.isclose(allowed, low, rtol=1e-9, atol=0.0).any():
        listed = listing(write(float(x), "m") for x in allowed)
        raise InputError(f"sizes.{size.name}: found {shorten(value)}; the lengths of the tables are {listed}")
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
