"""The command line: parse, call, print. Heavy modules are imported by the command that needs them."""

from __future__ import annotations

import contextlib
import functools
import json
import os
import signal
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Annotated, Any, TypeVar

import typer

import optisize
from optisize.errors import InputError, NothingFeasible, OptisizeError, nearest, one_line

Command = TypeVar("Command", bound=Callable[..., Any])

INTERRUPTED = 130
app = typer.Typer(
    name="optisize",
    help="Sizes the input stage of an amplifier, comparator or sensor front end: a problem file in, "
    "a front of finished sizings out.",
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)
process_app = typer.Typer(help="Built-in processes and process files.", no_args_is_help=True)
app.add_typer(process_app, name="process")

_debug = False


def guarded(command: Command) -> Command:
    """Turn errors into one message on stderr and an exit code; with --debug let them through."""

    @functools.wraps(command)
    def run(*args: Any, **options: Any) -> Any:
        try:
            return command(*args, **options)
        except (typer.Exit, typer.Abort):
            raise
        except KeyboardInterrupt:
            typer.echo("optisize: interrupted", err=True)
            raise typer.Exit(INTERRUPTED) from None
        except BrokenPipeError:
            sys.stderr.close()
            raise typer.Exit(1) from None
        except OptisizeError as error:
            if _debug:
                raise
            text = str(error) if isinstance(error, NothingFeasible) else one_line(str(error))
            typer.echo(f"optisize: {text}", err=True)
            raise typer.Exit(error.exit_code) from None
        except OSError as error:
            if _debug:
                raise
            text = one_line(f"{error.filename or 'output'}: {error.strerror or error}")
            typer.echo(f"optisize: {text}", err=True)
            raise typer.Exit(1) from None
        except Exception as error:
            if _debug:
                raise
            text = one_line(f"{type(error).__name__}: {error}", 300)
            typer.echo(f"optisize: internal error: {text} (optisize --debug … shows where)", err=True)
            raise typer.Exit(1) from None

    return run  # type: ignore[return-value]


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"optisize {optisize.__version__}")
        raise typer.Exit


@app.callback()
def common(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
    debug: Annotated[bool, typer.Option("--debug", help="Show the traceback of an error.")] = False,
) -> None:
    """Hold the options of every command."""
    global _debug
    _debug = debug


ProblemPath = Annotated[Path, typer.Argument(metavar="PROBLEM.toml", help="The problem file.", show_default=False)]
RunPath = Annotated[Path, typer.Argument(metavar="RUN", help="A run directory.", show_default=False)]
Json = Annotated[bool, typer.Option("--json", help="Print JSON, numbers in SI units.")]


def _print_json(data: Any) -> None:
    typer.echo(json.dumps(data, indent=2, allow_nan=False))


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

    loaded = load_problem(problem)
    target = to or Path("results") / problem.stem
    check_free(target)
    chosen = {"seed": seed, "population": population, "generations": generations}
    settings = explore.settings_of(loaded, **{k: v for k, v in chosen.items() if v is not None})
    seeds = load_sizing(start_from, loaded) if start_from else None
    with _on_ctrl_c(_stop_once):
        with _progress(settings.generations, quiet) as watch:
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

    loaded = load_run(run)
    check_writable(run) if to is None else check_free(to)
    settings = loaded.problem.settings if loaded.state is None else loaded.state.settings
    with _on_ctrl_c(_stop_once):
        with _progress(generations or settings.generations, quiet) as watch:
            again = explore.resume(loaded, generations=generations, threads=threads, watch=watch)
        _finish(again, to or run, figures, as_json, replace=to is None)


class _progress:
    """Shows a search on stderr while it runs."""

    def __init__(self, budget: int, quiet: bool) -> None:
        from optisize.show.terminal import Progress

        self._progress = Progress(budget, quiet)

    def __enter__(self) -> Any:
        return self._progress

    def __exit__(self, *_: object) -> None:
        self._progress.close()


@contextlib.contextmanager
def _on_ctrl_c(handler: Any) -> Iterator[None]:
    """Let Ctrl-C do something else for a while, unless it is ignored anyway."""
    before = signal.getsignal(signal.SIGINT)
    if before is not signal.SIG_IGN:
        signal.signal(signal.SIGINT, handler)
    try:
        yield
    finally:
        if signal.getsignal(signal.SIGINT) is handler:
            signal.signal(signal.SIGINT, before)


def _stop_once(*_: object) -> None:
    """Stop the search; from here to the end, an impatient second Ctrl-C must not lose what the first has stopped."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    raise KeyboardInterrupt


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

    with _on_ctrl_c(signal.SIG_IGN):
        run.save(target, replace=replace, draw=draw if figures else None)
    if as_json:
        keys = ("designs", "evaluations", "hypervolume", "seconds", "generations", "seed", "stopped", "archive")
        _print_json({"run": str(target), **{key: run.info[key] for key in keys}})
    else:
        from optisize.show.terminal import print_search

        print_search(run, extremes(run), binding_limits(run))
    if failure:
        raise OptisizeError(f"{target}: is written, but not all of its figures: {failure[0]}")
    if run.info["stopped"] == "interrupted":
        typer.echo(f"optisize: interrupted; `optisize resume {target}` goes on", err=True)
        raise typer.Exit(INTERRUPTED)


@app.command(epilog='Example: optisize front results/sample --where "gain>=20 dB" --sort supply_current')
@guarded
def front(
    run: RunPath,
    sort: Annotated[str | None, typer.Option(help="A measure or size; best first for a goal.")] = None,
    where: Annotated[list[str] | None, typer.Option(help='A condition such as "gain>=40 dB"; may be repeated.')] = None,
    as_csv: Annotated[bool, typer.Option("--csv", help="Print CSV with every column, in SI units.")] = False,
    as_json: Json = False,
) -> None:
    """Print the front of a run as a table."""
    from optisize.front import choose
    from optisize.front.run import load_run
    from optisize.front.table import to_csv
    from optisize.show.terminal import json_number, print_front

    if as_csv and as_json:
        raise InputError("--csv and --json: found both; one of them is allowed")
    loaded = load_run(run)
    table = choose.where(loaded.front, where or [])
    if sort is not None:
        table = choose.sort(loaded, table, sort)
    if as_csv:
        typer.echo(to_csv(table), nl=False)
    elif as_json:
        _print_json([{str(k): json_number(v) for k, v in row.items()} for row in table.to_dict("records")])
    else:
        print_front(loaded, table)


@app.command(epilog="Example: optisize assess problems/thermopile-preamplifier.toml sizing.toml --sensitivity")
@guarded
def assess(
    problem: ProblemPath,
    sizing: Annotated[Path, typer.Argument(metavar="SIZING.toml", help="A value for every size.", show_default=False)],
    against: Annotated[
        Path | None, typer.Option(help="A run to compare with; the newest one of this problem under results/.")
    ] = None,
    sensitivity: Annotated[
        bool, typer.Option("--sensitivity", help="How each measure moves with each size, by 1 % and by one step.")
    ] = False,
    as_json: Json = False,
) -> None:
    """Assess a manual sizing: its measures, its limits, and the designs of a front that beat it."""
    from optisize.front.assess import assess_sizing
    from optisize.front.sensitivity import sensitivity as sensitivity_of
    from optisize.problem.load import load_problem, load_sizing
    from optisize.show.sensitivity import print_sensitivity, sensitivity_record
    from optisize.show.terminal import json_number, print_assessment, print_caution

    loaded = load_problem(problem)
    sizes = load_sizing(sizing, loaded)
    report = assess_sizing(loaded, sizes, against, str(sizing))
    found = sensitivity_of(loaded, sizes) if sensitivity else None
    if as_json:
        data = {
            "sizes": report.sizes,
            "measures": {k: json_number(v) for k, v in report.measures.items()},
            "limits": [{**row, "value": json_number(row["value"])} for row in report.limits],
            "feasible": report.feasible,
            "against": report.against,
            "dominated_by": report.dominated_by,
        }
        _print_json(data if found is None else {**data, "sensitivity": sensitivity_record(loaded, found)})
        return
    print_assessment(loaded, report)
    if found is not None:
        print_sensitivity(loaded, found)
    print_caution()


@app.command(epilog="Example: optisize plot results/sample --format svg")
@guarded
def plot(
    run: RunPath,
    to: Annotated[Path | None, typer.Option("--to", help="A directory; that of the run otherwise.")] = None,
    formats: Annotated[list[str] | None, typer.Option("--format", help="png, svg or pdf; may be repeated.")] = None,
    dpi: Annotated[int, typer.Option(min=50, max=1200, help="Dots per inch of a png.")] = 150,
) -> None:
    """Draw the trade-offs between the goals and the history of the search."""
    from optisize.front.run import load_run
    from optisize.show.plots import write_figures

    for kind in formats or []:
        if kind not in ("png", "svg", "pdf"):
            raise InputError(
                f'--format: found "{kind}"; allowed are png, svg, pdf{nearest(kind, ("png", "svg", "pdf"))}'
            )
    loaded = load_run(run)
    directory = to or run
    if not directory.is_dir():
        raise InputError(f"{directory}: there is no such directory")
    for path in write_figures(loaded, directory, formats or ["png"], dpi):
        typer.echo(str(path))


@app.command(epilog="Example: optisize measures")
@guarded
def measures(as_json: Json = False) -> None:
    """Print the catalogue of measures: what can be a goal or a limit."""
    from optisize.show.catalogue import measure_records, print_measures

    _print_json(measure_records()) if as_json else print_measures()


@app.command(epilog="Example: optisize schema problem")
@guarded
def schema(
    kind: Annotated[str, typer.Argument(metavar="KIND", help="problem, process or sizing.")] = "problem",
) -> None:
    """Print the JSON Schema of a problem, process or sizing file."""
    from optisize.problem.schema import ProblemFile, SizingFile
    from optisize.process.card import Process

    models: dict[str, Any] = {"problem": ProblemFile, "process": Process, "sizing": SizingFile}
    if kind not in models:
        raise InputError(f'"{kind}" has no schema; allowed are {", ".join(models)}{nearest(kind, models)}')
    _print_json(models[kind].model_json_schema())


@app.command(epilog="Example: optisize new my-stage")
@guarded
def new(name: Annotated[str, typer.Argument(metavar="NAME", help="The file becomes NAME.toml.")]) -> None:
    """Write a commented problem file to start from."""
    from optisize.files import write_text
    from optisize.problem.template import new_problem

    path = Path(name if name.endswith(".toml") else f"{name}.toml")
    if path.name == ".toml":
        raise InputError(f'NAME: found "{name}"; the name of a file is needed, such as my-stage')
    if os.path.lexists(path):
        raise InputError(f"{path}: already exists")
    if not path.parent.is_dir():
        raise InputError(f"{path.parent}: there is no such directory")
    write_text(path, new_problem(path.stem))
    typer.echo(f"{path} is written; edit it, then: optisize search {path}")


@process_app.command("list", epilog="Example: optisize process list")
@guarded
def process_list(as_json: Json = False) -> None:
    """List the built-in processes."""
    from optisize.show.catalogue import print_processes, process_records

    _print_json(process_records()) if as_json else print_processes()


@process_app.command("show", epilog="Example: optisize process show generic-180")
@guarded
def process_show(
    name: Annotated[str, typer.Argument(metavar="NAME", help="A built-in process, or the path of a process file.")],
    as_json: Json = False,
) -> None:
    """Show a process: every parameter, and gm/I, intrinsic gain and speed against inversion level."""
    from optisize.process.card import load_process
    from optisize.show.catalogue import print_process, process_record

    process = load_process(name)
    _print_json(process_record(process)) if as_json else print_process(name, process)


def main() -> None:
    """Run the command line."""
    app()


if __name__ == "__main__":
    main()
