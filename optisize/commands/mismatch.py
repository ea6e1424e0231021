"""How a design holds when the process moves: mismatch and corners."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import Json, app, guarded, print_json

Source = Annotated[
    Path, typer.Argument(metavar="RUN", help="A run directory; or a problem file, with --sizing.", show_default=False)
]
Design = Annotated[int | None, typer.Option("--design", min=1, help="The number of a design on the front.")]
Sizing = Annotated[Path | None, typer.Option("--sizing", help="A sizing file in place of a design.")]


@app.command(epilog="Example: optisize spread results/sample --design 1 --samples 2000")
@guarded
def spread(
    run: Source,
    design: Design = None,
    sizing: Sizing = None,
    samples: Annotated[int, typer.Option(min=20, max=10_000_000, help="Samples of the Monte Carlo.")] = 10_000,
    seed: Annotated[int, typer.Option(min=0, help="The same seed gives the same samples.")] = 1,
    measure: Annotated[list[str] | None, typer.Option("--measure", help="Another measure; may be repeated.")] = None,
    threads: Annotated[int | None, typer.Option(min=1, help="Threads; the samples do not depend on them.")] = None,
    figure: Annotated[Path | None, typer.Option(help="Draw the histograms into this file: .png, .svg or .pdf.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
    as_json: Json = False,
) -> None:
    """Spread of one design by mismatch: distributions, yield with its interval, and the first-order prediction."""
    import os

    from optisize.front.pick import pick
    from optisize.front.spread import OWN, check_measures
    from optisize.front.spread import spread as spread_of
    from optisize.show.plots import check_figure, write_one
    from optisize.show.spread import Counter, draw_spread, print_spread, spread_record

    if figure is not None:
        check_figure("--figure", figure)
    picked = pick(run, design, sizing)
    check_measures(picked.problem, measure or ())
    with Counter(samples, quiet) as watch:
        found = spread_of(
            picked.problem,
            picked.sizes,
            samples,
            seed,
            names=(*OWN, *(measure or ())),
            threads=threads or min(os.cpu_count() or 1, 8),
            watch=watch,
        )
    if figure is not None:
        write_one(draw_spread(found, picked.label), figure)
    print_json(spread_record(found)) if as_json else print_spread(found, picked.label)


@app.command(epilog="Example: optisize corners results/sample --design 1")
@guarded
def corners(
    run: Source,
    design: Design = None,
    sizing: Sizing = None,
    temperature: Annotated[
        list[str] | None,
        typer.Option("--temperature", help='Such as "85 degC", beside the problem\'s; may be repeated.'),
    ] = None,
    as_json: Json = False,
) -> None:
    """Print every measure of one design at every corner of its process."""
    from optisize.front.corners import at_corners
    from optisize.front.pick import pick
    from optisize.show.corners import corners_record, print_corners

    picked = pick(run, design, sizing)
    found = at_corners(picked.problem, picked.sizes, temperature or ())
    print_json(corners_record(found)) if as_json else print_corners(found, picked.label)
