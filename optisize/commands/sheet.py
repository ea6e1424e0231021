"""The design sheet: one design on two pages to print, file and hand on."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import app, guarded
from optisize.commands.mismatch import Design, Sizing, Source
from optisize.errors import InputError, nearest

SUFFIXES = (".pdf", ".html")


@app.command(epilog="Example: optisize sheet results/sample --design 16")
@guarded
def sheet(
    run: Source,
    design: Design = None,
    sizing: Sizing = None,
    to: Annotated[
        Path | None,
        typer.Option("--to", help="A file in .pdf or .html, or a directory; the run's own, or beside the sizing."),
    ] = None,
) -> None:
    """Write a design sheet, PDF and HTML: schematic with sizes, operating point, measures, mismatch, origins."""
    from optisize.files import write_bytes
    from optisize.front.pick import pick
    from optisize.show.sheet import make_sheet
    from optisize.show.sheet_html import sheet_html
    from optisize.show.sheet_pdf import sheet_pdf

    if to is not None and not to.is_dir():
        _check_file(to)
    picked = pick(run, design, sizing)
    made = make_sheet(picked, run, design, sizing)
    makers = {".pdf": lambda: sheet_pdf(made), ".html": lambda: sheet_html(made).encode("utf-8")}
    # Both are made before either is written: where one cannot be made, nothing changes.
    contents = {path: makers[path.suffix]() for path in _paths(run, design, sizing, to)}
    for path, data in contents.items():
        write_bytes(path, data)
        typer.echo(str(path))


def _check_file(path: Path) -> None:
    """Raise InputError for a file that is of no such kind, is there already, or would be in no directory."""
    if path.suffix not in SUFFIXES:
        close = nearest(path.suffix, SUFFIXES)
        raise InputError(f'--to: found "{path}"; a file in {" or ".join(SUFFIXES)}, or a directory, is needed{close}')
    if path.exists():
        raise InputError(f"{path}: already exists; give another file with --to, or remove it")


def _paths(run: Path, design: int | None, sizing: Path | None, to: Path | None) -> list[Path]:
    """Return the files to write: one that is named, or both kinds in a directory."""
    if to is not None and not to.is_dir():
        return [to]
    name = f"sheet-{design}" if sizing is None else f"sheet-{sizing.stem}"
    directory = to or (run if sizing is None else sizing.parent)
    return [directory / f"{name}{suffix}" for suffix in SUFFIXES]
