"""The circuit simulator: found, run on decks side by side, its files read.

It is started directly, never through a shell, in a folder of its own and without the user's start-up file.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from optisize.errors import InputError, OptisizeError, SimulationFailed, printable, shorten

PROGRAM, VARIABLE = "ngspice", "OPTISIZE_NGSPICE"
TIMEOUT = 120.0  # s, of one deck
LAST_LINES = 12  # of what the simulator says, in a message
DECK = "deck.sp"
# Kept by the simulator between its analyses: giving memory back and asking again takes as long as a noise analysis.
HEAP = {"MALLOC_TRIM_THRESHOLD_": "1000000000", "MALLOC_MMAP_THRESHOLD_": "1000000000", "MALLOC_TOP_PAD_": "64000000"}
# Some models take two threads, which spin while they wait: forty times slower where other work has the cores.
THREADS = {"OMP_WAIT_POLICY": "passive"}
_MARK = b"Binary:\n"
Collected = TypeVar("Collected")


def find_simulator(path: str | Path | None = None) -> Path:
    """Return the path of the circuit simulator.

    Args:
        path: the program, by path or name; that of the environment variable or the one on the PATH where None.

    Raises:
        InputError: the program that is named is not there.
        OptisizeError: there is none on the PATH.
    """
    for source, given in (("--simulator", path), (VARIABLE, os.environ.get(VARIABLE))):
        if given:
            found = shutil.which(given)
            if found is None:
                raise InputError(f"{source}: found {shorten(str(given))}; there is no such program")
            return Path(found).absolute()
    found = shutil.which(PROGRAM)
    if found is None:
        raise OptisizeError(
            f"the circuit simulator {PROGRAM} is not on the PATH; install it (Debian and Ubuntu: apt install ngspice; "
            "Fedora: dnf install ngspice; macOS: brew install ngspice), or name it with --simulator or the variable "
            f"{VARIABLE}. Without it, `optisize deck` still writes decks for a simulator of yours"
        )
    return Path(found).absolute()


def run(
    simulator: Path, folder: Path, deck: str | Sequence[str], *, timeout: float = TIMEOUT, wanted: Sequence[str] = ()
) -> str:
    """Run one deck in batch mode and return what the simulator says.

    Args:
        simulator: its path.
        folder: where the deck is written, where the simulator works and where its files go.
        deck: the text, or its lines.
        timeout: seconds after which it is stopped.
        wanted: files that have to be there afterwards.

    Raises SimulationFailed, with its last lines, when it crashes, takes too long or leaves out a wanted file.
    """
    text = deck if isinstance(deck, str) else "\n".join(deck) + "\n"
    (folder / DECK).write_text(text, encoding="utf-8")
    try:
        done = subprocess.run(
            [str(simulator), "-b", "-n", DECK],
            cwd=folder,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            env={**os.environ, "LC_ALL": "C", **HEAP, **THREADS},
            timeout=timeout,
            check=False,
        )
    except subprocess.TimeoutExpired as error:
        said = (error.output or b"").decode("utf-8", "replace")
        raise SimulationFailed(f"the simulator was stopped after {timeout:g} s{last_lines(said)}") from None
    except OSError as error:
        raise OptisizeError(f"{simulator}: cannot be run: {error.strerror or error}") from None
    said = done.stdout.decode("utf-8", "replace")
    if done.returncode < 0:
        raise SimulationFailed(f"the simulator crashed (signal {-done.returncode}){last_lines(said)}")
    missing = [name for name in wanted if not (folder / name).is_file()]
    if missing:
        raise SimulationFailed(f"the simulator gave no {missing[0]}{last_lines(said)}")
    return said


def last_lines(said: str, count: int = LAST_LINES) -> str:
    """Return the last lines of what the simulator says, as the end of a message."""
    lines = [printable(line.rstrip()) for line in said.splitlines() if line.strip()]
    if not lines:
        return "; it said nothing"
    return "; its last lines:\n" + "\n".join(f"  {line[:200]}" for line in lines[-count:])


def run_all(
    simulator: Path,
    decks: Sequence[str],
    collect: Callable[[Path, str], Collected],
    *,
    workers: int | None = None,
    timeout: float = TIMEOUT,
    wanted: Sequence[str] = (),
    watch: Callable[[int], None] | None = None,
) -> list[Collected | SimulationFailed]:
    """Run many decks side by side, each in a folder of its own that is removed afterwards.

    Args:
        simulator: its path.
        decks: the texts.
        collect: called with the folder and what the simulator says, before the folder goes; may raise SimulationFailed.
        workers: how many run at the same time; the cores that there are where None.
        timeout, wanted: as for `run`.
        watch: called with the number of decks that are done.

    Returns:
        What was collected of each deck, in their order; the failure where one did not run.
    """

    def one(deck: str) -> Collected | SimulationFailed:
        with tempfile.TemporaryDirectory(prefix="optisize-") as name:
            folder = Path(name)
            try:
                return collect(folder, run(simulator, folder, deck, timeout=timeout, wanted=wanted))
            except SimulationFailed as failure:
                return failure

    results: list[Collected | SimulationFailed] = []
    pool = ThreadPoolExecutor(workers or os.cpu_count() or 1)
    try:
        for result in pool.map(one, decks):
            results.append(result)
            if watch is not None:
                watch(len(results))
    finally:
        pool.shutdown(cancel_futures=True)
    return results


@dataclass(frozen=True)
class Plot:
    """The vectors of one analysis by name.

    Attributes:
        names: the row of each vector; parameters of devices are named like ``@m1[id]``, all in small letters.
        data: real or complex, (vectors, points).
    """

    names: dict[str, int]
    data: NDArray[Any]

    def __getitem__(self, name: str) -> NDArray[Any]:
        return self.data[self.names[name.lower()]]

    def __contains__(self, name: str) -> bool:
        return name.lower() in self.names

    def stack(self, names: Sequence[str]) -> NDArray[Any]:
        """Return vectors of the given names, (names, points)."""
        return np.array([self[name] for name in names])


def read_raw(path: Path) -> list[Plot]:
    """Read the plots of a binary raw file (``set filetype=binary``, then ``write``; ``set appendwrite`` for more).

    Raises SimulationFailed for a file that is none, or was cut short.
    """
    try:
        left, plots = path.read_bytes(), []
        while left.strip():
            plot, left = _first_plot(left)
            plots.append(plot)
    except (OSError, ValueError, KeyError, IndexError) as error:
        raise SimulationFailed(f"{path.name}: is no whole raw file of the simulator ({error})") from None
    return plots


def _first_plot(raw: bytes) -> tuple[Plot, bytes]:
    """Return the first plot of a raw file, and what follows it."""
    head, mark, body = raw.partition(_MARK)
    if not mark:
        raise ValueError("it has no binary part")
    lines = head.decode("utf-8", "replace").splitlines()
    fields = dict(line.split(": ", 1) for line in lines if ": " in line)
    count, points = int(fields["No. Variables"]), int(fields["No. Points"])
    start = lines.index("Variables:") + 1
    names: dict[str, int] = {}
    for line in lines[start : start + count]:
        index, name = line.split()[:2]
        names.setdefault(_plain(name), int(index))
    kind: Any = np.complex128 if "complex" in fields["Flags"] else np.float64
    size = count * points
    data = np.frombuffer(body, dtype=kind, count=size).reshape(points, count).T
    return Plot(names, data), body[size * np.dtype(kind).itemsize :]


def _plain(name: str) -> str:
    """Return the name of a vector: parameters of devices are written as ``i(@m1[id])``."""
    inner = name[2:-1]
    return (inner if inner.startswith("@") else name).lower()
