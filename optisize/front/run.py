"""A run: one search as a directory, written whole or not at all, and read back."""

from __future__ import annotations

import io
import json
import os
import re
import shutil
import tempfile
import zipfile
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from optisize.errors import InputError, OptisizeError
from optisize.evolution import checkpoint
from optisize.evolution.state import State
from optisize.files import near_file, read_bytes
from optisize.front.table import UNLIMITED, column, to_csv, units
from optisize.problem.evaluate import Problem
from optisize.problem.load import load_problem

if TYPE_CHECKING:
    from optisize.front.choice import Choice

PROBLEM, PROCESS, FRONT, HISTORY, INFO = "problem.toml", "process.toml", "front.csv", "history.csv", "run.json"
CHECKPOINT = "checkpoint.npz"
PAGE = "page.html"
FIGURES = ("trade-offs", "parallel", "history", "resimulation")  # without their formats
OF_A_DESIGN = re.compile(r"(mismatch|sheet)-\d+")  # likewise, of one design of the front
COUNTS = ("seed", "population", "generations")  # what run.json has to say to go on
RECORDS = ("evaluations", "hypervolume", "feasible_share")  # what history.csv has to hold


@dataclass
class Run:
    """One search: its problem, its front, its history and what is known about it.

    Attributes:
        problem: what was searched.
        front: one row a design, SI values, the unit in the column's name.
        history: one row for each time that the population was bred from.
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

    def save(
        self, directory: str | Path, *, replace: bool = False, draw: Callable[[Path], object] | None = None
    ) -> Path:
        """Write the run as a directory, whole or not at all; return its path.

        Args:
            directory: where to.
            replace: whether a run that is there gives way to this one, which then takes over the files that others
                have put there.
            draw: called with the directory, before it gets its name, to put the figures there.

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
                if draw is not None:
                    draw(beside)
                beside.chmod(0o755)
                if replace and target.exists():
                    _take_over(target, beside)
                    _exchange(target, beside)
                else:
                    os.rename(beside, target)
            finally:
                shutil.rmtree(beside, ignore_errors=True)
        except OSError as error:
            raise OptisizeError(f"{target}: cannot be written: {error.strerror or error}") from None
        self.path = target
        return target

    def choose(
        self,
        *,
        least: str | None = None,
        most: str | None = None,
        where: Sequence[str] = (),
        wishes: Mapping[str, str | float] | None = None,
        knee: bool = False,
    ) -> Choice:
        """Return one design of the front for a wish, with the reason and its neighbours; see `front.wish.choose`.

        ``run.choose(least="supply_current", where=["gain>=20 dB"])``, ``run.choose(wishes={"gain": "20 dB"})``, or the
        knee of the front where nothing is asked.
        """
        from optisize.front.wish import choose

        return choose(self, least=least, most=most, where=where, wishes=wishes, knee=knee)

    def short_list(self, count: int, where: Sequence[str] = ()) -> pd.DataFrame:
        """Return a few designs, well spread over the front and with its extremes; see `front.wish.short_list`."""
        from optisize.front.wish import short_list

        return short_list(self, count, where).front

    def _repr_html_(self) -> str:
        from optisize.front.notebook import run_html

        return run_html(self)

    def _write(self, directory: Path) -> None:
        (directory / PROBLEM).write_text(self.problem.text, encoding="utf-8")
        (directory / PROCESS).write_text(self.problem.process_text, encoding="utf-8")
        (directory / FRONT).write_text(to_csv(self.front), encoding="utf-8")
        (directory / HISTORY).write_text(self.history.to_csv(index=False), encoding="utf-8")
        (directory / INFO).write_text(json.dumps(self.info, indent=2) + "\n", encoding="utf-8")
        if self.state is not None and self.state.stopped == "interrupted":
            checkpoint.save(directory / CHECKPOINT, self.state)


def _take_over(target: Path, beside: Path) -> None:
    """Copy what others have put into a run directory, but no older part of the run itself."""
    for found in target.iterdir():
        own = found.name in (PROBLEM, PROCESS, FRONT, HISTORY, INFO, CHECKPOINT, PAGE) or _is_figure(found)
        if not own and found.is_dir():
            shutil.copytree(found, beside / found.name, symlinks=True)
        elif not own:
            shutil.copy2(found, beside / found.name, follow_symlinks=False)


def of_single_designs(target: Path) -> list[str]:
    """Return the files of a run directory that show single designs by number, which a new front makes wrong."""
    return sorted(x.name for x in target.iterdir() if OF_A_DESIGN.fullmatch(x.stem)) if target.is_dir() else []


def copy_figures(source: Path, target: Path) -> None:
    """Copy the figures of a run into the directory that is to take its place."""
    for found in source.iterdir():
        if _is_figure(found) and found.is_file():
            shutil.copy2(found, target / found.name)


def _is_figure(path: Path) -> bool:
    """Tell whether a file of a run directory is a figure of the run, which a changed front makes out of date."""
    return path.stem in FIGURES or OF_A_DESIGN.fullmatch(path.stem) is not None


def _exchange(target: Path, beside: Path) -> None:
    """Put the new directory into the place of the old one; the old one stays if that fails."""
    old = beside.with_name(f"{beside.name}.old")
    os.rename(target, old)
    try:
        os.rename(beside, target)
    except BaseException:
        os.rename(old, target)
        raise
    shutil.rmtree(old, ignore_errors=True)


def check_free(target: Path) -> None:
    """Raise InputError when a run directory is already there, OptisizeError when there could be none."""
    if os.path.lexists(target):
        raise InputError(f"{target}: already exists; give another directory with --to, or remove it")
    check_writable(target)


def check_writable(target: Path) -> None:
    """Raise OptisizeError when a directory could not be written, as far as can be told without writing."""
    above = next((p for p in target.absolute().parents if os.path.lexists(p)), Path("/"))
    if not above.is_dir():
        raise OptisizeError(f"{target}: cannot be written: {above} is not a directory")
    if not os.access(above, os.W_OK | os.X_OK):
        raise OptisizeError(f"{target}: cannot be written: no permission to write into {above}")


def load_run(directory: str | Path) -> Run:
    """Read a run back.

    Raises InputError when the directory is no run, or was damaged.
    """
    path = Path(directory)
    if not os.path.isdir(path):
        wrong = "is not a directory" if os.path.lexists(path) else f"there is no such run{near_file(path)}"
        raise InputError(f"{path}: {wrong}")
    missing = [name for name in (PROBLEM, PROCESS, FRONT, HISTORY, INFO) if not (path / name).is_file()]
    if missing:
        raise InputError(f"{path}: is no run directory (it has no {missing[0]})")
    problem = load_problem(path / PROBLEM, process_file=path / PROCESS)
    named = units(problem)
    sizes = [size.name for size in problem.topology.sizes]
    columns = [column(name, named[name]) for name in (*sizes, *problem.needed)]
    return Run(
        problem=problem,
        front=_read_table(path / FRONT, ["design", *columns]),
        history=_read_table(path / HISTORY, RECORDS),
        info=_read_info(path / INFO),
        state=_read_state(path / CHECKPOINT, problem) if (path / CHECKPOINT).is_file() else None,
        path=path,
    )


def _read_table(path: Path, wanted: Sequence[str]) -> pd.DataFrame:
    """Read a table whose rows are whole and whose wanted columns hold a number in each of them."""
    try:
        text = path.read_text(encoding="utf-8")
        _check_rows(path, text.splitlines())
        table = pd.read_csv(io.StringIO(text), dtype=object)  # numbers are read below, to the last digit
        lacking = [name for name in wanted if name not in table.columns]
        if lacking:
            raise InputError(f"{path}: the run is damaged: the column {lacking[0]} is missing")
        whole = {c: int if c == "design" else float for c in table.columns}
        table = table.replace(UNLIMITED).astype(whole)
    except (ValueError, OSError) as error:
        raise InputError(f"{path}: the run is damaged: {error}") from None
    empty = [name for name in wanted if table[name].isna().any()]
    if empty:
        raise InputError(f"{path}: the run is damaged: the column {empty[0]} has a row without a number")
    return table


def _check_rows(path: Path, lines: Sequence[str]) -> None:
    """Raise InputError for a row that ends before its last column."""
    for number, line in enumerate(lines, start=1):
        if line and line.count(",") < lines[0].count(","):
            raise InputError(f"{path}: the run is damaged: line {number} is cut short")


def _read_info(path: Path) -> dict[str, Any]:
    try:
        info = json.loads(read_bytes(path))
    except ValueError as error:
        raise InputError(f"{path}: the run is damaged: {error}") from None
    for key in COUNTS:
        if not isinstance(info, dict) or not isinstance(info.get(key), int):
            raise InputError(f"{path}: the run is damaged: {key} is missing or no whole number")
    return dict(info)


def _read_state(path: Path, problem: Problem) -> State:
    try:
        state = checkpoint.load(path)
    except (ValueError, KeyError, TypeError, OSError, EOFError, zipfile.BadZipFile):
        state = None
    shape = (problem.space.dimensions, len(problem.goals))
    if state is None or (len(state.population.vectors), len(state.ideal)) != shape:
        raise InputError(f"{path}: the checkpoint is damaged; without this file, the run goes on from its front")
    return state
