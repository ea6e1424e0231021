"""The decks of a characterisation, written and not run: for another machine, or as a pattern for another simulator."""

from __future__ import annotations

import os
from pathlib import Path

from optisize.errors import InputError
from optisize.files import write_directory
from optisize.simulator import fromcsv
from optisize.simulator.characterise import Request, plan

_README = """\
Decks that sweep {devices} for optisize, {count} of them, in the words of ngspice. Another simulator needs the same
sweeps: every transistor is one finger (one device, nf = 1), by itself, at

lengths {lengths} um
widths  {widths} um

of the n-channel transistor, and

lengths {p_lengths} um
widths  {p_widths} um

of the p-channel one. Write what comes of them into a CSV file and make the process with

    optisize process characterise --from-csv sweeps.csv --junctions junctions.csv --to NAME.toml

{format}"""


def write_decks(request: Request, to: Path) -> str:
    """Write the decks into a new directory, whole or not at all; say what was written.

    Raises InputError when the directory is there or the library is not, OptisizeError when it cannot be written.
    """
    if os.path.lexists(to):
        raise InputError(f"{to}: already exists; give another directory with --decks-only, or remove it")
    planned = plan(request, None)
    jobs = planned.all_sweeps()
    n, p = planned.sizes["n"], planned.sizes["p"]
    microns = [", ".join(f"{x * 1e6:g}" for x in row) for row in (n.lengths, n.widths, p.lengths, p.widths)]
    library = planned.request.library
    readme = _README.format(
        devices=f"{library.nmos.name} and {library.pmos.name} of {library.path.name}",
        count=len(jobs),
        lengths=microns[0],
        widths=microns[1],
        p_lengths=microns[2],
        p_widths=microns[3],
        format=(fromcsv.__doc__ or "").partition("\n\n")[2],
    )
    files = {"README": readme}
    for number, (condition, channel, sweep) in enumerate(jobs, start=1):
        celsius = f"{condition.temperature - 273.15:g}"
        kind = sweep.title.split(" of ")[0].replace(" ", "-")
        files[f"{number:03d}-{condition.corner}-{celsius}-{channel}-{kind}.sp"] = sweep.deck()
    write_directory(to, files)
    return f"{to}: {len(jobs)} decks, and a README that says what is to come of them"
