"""What there is to refer to: measures, schemas, processes, and a problem file to start from."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Annotated, Any

import typer

from optisize.commands.common import Json, app, guarded, print_json, process_app
from optisize.errors import InputError, nearest


@app.command(epilog="Example: optisize measures")
@guarded
def measures(as_json: Json = False) -> None:
    """Print the catalogue of measures: what can be a goal or a limit."""
    from optisize.show.catalogue import measure_records, print_measures

    print_json(measure_records()) if as_json else print_measures()


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
    print_json(models[kind].model_json_schema())


@app.command(epilog="Example: optisize new my-stage --load source --tail cascode")
@guarded
def new(
    name: Annotated[str, typer.Argument(metavar="NAME", help="The file becomes NAME.toml.")],
    input: Annotated[str | None, typer.Option("--input", help="nmos or pmos.")] = None,
    load: Annotated[str | None, typer.Option("--load", help="resistor, diode, mirror or source.")] = None,
    tail: Annotated[str | None, typer.Option("--tail", help="ideal, resistor, single or cascode.")] = None,
    output: Annotated[str | None, typer.Option("--output", help="single-ended or differential.")] = None,
    form: Annotated[str | None, typer.Option("--form", help="simple or telescopic.")] = None,
) -> None:
    """Write a commented problem file to start from, with every size that the stage needs."""
    from optisize.files import write_text
    from optisize.problem.template import new_problem
    from optisize.stage.topology import STAGE_WORDS

    given = {"input": input, "load": load, "tail": tail, "output": output, "form": form}
    chosen = {key: value for key, value in given.items() if value is not None}
    for key, value in chosen.items():
        if value not in STAGE_WORDS[key]:
            allowed = f"{', '.join(STAGE_WORDS[key])}{nearest(value, STAGE_WORDS[key])}"
            raise InputError(f'--{key}: found "{value}"; allowed are {allowed}')
    path = Path(name if name.endswith(".toml") else f"{name}.toml")
    if path.name == ".toml":
        raise InputError(f'NAME: found "{name}"; the name of a file is needed, such as my-stage')
    if os.path.lexists(path):
        raise InputError(f"{path}: already exists")
    if not path.parent.is_dir():
        raise InputError(f"{path.parent}: there is no such directory")
    write_text(path, new_problem(path.stem, **chosen))
    typer.echo(f"{path} is written; edit it, then: optisize search {path}")


@process_app.command("list", epilog="Example: optisize process list")
@guarded
def process_list(as_json: Json = False) -> None:
    """List the built-in processes."""
    from optisize.show.catalogue import print_processes, process_records

    print_json(process_records()) if as_json else print_processes()


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
    print_json(process_record(process)) if as_json else print_process(name, process)
