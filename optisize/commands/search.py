"""The main job: search a problem, and go on with a search."""

from __future__ import annotations

import signal
from pathlib import Path
from typing import Annotated, Any

import typer

from optisize.commands.common import (
    INTERRUPTED,
    Json,
    ProblemPath,
    RunPath,
    app,
    guarded,
    on_ctrl_c,
    print_json,
    stop_once,
)
from optisize.errors import OptisizeError


@app.command(epilog="Example: optisize search problems/thermopile-preamplifier.toml")
@guarded
def search(
    problem: ProblemPath,
    to: Annotated[Path | None, typer.Option("--to", help="The run directory; results/NAME of the problem.")] = None,
    start_from: Annotated[Path | None, typer.Option("--from", help="A sizing file to start from.")] = None,
    seed: Annotated[int | None, typer.Option(min=0, help="In place of the problem's.")] = None,
    population: Annotated[int | None, typer.Option(min=8, help="In place of the problem's.")] = None,
    generations: Annotated[int | None, typer.Option(min=1, help="In place of the problem's.")] = None,
    threads: Annotated[int | None, typer.Option(min=1, help="Threads; the front does not depend on them.")] = None,
    figures: Annotated[bool, typer.Option(help="Draw the figures into the run directory.")] = True,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
    as_json: Json = False,
) -> None:
    """Search a problem: write the run, print its extremes and the limits that bind."""
    from optisize.front import explore
    from optisize.front.run import check_free
    from optisize.problem.load import load_problem, load_sizing
    from optisize.show.terminal import Progress

    loaded = load_problem(problem)
    target = to or Path("results") / problem.stem
    check_free(target)
    chosen = {"seed": seed, "population": population, "generations": generations}
    settings = explore.settings_of(loaded, **{k: v for k, v in chosen.items() if v is not None})
    seeds = load_sizing(start_from, loaded) if start_from else None
    with on_ctrl_c(stop_once):
        with Progress(settings.generations, quiet) as watch:
            run = explore.search(loaded, threads=threads, seeds=seeds, watch=watch, settings=settings)
        _finish(run, target, figures, as_json)


@app.command(epilog="Example: optisize resume results/thermopile-preamplifier --generations 400")
@guarded
def resume(
    run: RunPath,
    to: Annotated[Path | None, typer.Option("--to", help="Another run directory; the same one otherwise.")] = None,
    generations: Annotated[int | None, typer.Option(min=1, help="In all; that many more for a finished run.")] = None,
    threads: Annotated[int | None, typer.Option(min=1, help="Threads; the front does not depend on them.")] = None,
    figures: Annotated[bool, typer.Option(help="Draw the figures into the run directory.")] = True,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
    as_json: Json = False,
) -> None:
    """Go on with an interrupted search, bit for bit; a finished one goes on from its front."""
    from optisize.front import explore
    from optisize.front.run import check_free, check_writable, load_run
    from optisize.show.terminal import Progress

    loaded = load_run(run)
    check_writable(run) if to is None else check_free(to)
    settings = loaded.problem.settings if loaded.state is None else loaded.state.settings
    with on_ctrl_c(stop_once):
        with Progress(generations or settings.generations, quiet) as watch:
            again = explore.resume(loaded, generations=generations, threads=threads, watch=watch)
        _finish(again, to or run, figures, as_json, replace=to is None)


def _finish(run: Any, target: Path, figures: bool, as_json: bool, replace: bool = False) -> None:
    """Write a run, draw it, print it, and say so if it was interrupted."""
    from optisize.front.summary import binding_limits, extremes

    failure: list[OptisizeError] = []

    def draw(directory: Path) -> None:
        """Draw the figures; a run without them is better than none."""
        from optisize.show.plots import write_figures

        try:
            write_figures(run, directory)
        except OptisizeError as error:
            failure.append(error)

    with on_ctrl_c(signal.SIG_IGN):
        run.save(target, replace=replace, draw=draw if figures else None)
    if as_json:
        keys = ("designs", "evaluations", "hypervolume", "seconds", "generations", "seed", "stopped", "archive")
        print_json({"run": str(target), **{key: run.info[key] for key in keys}})
    else:
        from optisize.show.terminal import print_search

        print_search(run, extremes(run), binding_limits(run))
    if failure:
        raise OptisizeError(f"{target}: is written, but not all of its figures: {failure[0]}")
    if run.info["stopped"] == "interrupted":
        typer.echo(f"optisize: interrupted; `optisize resume {target}` goes on", err=True)
        raise typer.Exit(INTERRUPTED)
