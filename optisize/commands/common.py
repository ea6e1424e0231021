"""What every command shares: the application, one catch for errors, options that are alike."""

from __future__ import annotations

import contextlib
import functools
import json
import signal
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Annotated, Any, TypeVar

import typer

import optisize
from optisize.errors import OptisizeError, one_line

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
            text = str(error) if error.lines else one_line(str(error))
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
Simulator = Annotated[
    str | None,
    typer.Option("--simulator", help="The circuit simulator; otherwise OPTISIZE_NGSPICE, or ngspice on the PATH."),
]
Json = Annotated[bool, typer.Option("--json", help="Print JSON, numbers in SI units.")]


def print_json(data: Any) -> None:
    """Print data as JSON on stdout."""
    typer.echo(json.dumps(data, indent=2, allow_nan=False))


@contextlib.contextmanager
def on_ctrl_c(handler: Any) -> Iterator[None]:
    """Let Ctrl-C do something else for a while, unless it is ignored anyway."""
    before = signal.getsignal(signal.SIGINT)
    if before is not signal.SIG_IGN:
        signal.signal(signal.SIGINT, handler)
    try:
        yield
    finally:
        if signal.getsignal(signal.SIGINT) is handler:
            signal.signal(signal.SIGINT, before)


def stop_once(*_: object) -> None:
    """Stop the search; from here to the end, an impatient second Ctrl-C must not lose what the first has stopped."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    raise KeyboardInterrupt
