"""From a SPICE model library, or sweeps of another simulator, to a process with the table law."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, TypeVar

import typer

from optisize.commands.common import Simulator, guarded, process_app
from optisize.errors import InputError, OptisizeError

if TYPE_CHECKING:
    from optisize.process.library import Library
    from optisize.process.tabulated import Tables
    from optisize.simulator.characterise import Plan, Request

_Library = Annotated[
    Path | None, typer.Argument(metavar="LIBRARY", help="The model library; not with --from-csv.", show_default=False)
]
_To = Annotated[
    Path | None,
    typer.Option("--to", help="The process file, such as process/mine.toml; its table goes beside it.", metavar="TOML"),
]
_Many = list[str] | None
Value = TypeVar("Value")


@process_app.command(
    "characterise",
    epilog="Example: optisize process characterise models.lib --section tt --nmos nch --pmos pch --supply '1.8 V' "
    "--to process/mine.toml",
)
@guarded
def characterise(
    library: _Library = None,
    nmos: Annotated[str | None, typer.Option(help="The subcircuit or model of the n-channel transistor.")] = None,
    pmos: Annotated[str | None, typer.Option(help="The subcircuit or model of the p-channel transistor.")] = None,
    to: _To = None,
    section: Annotated[
        str | None, typer.Option(help="The section of corner typical; without any, the whole file is read.")
    ] = None,
    corner: Annotated[
        _Many, typer.Option(help="A further corner, NAME=SECTION, such as slow=ss; may be repeated.")
    ] = None,
    init: Annotated[_Many, typer.Option(help="A section that every corner reads first; may be repeated.")] = None,
    supply: Annotated[str, typer.Option(help="Supply voltage; the table goes a tenth beyond it.")] = "3.3 V",
    temperature: Annotated[_Many, typer.Option(help="May be repeated; 27 degC where not given.")] = None,
    lengths: Annotated[
        str | None, typer.Option(help="Such as '0.28 um, 0.5 um'; as the library's limits suggest where not given.")
    ] = None,
    widths: Annotated[
        str | None, typer.Option(help="Of one finger; as the library's limits suggest where not given.")
    ] = None,
    inner: Annotated[
        str, typer.Option(help="The transistor inside the subcircuits, such as m0, where it is not the only one.")
    ] = "",
    width_key: Annotated[str, typer.Option(help="What the library calls the width of a finger.")] = "w",
    length_key: Annotated[str, typer.Option(help="What it calls the length.")] = "l",
    fingers_key: Annotated[str, typer.Option(help="What it calls the number of fingers, always given as 1.")] = "nf",
    multiple_key: Annotated[str, typer.Option(help="What it calls the number of devices in parallel.")] = "m",
    unit: Annotated[str, typer.Option(help="The unit of its lengths: '1 um' where w=10 is 10 um.")] = "1 m",
    simulator: Simulator = None,
    workers: Annotated[int | None, typer.Option(min=1, help="Simulations at the same time; one a core.")] = None,
    decks_only: Annotated[
        Path | None, typer.Option(help="Write the decks into a new directory and run nothing.", metavar="DIR")
    ] = None,
    from_csv: Annotated[
        Path | None, typer.Option(help="Take sweeps of another simulator in place of a library.", metavar="CSV")
    ] = None,
    junctions: Annotated[
        Path | None, typer.Option(help="With --from-csv: capacitances of the junctions.", metavar="CSV")
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Make the table again; the process file stays.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress on stderr.")] = False,
) -> None:
    """Make a process with the table law from a SPICE model library: sweeps through the circuit simulator."""
    from optisize.simulator.tablefile import check_target, save
    from optisize.simulator.writedecks import write_decks

    temperatures = _quantities("--temperature", temperature or ["27 degC"], "K")
    volts = _quantities("--supply", [supply], "V")[0]
    if not 0.1 <= volts <= 100.0:
        raise InputError(f'--supply: found "{supply}"; 100 mV to 100 V are allowed')
    if from_csv is not None:
        if library is not None or decks_only is not None:
            raise InputError("--from-csv: found with a library; one of them is allowed")
        target = check_target(_needed(to, "--to", "where the process file goes"), replace)
        from optisize.simulator.fromcsv import tables_from_csv

        save(target, tables_from_csv(from_csv, junctions, temperatures[0]), None, volts, replace)
        typer.echo(_told(target, replace))
        return
    if junctions is not None:
        raise InputError("--junctions: goes with --from-csv")
    path = _needed(library, "LIBRARY", "the path of the model library")
    keys = {"width": width_key, "length": length_key, "fingers": fingers_key, "multiple": multiple_key, "inner": inner}
    read = _library(
        path,
        (_needed(nmos, "--nmos", "the n-channel device"), _needed(pmos, "--pmos", "the p-channel device")),
        init or [],
        _sections(section, corner or []),
        _quantities("--unit", [unit], "m")[0],
        keys,
    )
    request = _request(read, volts, temperatures, lengths, widths)
    if decks_only is not None:
        typer.echo(write_decks(request, decks_only))
        return
    target = check_target(_needed(to, "--to", "where the process file goes"), replace)
    planned, tables = _simulated(request, simulator, workers, quiet)
    save(target, tables, planned, volts, replace)
    typer.echo(_told(target, replace))


def _needed(value: Value | None, option: str, what: str) -> Value:
    if value is None:
        raise InputError(f"{option}: is missing; {what} is needed")
    return value


def _quantities(option: str, texts: list[str], unit: str) -> tuple[float, ...]:
    """Return quantities of an option; raises InputError for the first that is none."""
    from optisize.quantities import QuantityError, read

    values = []
    for text in texts:
        try:
            value = read(text.strip(), unit)
        except QuantityError as error:
            raise InputError(f'{option}: found "{text}"; {error}') from None
        if value <= 0.0 or (unit == "K" and not 150.0 < value < 600.0):
            raise InputError(f'{option}: found "{text}"; it is out of range')
        values.append(value)
    return tuple(values)


def _sections(section: str | None, corners: list[str]) -> dict[str, str]:
    """Return the section of each corner, typical first."""
    sections = {} if section is None and corners else {"typical": section or ""}
    for text in corners:
        name, equals, value = text.partition("=")
        if not (equals and name and value):
            raise InputError(f'--corner: found "{text}"; NAME=SECTION is needed, such as slow=ss')
        if name in sections:
            raise InputError(f'--corner: "{name}" is there twice')
        sections[name] = value
    return sections


def _library(
    path: Path, names: tuple[str, str], init: list[str], sections: dict[str, str], unit: float, keys: dict[str, str]
) -> Library:
    from optisize.files import validated
    from optisize.process.library import Library

    devices = {key: {"name": name, **keys} for key, name in zip(("nmos", "pmos"), names, strict=True)}
    data = {"path": path.absolute(), "init_sections": init, "sections": sections, "unit": unit, **devices}
    return validated(Library, data, "the command line")


def _request(
    library: Library, supply: float, temperatures: tuple[float, ...], lengths: str | None, widths: str | None
) -> Request:
    from optisize.simulator.characterise import Request

    chosen = {
        name: _quantities(f"--{name}", text.split(",") if text else [], "m")
        for name, text in (("lengths", lengths), ("widths", widths))
    }
    both = {name: dict.fromkeys(("n", "p"), values) for name, values in chosen.items()}
    return Request(library, supply, temperatures, both["lengths"], both["widths"])


def _simulated(request: Request, simulator: str | None, workers: int | None, quiet: bool) -> tuple[Plan, Tables]:
    from optisize.show.spread import Counter
    from optisize.simulator.characterise import characterise as work
    from optisize.simulator.characterise import plan
    from optisize.simulator.ngspice import find_simulator

    try:
        program = find_simulator(simulator)
    except InputError:
        raise
    except OptisizeError as error:
        raise OptisizeError(f"{error}, and here --decks-only and --from-csv work with another simulator") from None
    planned = plan(request, program)
    with Counter(len(planned.all_sweeps()), quiet, "sweeps") as watch:
        return planned, work(planned, program, workers=workers, watch=watch)


def _told(target: Path, replaced: bool) -> str:
    from optisize.simulator.tablefile import table_of

    if replaced:
        return f"{table_of(target)}: made again"
    return f"{target} and {table_of(target)}: fill in what {target.name} marks, then: optisize process show {target}"
