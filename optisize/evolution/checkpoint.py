"""A search as plain arrays, and as one file of them, to go on with it later; nothing is pickled.

Numbers and texts that are not arrays (the settings, the counts, the state of the random generator) are kept as JSON in
arrays of text. A restored search goes on bit for bit as it would have without the interruption.
"""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from dataclasses import asdict, astuple
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from optisize.evolution.archive import Archive, Front
from optisize.evolution.arrays import Floats
from optisize.evolution.state import Evaluated, Mark, Normalisation, Record, Settings, State

Arrays: TypeAlias = dict[str, NDArray[Any]]

FORMAT = 1
_COUNTS = ("generation", "evaluations", "repeats", "stopped")


def to_arrays(state: State) -> Arrays:
    """All of the state as arrays of numbers and text, by name."""
    archive, population, known = state.archive, state.population, state.normalisation
    waiting = (Front(archive.front.vectors[:, :0], archive.front.losses[:, :0]), *archive.pending)
    arrays: Arrays = {
        "format": np.array(FORMAT),
        "settings": _text(asdict(state.settings)),
        "random": _text(state.random),
        "counts": _text({name: getattr(state, name) for name in _COUNTS}),
        "box": np.stack((state.ideal, state.reference)),
        "population.vectors": population.vectors,
        "population.losses": population.losses,
        "population.violation": population.violation,
        "archive.vectors": archive.front.vectors,
        "archive.losses": archive.front.losses,
        "archive.counts": np.array((archive.gathered, archive.measured)),
        "pending.vectors": np.concatenate([part.vectors for part in waiting], axis=1),
        "pending.losses": np.concatenate([part.losses for part in waiting], axis=1),
        "pending.sizes": np.array([part.size for part in archive.pending], dtype=np.int64),
        "shares": np.array(state.shares),
        "mark": np.array(astuple(state.mark)),
        "records": np.array([astuple(record) for record in state.records], dtype=float),
    }
    if known is not None:
        arrays |= {f"normalisation.{name}": array for name, array in vars(known).items()}
    return arrays


def from_arrays(arrays: Mapping[str, NDArray[Any]]) -> State:
    """The state whose arrays these are; other names among them are ignored."""
    if "format" not in arrays or int(arrays["format"]) != FORMAT:
        raise ValueError(f"not a checkpoint of a search in format {FORMAT}")
    known = None
    if "normalisation.ideal" in arrays:
        known = Normalisation(*(arrays[f"normalisation.{name}"] for name in ("ideal", "worst", "extremes")))
    hypervolume, violation, generation = arrays["mark"].tolist()
    ideal, reference = arrays["box"]
    return State(
        settings=Settings(**json.loads(str(arrays["settings"]))),
        ideal=ideal,
        reference=reference,
        population=Evaluated(*(arrays[f"population.{name}"] for name in ("vectors", "losses", "violation"))),
        archive=_archive(arrays),
        random=json.loads(str(arrays["random"])),
        shares=tuple(arrays["shares"].tolist()),
        mark=Mark(hypervolume, violation, int(generation)),
        normalisation=known,
        records=tuple(_record(row) for row in arrays["records"]),
        **json.loads(str(arrays["counts"])),
    )


def save(path: str | os.PathLike[str], state: State) -> None:
    """Write the state to a file, which is replaced as a whole: an interruption leaves the old one."""
    path = Path(path)
    beside = path.with_name(f".{path.name}.part")
    try:
        with beside.open("wb") as file:
            np.savez(file, **to_arrays(state))  # type: ignore[arg-type]
        beside.replace(path)
    finally:
        beside.unlink(missing_ok=True)


def load(path: str | os.PathLike[str]) -> State:
    """Read the state from a file."""
    with np.load(path, allow_pickle=False) as file:
        return from_arrays({name: file[name] for name in file.files})


def _text(value: object) -> NDArray[Any]:
    """A value as JSON in an array of text."""
    return np.array(json.dumps(value))


def _archive(arrays: Mapping[str, NDArray[Any]]) -> Archive:
    """The archive with the newcomers that were waiting, split as they came."""
    ends = np.cumsum(arrays["pending.sizes"])[:-1]
    parts: tuple[Front, ...] = ()
    if arrays["pending.sizes"].size:
        vectors = np.split(arrays["pending.vectors"], ends, axis=1)
        losses = np.split(arrays["pending.losses"], ends, axis=1)
        parts = tuple(Front(*pair) for pair in zip(vectors, losses, strict=True))
    gathered, measured = arrays["archive.counts"].tolist()
    return Archive(Front(arrays["archive.vectors"], arrays["archive.losses"]), parts, gathered, measured)


def _record(row: Floats) -> Record:
    """One generation's record from its row of numbers."""
    generation, evaluations, feasible_share, hypervolume, size, violation = row.tolist()
    return Record(int(generation), int(evaluations), feasible_share, hypervolume, int(size), violation)
