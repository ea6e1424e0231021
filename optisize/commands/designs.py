"""Designs of a run, and sizings by hand: tables and assessment."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import Json, ProblemPath, RunPath, app, guarded, print_json
from optisize.errors import InputError, NothingFeasible


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
    if where and not len(table):
        wanted = " and ".join(where)
        raise NothingFeasible(f"{run}: no design has {wanted}; `optisize choose` with the same names the nearest")
    if sort is not None:
        table = choose.sort(loaded, table, sort)
    if as_csv:
        typer.echo(to_csv(table), nl=False)
    elif as_json:
        print_json([{str(k): json_number(v) for k, v in row.items()} for row in table.to_dict("records")])
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
    """Assess a manual sizing: its measures, its limits, the designs of a front that beat it, and the first moves."""
    from optisize.front.assess import assess_sizing
    from optisize.front.sensitivity import sensitivity as sensitivity_of
    from optisize.problem.load import load_problem, load_sizing
    from optisize.show.assessment import assessment_record, print_assessment
    from optisize.show.sensitivity import print_sensitivity, sensitivity_record
    from optisize.show.terminal import print_caution

    loaded = load_problem(problem)
    sizes = load_sizing(sizing, loaded)
    report = assess_sizing(loaded, sizes, against, str(sizing))
    found = sensitivity_of(loaded, sizes) if sensitivity else None
    if as_json:
        data = assessment_record(report)
        print_json(data if found is None else {**data, "sensitivity": sensitivity_record(loaded, found)})
        return
    print_assessment(report)
    if found is not None:
        print_sensitivity(loaded, found)
    print_caution()
