"""Figures of a run for a design review."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from optisize.commands.common import RunPath, app, guarded
from optisize.errors import InputError, nearest

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from optisize.front.pick import Picked

MISMATCH = "mismatch"


@app.command(epilog="Example: optisize plot results/sample --design 16 --format svg --to figures")
@guarded
def plot(
    run: RunPath,
    only: Annotated[
        list[str] | None,
        typer.Option("--only", help="trade-offs, parallel, history or mismatch; may be repeated; all otherwise."),
    ] = None,
    design: Annotated[
        int | None, typer.Option("--design", min=1, help="Mark this design, and draw its spread by mismatch.")
    ] = None,
    samples: Annotated[int, typer.Option(min=20, max=10_000_000, help="Samples of the mismatch.")] = 10_000,
    to: Annotated[Path | None, typer.Option("--to", help="A directory; that of the run otherwise.")] = None,
    formats: Annotated[list[str] | None, typer.Option("--format", help="png, svg or pdf; may be repeated.")] = None,
    dpi: Annotated[int, typer.Option(min=50, max=1200, help="Dots per inch of a png.")] = 150,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
) -> None:
    """Draw the trade-offs between the goals, goals and sizes side by side, the search, and a design's mismatch."""
    from optisize.front.pick import pick
    from optisize.front.run import load_run
    from optisize.show.figures import DRAWINGS, drawable, mismatch_name, write_figures
    from optisize.show.plots import FORMATS, write_formats

    for kind in formats or []:
        if kind not in FORMATS:
            raise InputError(f'--format: found "{kind}"; allowed are {", ".join(FORMATS)}{nearest(kind, FORMATS)}')
    known = (*DRAWINGS, MISMATCH)
    for name in only or []:
        if name not in known:
            raise InputError(f'--only: found "{name}"; allowed are {", ".join(known)}{nearest(name, known)}')
        if name == MISMATCH and design is None:
            raise InputError(f"--only: found {MISMATCH}; it needs a design, such as --design 1")
    loaded = load_run(run)
    picked = None if design is None else pick(run, design)
    directory = to or run
    kinds = list(dict.fromkeys(formats or ["png"]))
    wanted = drawable(loaded, only)
    paths = write_figures(loaded, directory, kinds, dpi, names=wanted, design=design)
    if picked is not None and design is not None and (not only or MISMATCH in only):
        figure = _mismatch(picked, samples, quiet)
        paths += write_formats(figure, directory, mismatch_name(design), kinds, dpi)
    for path in paths:
        typer.echo(str(path))


def _mismatch(picked: Picked, samples: int, quiet: bool) -> Figure:
    """Draw the histograms of one design, of the same samples as `spread` has."""
    import os

    from optisize.front.spread import OWN
    from optisize.front.spread import spread as spread_of
    from optisize.show.spread import Counter, draw_spread

    threads = min(os.cpu_count() or 1, 8)
    with Counter(samples, quiet) as watch:
        found = spread_of(picked.problem, picked.sizes, samples, names=OWN, threads=threads, watch=watch)
    return draw_spread(found, picked.label)
