"""The main job: search a problem, and go on with a search."""

from __future__ import annotations

import signal
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from optisize.commands.common import (
    INTERRUPTED,
    Json,
    ProblemPath,
    RunPath,
    Simulator,
    app,
    guarded,
    on_ctrl_c,
    print_json,
    stop_once,
)
from optisize.errors import OptisizeError, listing

if TYPE_CHECKING:
    from optisize.front.run import Run
    from optisize.simulator.resimulate import Kept, Resimulated


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
    resimulated: Annotated[
        bool, typer.Option("--resimulated", help="Leave only designs that hold in the circuit simulator.")
    ] = False,
    simulator: Simulator = None,
    figures: Annotated[bool, typer.Option(help="Draw the figures into the run directory.")] = True,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
    as_json: Json = False,
) -> None:
    """Search a problem: write the run, print its extremes and the limits that bind."""
    from optisize.front import explore
    from optisize.front.run import check_free
    from optisize.problem.load import load_problem, load_sizing
    from optisize.show.terminal import Progress
    from optisize.simulator.ngspice import find_simulator

    program = find_simulator(simulator) if resimulated else None
    loaded = load_problem(problem)
    target = to or Path("results") / problem.stem
    check_free(target)
    chosen = {"seed": seed, "population": population, "generations": generations}
    settings = explore.settings_of(loaded, **{k: v for k, v in chosen.items() if v is not None})
    seeds = load_sizing(start_from, loaded) if start_from else None
    with on_ctrl_c(stop_once):
        with Progress(settings.generations, quiet) as watch:
            run = explore.search(loaded, threads=threads, seeds=seeds, watch=watch, settings=settings)
        checked = None if program is None else _checked(run, program, target, quiet)
        _finish(run, target, figures, as_json, checked=checked)


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


@dataclass(frozen=True)
class _Checked:
    """What the simulator says of a front, and what is left of it; nothing where it was interrupted."""

    before: int
    found: Resimulated | None = None
    kept: Kept | None = None


def _checked(run: Run, simulator: Path, target: Path, quiet: bool) -> _Checked | None:
    """Run a front through the simulator and leave in the run what holds there; an interrupted search as it is."""
    from optisize.show.spread import Counter
    from optisize.simulator import resimulate as work

    if run.info["stopped"] == "interrupted":
        return None
    run.path = target
    before = len(run.front)
    try:
        with on_ctrl_c(stop_once), Counter(before, quiet, "designs simulated") as watch:
            found = work.resimulate_run(run, work.chosen_rows(run), simulator, watch=watch)
    except KeyboardInterrupt:
        return _Checked(before)
    kept = work.keep_what_holds(run, found)
    run.front = kept.run.front
    run.info["designs"] = len(run.front)
    dropped = {str(number): why for number, why in kept.dropped.items()}
    run.info["resimulation"] = {**work.record_of(found), "dropped": dropped}
    return _Checked(before, found, kept)


def _finish(
    run: Run, target: Path, figures: bool, as_json: bool, replace: bool = False, checked: _Checked | None = None
) -> None:
    """Write a run, draw it, print it, and say so if it was interrupted."""
    from optisize.front.run import of_single_designs
    from optisize.front.summary import binding_limits, crowded_sizes, extremes

    failure: list[OptisizeError] = []
    stale = of_single_designs(target) if replace else []

    def draw(directory: Path) -> None:
        """Draw the figures and renew the page that was there; a run without them is better than none."""
        from optisize.show.figures import write_figures
        from optisize.show.page import renew_page

        try:
            renew_page(run, target, directory)
            if not figures:
                return
            write_figures(run, directory)
            if checked is not None and checked.found is not None:
                from optisize.show.resimulation import FIGURE, draw_resimulated

                draw_resimulated(checked.found, "the front as searched", directory / f"{FIGURE}.png")
        except OptisizeError as error:
            failure.append(error)

    with on_ctrl_c(signal.SIG_IGN):
        run.save(target, replace=replace, draw=draw)
    if as_json:
        keys = ("designs", "evaluations", "hypervolume", "seconds", "generations", "seed", "stopped", "archive")
        more = {} if checked is None or checked.kept is None else {"resimulation": run.info["resimulation"]}
        print_json({"run": str(target), **{key: run.info[key] for key in keys}, **more})
    else:
        from optisize.show.terminal import print_search

        print_search(run, extremes(run), binding_limits(run), crowded_sizes(run))
        if checked is not None and checked.kept is not None:
            from optisize.show.resimulation import print_kept

            print_kept(checked.kept, checked.before)
    if stale:
        gone = listing(stale)
        typer.echo(f"optisize: the designs are numbered anew, so these of the old front are gone: {gone}", err=True)
    if failure:
        raise OptisizeError(f"{target}: is written, but not all of its figures: {failure[0]}")
    if run.info["stopped"] == "interrupted":
        typer.echo(f"optisize: interrupted; `optisize resume {target}` goes on", err=True)
        raise typer.Exit(INTERRUPTED)
    if checked is not None and checked.found is None:
        typer.echo(f"optisize: interrupted; the front is as searched: `optisize resimulate {target}`", err=True)
        raise typer.Exit(INTERRUPTED)
