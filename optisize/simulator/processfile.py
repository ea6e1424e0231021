"""The process file that goes with a table: what the library says, and what the designer has to fill in."""

from __future__ import annotations

import math
import os
import re
from pathlib import Path

from optisize.files import quoted
from optisize.process.library import Library, LibraryDevice
from optisize.process.tabulated import CHANNELS, Tables
from optisize.quantities import write
from optisize.simulator.characterise import Plan
from optisize.simulator.recognise import oxide

STEP = 5e-9  # m
WIDEST_FINGER = 20e-6  # m
CONTACTED = 1.6  # of the shortest channel; a contacted diffusion, about
PELGROM = 1.0  # mV um for each nanometre of oxide
TYPICAL_OXIDE = 5e-9  # m

_TEXT = """\
# Made by optisize process characterise. Everything of the transistors is in the table; what is marked FILL IN is not in
# the library's transistor models: the values are rules of thumb until you put in those of your process.
title = {title}
note  = {note}
law   = "table"

[nominal]
supply      = "{supply}"
temperature = "{temperature}"

[table]
file = {table}

{library}{matching}
[resistor]                              # FILL IN
sheet_resistance        = "1 kohm"
width                   = "1 um"
capacitance             = "0.1 fF/um^2"
temperature_coefficient = "0 1/K"
matching                = "2 %*um"

[grid]
step           = "{step}"
minimum_length = "{minimum_length}"
maximum_length = "{maximum_length}"
minimum_width  = "{minimum_width}"
maximum_finger = "{maximum_finger}"
diffusion      = "{diffusion}"              # FILL IN: drawn length of a contacted source or drain
spacing_factor = 1.5
{corners}"""


def _key(name: str) -> str:
    """Return a key as TOML writes it."""
    return name if re.fullmatch(r"[A-Za-z0-9_-]+", name) else quoted(name)


def process_text(tables: Tables, planned: Plan | None, library: Library | None, supply: float, target: Path) -> str:
    """Return the text of the process file of some tables.

    Args:
        tables: as they are written beside it.
        planned: how they were made, if from a library.
        library: that library, if any, its path absolute.
        supply: of the process [V].
        target: where the process file goes.
    """
    sizes = tables.sizes.values()
    shortest, longest = max(s.lengths[0] for s in sizes), min(s.lengths[-1] for s in sizes)
    narrowest, widest = max(s.widths[0] for s in sizes), min(s.widths[-1] for s in sizes)
    corners = [name for name in tables.corners if name != "typical"]
    parts = "".join(f"\n[corners.{_key(n)}]\nresistance = 1.0                        # FILL IN\n" for n in corners)
    known = {ch: None if planned is None else oxide(planned.models[ch], planned.text) for ch in CHANNELS}
    return _TEXT.format(
        title=quoted(f"{tables.attributes.get('title', 'table')}, {write(supply, 'V')}"),
        note=quoted(f"table made with {tables.attributes.get('simulator', 'a simulator')}"),
        supply=write(supply, "V"),
        temperature=f"{tables.conditions[0].temperature - 273.15:.6g} degC",
        table=quoted(f"{target.stem}.nc"),
        library=_library(library, target) if library is not None else "",
        matching="".join(_matching(f"{channel}mos", known[channel]) for channel in CHANNELS),
        step=write(STEP, "m"),
        minimum_length=_size(math.ceil(shortest / STEP - 1e-6) * STEP),
        maximum_length=_size(longest),
        minimum_width=_size(math.ceil(narrowest / STEP - 1e-6) * STEP),
        maximum_finger=_size(min(widest, WIDEST_FINGER)),
        diffusion=_size(math.ceil(CONTACTED * shortest / STEP) * STEP),
        corners=parts,
    )


def _size(value: float) -> str:
    return f"{value * 1e6:.6g} um"


def _library(library: Library, target: Path) -> str:
    """Return the keys of the library; one below the directory of the process file is named from there."""
    beside = target.parent.absolute()
    inside = library.path.is_relative_to(beside)
    path = os.path.relpath(library.path, beside) if inside else str(library.path)
    sections = ", ".join(f"{_key(k)} = {quoted(v)}" for k, v in library.sections.items())
    lines = ["[library]", f"path          = {quoted(path)}", f"sha256        = {quoted(library.sha256)}"]
    lines.append(f"init_sections = [{', '.join(quoted(s) for s in library.init_sections)}]")
    lines.append(f"sections      = {{ {sections} }}")
    if library.unit != 1.0:
        lines.append(f'unit          = "{library.unit:.6g} m"')
    devices = [_device(c, d) for c, d in (("nmos", library.nmos), ("pmos", library.pmos))]
    return "\n".join([*lines, "", *devices, ""])


def _device(channel: str, device: LibraryDevice) -> str:
    """Return the table of one device; the keys that are not as by default."""
    lines = [f"[library.{channel}]"]
    for key, value in device.model_dump(exclude_defaults=True).items():
        lines.append(f"{key} = {str(value).lower() if isinstance(value, bool) else quoted(str(value))}")
    return "\n".join(lines) + "\n"


def _matching(channel: str, thickness: float | None) -> str:
    known = "its oxide" if thickness else "a usual oxide"
    matching = PELGROM * (thickness or TYPICAL_OXIDE) * 1e9
    return (
        f"[{channel}]                                  # FILL IN: here 1 mV um for each nm of {known}, and 1 %\n"
        f'threshold_matching = "{matching:.3g} mV*um"\nfactor_matching    = "1 %*um"\n\n'
    )
