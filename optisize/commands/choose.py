"""One design of a front for a wish, or a short list."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from optisize.commands.common import Json, RunPath, app, guarded, print_json
from optisize.errors import InputError, NothingFeasible


@app.command(epilog='Example: optisize choose results/sample --least supply_current --where "gain>=20 dB"')
@guarded
def choose(
    run: RunPath,
    least: Annotated[str | None, typer.Option(help="The design with least of this measure or size.")] = None,
    most: Annotated[str | None, typer.Option(help="The design with most of this measure or size.")] = None,
    where: Annotated[list[str] | None, typer.Option(help='A condition such as "gain>=40 dB"; may be repeated.')] = None,
    wish: Annotated[
        list[str] | None, typer.Option(help='The design nearest to a wish such as "gain=50 dB"; may be repeated.')
    ] = None,
    knee: Annotated[bool, typer.Option("--knee", help="The knee of the front; so where nothing is asked.")] = False,
    short: Annotated[int | None, typer.Option(min=1, help="A short list of so many designs along the front.")] = None,
    save: Annotated[Path | None, typer.Option(help="Write the design as a sizing file.", metavar="SIZING.toml")] = None,
    as_json: Json = False,
) -> None:
    """Choose one design of a front: why this one, how it is drawn, and what its neighbours give and cost.

    Where no design meets the conditions or wishes it is the nearest one, with what is missing; the exit code is 3.
    """
    from optisize.front.aims import read_wishes
    from optisize.front.choice import check_new
    from optisize.front.run import load_run
    from optisize.front.wish import choose as choose_from
    from optisize.front.wish import short_list
    from optisize.show.choice import choice_record, print_choice, print_short_list, short_list_record

    if short is not None:
        given = {"least": least is not None, "most": most is not None, "wish": wish, "knee": knee, "save": save}
        other = next((name for name, there in given.items() if there), None)
        if other is not None:
            raise InputError(f"--short and --{other}: found both; one of them is allowed")
    wishes = read_wishes(wish or [])
    if save is not None:
        check_new(save)
    loaded = load_run(run)
    if short is not None:
        few = short_list(loaded, short, where or [])
        if few.meeting:
            print_json(short_list_record(loaded, few)) if as_json else print_short_list(loaded, few)
            return
    choice = choose_from(loaded, least=least, most=most, where=where or [], wishes=wishes, knee=knee)
    if save is not None:
        choice.save(save)
    if as_json:
        print_json({"run": str(run), **choice_record(choice), "saved": None if save is None else str(save)})
    else:
        print_choice(choice)
        if save is not None:
            typer.echo(f"sizing file: {save}")
    if not choice.met:
        missing = "; ".join(map(str, choice.missing))
        raise NothingFeasible(f"no design of {run} meets all that was asked; {choice.label} is the nearest: {missing}")
