"""Fronts of several runs beside each other."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import Json, app, guarded, print_json

Runs = Annotated[list[Path], typer.Argument(metavar="RUN", help="Two or more run directories.", show_default=False)]


@app.command(epilog="Example: optisize compare results/nmos results/pmos --to compare.png")
@guarded
def compare(
    runs: Runs,
    to: Annotated[
        Path | None, typer.Option("--to", help="Draw the fronts over each other into this file: .png, .svg or .pdf.")
    ] = None,
    dpi: Annotated[int, typer.Option(min=50, max=1200, help="Dots per inch of a png.")] = 150,
    as_json: Json = False,
) -> None:
    """Compare the fronts of different problems or stages: what each reaches, and where each is ahead."""
    from optisize.front.fronts import load_fronts
    from optisize.front.leads import levels_of
    from optisize.show.comparison import comparison_record, print_comparison
    from optisize.show.plots import check_figure, write_one

    if to is not None:
        check_figure("--to", to)
    fronts = load_fronts(runs)
    levels = levels_of(fronts)
    if to is not None:
        from optisize.show.overlay import draw_overlay

        write_one(draw_overlay(fronts), to, dpi)
    print_json(comparison_record(fronts, levels)) if as_json else print_comparison(fronts, levels)
