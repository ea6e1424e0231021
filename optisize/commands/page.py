"""The page of a run: its front in one file, to explore in a browser."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import RunPath, app, guarded
from optisize.errors import InputError

SUFFIXES = (".html", ".htm")


@app.command(epilog="Example: optisize page results/sample --to sample.html")
@guarded
def page(
    run: RunPath,
    to: Annotated[Path | None, typer.Option("--to", help="The file; page.html in the run directory otherwise.")] = None,
) -> None:
    """Write one HTML file to explore the front in a browser, offline: linked plots, limits, designs, decks."""
    from optisize.front.run import PAGE, load_run
    from optisize.show.page import write_page

    loaded = load_run(run)
    path = run / PAGE if to is None else to
    if path.is_dir():
        raise InputError(f"--to: found {path}, which is a directory; a file is needed, such as {path / PAGE}")
    if path.suffix not in SUFFIXES:
        raise InputError(f"--to: found {path}; allowed are names that end with {' or '.join(SUFFIXES)}")
    write_page(loaded, path)
    typer.echo(f"{path}: {len(loaded.front)} designs, {path.stat().st_size / 1e6:.1f} MB; open it in a browser")
