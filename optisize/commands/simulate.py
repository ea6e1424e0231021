"""What leads to the circuit simulator: decks of designs, and designs through it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from optisize.commands.common import Json, Simulator, app, guarded, print_json
from optisize.commands.mismatch import Design, Sizing, Source
from optisize.errors import InputError

if TYPE_CHECKING:
    from optisize.front.run import Run
    from optisize.simulator.resimulate import Resimulated

Measures = Annotated[
    list[str] | None,
    typer.Option("--measure", help="In place of those of goals and limits; all for the catalogue; may be repeated."),
]


@app.command(epilog="Example: optisize deck results/sample --design 16 --to stage.sp")
@guarded
def deck(
    run: Source,
    design: Design = None,
    sizing: Sizing = None,
    every: Annotated[bool, typer.Option("--all", help="A deck for every design of the front, with --to.")] = False,
    to: Annotated[
        Path | None, typer.Option("--to", help="A file, or a directory; the deck goes to stdout otherwise.")
    ] = None,
    measure: Measures = None,
) -> None:
    """Write a SPICE deck: the sized stage as a subcircuit with its bias, and a bench for every measure."""
    from optisize.files import write_text
    from optisize.front.pick import pick
    from optisize.simulator.deck import benched, write_deck

    if every:
        if design is not None or sizing is not None:
            raise InputError("--all: found with --design or --sizing; one of them is allowed")
        if to is None:
            raise InputError("--all: needs a directory for the decks, such as --to decks")
        typer.echo(_write_all(run, to, measure))
        return
    picked = pick(run, design, sizing)
    made = write_deck(picked.problem, picked.sizes, picked.label, benched(picked.problem, measure))
    if to is None:
        typer.echo(made.text, nl=False)
        return
    name = f"design-{design}.sp" if design is not None else f"{sizing.stem if sizing else 'stage'}.sp"
    path = to / name if to.is_dir() else to
    if path.exists():
        raise InputError(f"{path}: already exists; give another file with --to, or remove it")
    write_text(path, made.text)
    count = len(made.measures)
    typer.echo(f"{path}: {count} measure{'s' * (count != 1)}; run it with ngspice -b {path}")


def _write_all(source: Path, to: Path, measure: list[str] | None) -> str:
    """Write a deck for every design of a run into a new directory, whole or not at all; say what was written."""
    from optisize.front.run import check_free, load_run
    from optisize.front.table import sizes_of
    from optisize.simulator.deck import benched, write_decks

    run = load_run(source)
    check_free(to)
    if not len(run.front):
        raise InputError(f"{source}: its front is empty")
    numbers = [int(n) for n in run.front["design"]]
    measures = benched(run.problem, measure)
    count = write_decks(run.problem, sizes_of(run.problem, run.front), numbers, measures, to, str(source))
    return f"{to}: {count} decks"


@app.command(epilog="Example: optisize resimulate results/sample --sample 20")
@guarded
def resimulate(
    run: Source,
    design: Design = None,
    sizing: Sizing = None,
    sample: Annotated[int | None, typer.Option(min=1, help="That many designs, evenly along the front.")] = None,
    measure: Measures = None,
    simulator: Simulator = None,
    workers: Annotated[int | None, typer.Option(min=1, help="Simulations at the same time; one a core.")] = None,
    figures: Annotated[bool, typer.Option(help="Draw the figure into the run directory.")] = True,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
    as_json: Json = False,
) -> None:
    """Run designs through the circuit simulator: predicted beside simulated; the run gets the simulated columns."""
    from optisize.front.pick import pick
    from optisize.front.run import check_writable, load_run
    from optisize.simulator import resimulate as work
    from optisize.simulator.ngspice import find_simulator

    if sample is not None and (design is not None or sizing is not None):
        raise InputError("--sample: found with --design or --sizing; one of them is allowed")
    program = find_simulator(simulator)
    if sizing is not None:
        picked = pick(run, None, sizing)
        problem, sizes, numbers, label = picked.problem, picked.sizes, [1], picked.label
        with _counter(1, quiet) as watch:
            found = work.resimulate(problem, sizes, numbers, program, measures=measure, workers=workers, watch=watch)
        _print(found, label, as_json)
        return
    loaded = load_run(run)
    check_writable(run)
    rows = work.chosen_rows(loaded, design, sample)
    with _counter(len(rows), quiet) as watch:
        found = work.resimulate_run(loaded, rows, program, measures=measure, workers=workers, watch=watch)
    loaded.front = work.with_columns(loaded.front, found)
    if design is None:
        loaded.info["resimulation"] = work.record_of(found)
    _save(loaded, found, run, figures and design is None)
    _print(found, f"design {design} of {run}" if design is not None else str(run), as_json)


def _print(found: Resimulated, label: str, as_json: bool) -> None:
    from optisize.show.resimulation import print_resimulated, resimulated_record

    print_json(resimulated_record(found)) if as_json else print_resimulated(found, label)


def _counter(count: int, quiet: bool) -> Any:
    from optisize.show.spread import Counter

    return Counter(count, quiet, "designs simulated")


def _save(run: Run, found: Resimulated, target: Path, figure: bool) -> None:
    """Write a run that was read back with its simulated columns into its place; its other figures stay."""
    from optisize.front.run import copy_figures
    from optisize.show.page import renew_page
    from optisize.show.resimulation import FIGURE, draw_resimulated

    def draw(directory: Path) -> None:
        copy_figures(target, directory)
        renew_page(run, target, directory)
        if figure:
            draw_resimulated(found, str(target), directory / f"{FIGURE}.png")

    run.save(target, replace=True, draw=draw)
