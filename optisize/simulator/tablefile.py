"""A table and its process file on disk: both whole, or neither."""

from __future__ import annotations

import os
from pathlib import Path

from optisize.errors import InputError
from optisize.files import write_beside, write_text
from optisize.front.run import check_writable
from optisize.process.tabulated import Tables, write_tables
from optisize.simulator.characterise import Plan
from optisize.simulator.processfile import process_text


def table_of(target: Path) -> Path:
    """Return where the table of a process file is."""
    return target.with_suffix(".nc")


def check_target(target: Path, replace: bool) -> Path:
    """Return the path of the process file, which is new, or there already if its table is to be replaced.

    Raises InputError when it cannot be, OptisizeError when it could not be written.
    """
    if target.suffix != ".toml":
        raise InputError(f"--to: found {target}; the name of a process file is needed, such as process/mine.toml")
    if replace and not target.is_file():
        raise InputError(f"--replace: {target} is not there")
    for path in (target, table_of(target)):
        if not replace and os.path.lexists(path):
            raise InputError(
                f"{path}: already exists; give another name with --to, or make its table anew with --replace"
            )
    check_writable(target)
    return target


def save(target: Path, tables: Tables, planned: Plan | None, supply: float, replace: bool) -> None:
    """Write the table, and its process file unless that stays.

    Args:
        target: of the process file.
        tables: to be written.
        planned: how they were made; None if not from a library.
        supply: of the process [V].
        replace: whether only the table is written.
    """
    library = None if planned is None else planned.request.library
    text = process_text(tables, planned, library, supply, target)
    path = table_of(target)

    def fill(beside: Path) -> None:
        write_tables(beside, tables)
        if not replace:
            write_text(target, text)

    write_beside(path, fill)
