"""A run: one search as a directory, written whole or not at all, and read back."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from optisize.errors import InputError, OptisizeError
from optisize.files import read_bytes
from optisize.front.table import UNLIMITED, column, to_csv
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem
from optisize.search import checkpoint
from optisize.search.state import State

PROBLEM, PROCESS, FRONT, HISTORY, INFO = "problem.toml", "process.toml", "front.csv", "history.csv", "run.json"
CHECKPOINT = "checkpoint.npz"


@dataclass
class Run:
    """One search: its problem, its front, its history and what is known about it.

    Attributes:
        problem: what was searched.
        front: one row a design, SI values, the unit in the column's name.
        history: one row a generation.
        info: versions, seed, counts, times, hashes.
        state: the search itself, to go on with; None for a finished run that was read back.
        path: the directory, once there is one.
    """

    problem: Problem
    front: pd.DataFrame
    history: pd.DataFrame
    info: dict[str, Any]
    state: State | None = None
    path: Path | None = field(default=None)

    def save(self, directory: str | Path, *, replace: bool = False) -> Path:
        """Write the run as a directory, whole or not at all; return its path.

        Args:
            directory: where to.
            replace: whether a run that is there gives way to this one.

        Raises:
            InputError: it exists.
            OptisizeError: it cannot be written.
        """
        target = Path(directory)
        if not replace:
            check_free(target)
        try:
            target.parent.mkdir(parents=True, exist_ok=True)
            beside = Path(tempfile.mkdtemp(prefix=f".{target.name}.", dir=target.parent))
            try:
                self._write(beside)
                beside.chmod(0o755)
                if replace and target.exists():
                    os.rename(target, beside.with_name(f"{beside.name}.old"))
                os.rename(beside, target)
            finally:
                for leftover in (beside, beside.with_name(f"{beside.name}.old")):
                    shutil.rmtree(leftover, ignore_errors=True)
        except OSError as error:
            raise OptisizeError(f"{target}: cannot be written: {error.strerror or error}") from None
        self.path = target
        return target

    def _write(self, directory: Path) -> None:
        (directory / PROBLEM).write_text(self.problem.text, encoding="utf-8")
        (directory / PROCESS).write_text(self.problem.process_text, encoding="utf-8")
        (directory / FRONT).write_text(to_csv(self.front), encoding="utf-8")
        (directory / HISTORY).write_text(self.history.to_csv(index=False), encoding="utf-8")
        (directory / INFO).write_text(json.dumps(self.info, indent=2) + "\n", encoding="utf-8")
        if self.state is not None and self.state.stopped == "interrupted":
            checkpoint.save(directory / CHECKPOINT, self.state)


def check_free(target: Path) -> None:
    """Raise InputError when a run directory is already there."""
    if target.exists():
        raise InputError(f"{target}: already exists; give another directory with --to, or remove it")


def load_run(directory: str | Path) -> Run:
    """Read a run back.

    Raises InputError when the directory is no run, or was damaged.
    """
    path = Path(directory)
    if not path.is_dir():
        raise InputError(f"{path}: there is no such run directory")
    missing = [name for name in (PROBLEM, FRONT, HISTORY, INFO) if not (path / name).is_file()]
    if missing:
        raise InputError(f"{path}: is no run directory (it has no {missing[0]})")
    problem = load_problem(path / PROBLEM, process_file=path / PROCESS)
    try:
        info = json.loads(read_bytes(path / INFO))
        front = _read_table(path / FRONT)
        history = pd.read_csv(path / HISTORY)
    except (ValueError, pd.errors.ParserError) as error:
        raise InputError(f"{path}: the run is damaged: {error}") from None
    wanted = [column(size.name, size.unit) for size in problem.topology.sizes]
    lacking = [name for name in wanted if name not in front.columns]
    if lacking:
        raise InputError(f"{path / FRONT}: the column {lacking[0]} is missing")
    state = checkpoint.load(path / CHECKPOINT) if (path / CHECKPOINT).is_file() else None
    return Run(problem=problem, front=front, history=history, info=info, state=state, path=path)


def _read_table(path: Path) -> pd.DataFrame:
    table = pd.read_csv(path, float_precision="round_trip")
    return table.replace(UNLIMITED, np.inf).astype({c: float for c in table.columns if c != "design"})
