"""The process file: what the foundry gives, validated, and turned into the arrays that laws are built from."""

from __future__ import annotations

import os
import re
from collections.abc import Mapping, Sequence
from functools import cached_property
from importlib import resources
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field

from optisize.errors import InputError, listing, nearest, shorten
from optisize.files import read_bytes, read_toml, validated
from optisize.process.law import Array, Law
from optisize.process.laws import LAWS, AnyParameters
from optisize.process.library import Library
from optisize.process.parameters import Parameters
from optisize.process.surfaces import Surfaces
from optisize.process.table import TableLaw
from optisize.process.tabulated import Tables, read_tables
from optisize.quantities import In

BOLTZMANN = 1.380649e-23  # J/K, exact (CODATA 2018)
ELEMENTARY_CHARGE = 1.602176634e-19  # C, exact (CODATA 2018)

Channel = Literal["n", "p"]


def thermal_voltage(temperature: Array | float) -> Any:
    """Return kT/q [V] at an absolute temperature [K]."""
    return BOLTZMANN * np.asarray(temperature, dtype=float) / ELEMENTARY_CHARGE


class Nominal(Parameters):
    """The conditions at which the parameters were taken."""

    supply: Annotated[float, In("V"), Field(gt=0, le=100, description="usual supply voltage")]
    temperature: Annotated[float, In("K", "K"), Field(gt=150, le=600, description="temperature of the parameters")] = (
        300.15
    )


class ResistorParameters(Parameters):
    """What a process says of its resistor."""

    sheet_resistance: Annotated[float, In("ohm"), Field(gt=0, description="resistance of one square")]
    width: Annotated[
        float, In("m", "um"), Field(gt=0, description="drawn width of a matched resistor, also its spacing")
    ]
    capacitance: Annotated[
        float, In("F/m^2", "fF/um^2"), Field(ge=0, description="capacitance to the substrate per area")
    ] = 0.0
    temperature_coefficient: Annotated[float, In("1/K", "1/K"), Field(description="linear temperature coefficient")] = (
        0.0
    )
    matching: Annotated[
        float,
        In("m", "%*um"),
        Field(ge=0, description="relative sigma of the difference of two resistances times sqrt(W L)"),
    ]


class Grid(Parameters):
    """What can be drawn."""

    step: Annotated[float, In("m", "nm"), Field(gt=0, le=1e-6, description="drawing grid")]
    minimum_length: Annotated[float, In("m", "um"), Field(gt=0, description="shortest channel")]
    maximum_length: Annotated[float, In("m", "um"), Field(gt=0, description="longest channel")] = 100e-6
    minimum_width: Annotated[float, In("m", "um"), Field(gt=0, description="narrowest finger")]
    maximum_finger: Annotated[float, In("m", "um"), Field(gt=0, description="widest finger that is drawn")]
    diffusion: Annotated[
        float, In("m", "um"), Field(gt=0, description="drawn length of a contacted source or drain region")
    ]
    spacing_factor: Annotated[
        float, In(""), Field(ge=1, le=20, description="drawn area over device area: wells, guards, wiring")
    ] = 1.5


class ChannelShift(Parameters):
    """How a corner moves one kind of transistor."""

    threshold: Annotated[float, In("V"), Field(ge=-1, le=1, description="shift of the threshold magnitude")] = 0.0
    factor: Annotated[float, In(""), Field(gt=0, le=10, description="ratio of the current factor")] = 1.0


class Corner(Parameters):
    """A named process corner."""

    nmos: ChannelShift = ChannelShift()
    pmos: ChannelShift = ChannelShift()
    resistance: Annotated[float, In(""), Field(gt=0, le=10, description="ratio of the sheet resistance")] = 1.0


class TableFile(Parameters):
    """Where the tables of the table law are."""

    file: Annotated[Path, Field(description="file of tables, beside the process file unless absolute")]


class Process(Parameters):
    """A process: transistors of both channels, resistor, grid and corners."""

    title: Annotated[str, Field(max_length=200, description="what the process is")]
    note: Annotated[str, Field(max_length=4000, description="where the values come from")] = ""
    law: Annotated[str, Field(description="transistor law: " + ", ".join(LAWS))]
    nominal: Nominal
    nmos: AnyParameters
    pmos: AnyParameters
    resistor: ResistorParameters
    grid: Grid
    corners: Annotated[dict[str, Corner], Field(description="named corners", default_factory=dict)]
    table: Annotated[TableFile | None, Field(description="the tables of the table law")] = None
    library: Annotated[
        Library | None, Field(description="the SPICE model library that tables are made from and decks name")
    ] = None

    @cached_property
    def tables(self) -> Tables | None:
        """The tables of the table law."""
        return None if self.table is None else read_tables(self.table.file)

    @cached_property
    def kept_surfaces(self) -> dict[tuple[str, float], Surfaces]:
        """The splines that were made, by corner and temperature [K]."""
        return {}

    @cached_property
    def corner_names(self) -> tuple[str, ...]:
        """The corners of the process: those of its tables, or ``typical`` first."""
        return self.tables.corners if self.tables else tuple(dict.fromkeys(("typical", *self.corners)))

    def corner(self, name: str) -> Corner:
        """Return a corner by name; ``typical`` shifts nothing unless the file says so.

        Raises InputError for a name that the process does not have.
        """
        if name in self.corners and name in self.corner_names:
            return self.corners[name]
        if name in self.corner_names:
            return Corner()
        raise InputError(
            f'corner "{name}" is not in the process; allowed are {listing(self.corner_names)}'
            f"{nearest(name, self.corner_names)}"
        )

    def transistor_arrays(self, channels: Sequence[Channel], temperature: float, corner: str) -> dict[str, Array]:
        """Return every transistor parameter as an array (T, 1) at a temperature [K] and corner."""
        if self.tables is not None:
            return self._of_tables(channels, temperature, corner)
        shift = self.corner(corner)
        ratio = temperature / self.nominal.temperature
        rows = []
        for channel in channels:
            card: Any = self.nmos if channel == "n" else self.pmos
            moved = shift.nmos if channel == "n" else shift.pmos
            row = card.model_dump()
            row["threshold"] += moved.threshold - card.threshold_drift * (temperature - self.nominal.temperature)
            row["current_factor"] *= moved.factor * ratio**card.mobility_exponent
            rows.append(row)
        return {key: np.array([[row[key]] for row in rows]) for key in rows[0]}

    def _of_tables(self, channels: Sequence[Channel], temperature: float, corner: str) -> dict[str, Array]:
        """Return what is not in the splines of tables: shifts, which are none, matching, the flicker exponent."""
        tables = self.surfaces(corner, temperature).tables
        rows = [
            {
                "channel": 0.0 if channel == "n" else 1.0,
                "threshold": 0.0,
                "current_factor": 1.0,
                "flicker_exponent": tables[channel].flicker_exponent,
                **(self.nmos if channel == "n" else self.pmos).model_dump(),
            }
            for channel in channels
        ]
        return {key: np.array([[row[key]] for row in rows]) for key in rows[0]}

    def bind_law(
        self,
        channels: Sequence[Channel],
        width: Array,
        length: Array,
        temperature: float,
        corner: str,
        fingers: Array | None = None,
    ) -> tuple[Law, dict[str, Array]]:
        """Return the law of T transistors and its parameters.

        Args:
            channels: of the transistors, (T,).
            width: of all fingers [m], (T, N).
            length: [m], (T, N).
            temperature: absolute [K].
            corner: of the process.
            fingers: of all units, (T, N); as few as the grid allows where None.
        """
        parameters = self.transistor_arrays(channels, temperature, corner)
        return self.law_of(parameters, width, length, temperature, corner, fingers), parameters

    def law_of(
        self,
        parameters: Mapping[str, Array],
        width: Array,
        length: Array,
        temperature: float,
        corner: str = "typical",
        fingers: Array | None = None,
    ) -> Law:
        """Return the law of transistors with parameters of shape (T, 1) or (T, N); see `bind_law`."""
        if self.tables is not None:
            if fingers is None:
                fingers = np.maximum(np.ceil(width / self.grid.maximum_finger - 1e-9), 1.0)
            return TableLaw.of(self.surfaces(corner, temperature), parameters, width, length, fingers)
        ut = np.array([[float(thermal_voltage(temperature))]])
        return LAWS[self.law].law.bind(parameters, width, length, ut)

    def surfaces(self, corner: str, temperature: float) -> Surfaces:
        """Return the splines of the table law at a corner and temperature [K]; made once.

        Raises InputError when the tables do not hold that condition.
        """
        assert self.tables is not None
        key = (corner, round(temperature, 2))
        if key not in self.kept_surfaces:
            condition = self.tables.find(corner, temperature)
            ut = float(thermal_voltage(condition.temperature))
            made = Surfaces.fitted(self.tables.grids, self.tables.sizes, self.tables.at(condition), ut)
            self.kept_surfaces[key] = made
        return self.kept_surfaces[key]

    def resistance_ratio(self, temperature: float, corner: str) -> float:
        """Return resistance at a temperature [K] and corner over its drawn value."""
        drift = self.resistor.temperature_coefficient * (temperature - self.nominal.temperature)
        return self.corner(corner).resistance * max(1.0 + drift, 0.01)


def built_in_names() -> tuple[str, ...]:
    """Return the names of the processes that come with the package."""
    files = resources.files("optisize.process").joinpath("data").iterdir()
    return tuple(sorted(f.name.removesuffix(".toml") for f in files if f.name.endswith(".toml")))


def locate_process(name: str, beside: Path | None = None) -> Path:
    """Return the path of a built-in process or of a process file, looked for beside the problem file first.

    Raises InputError when there is neither.
    """
    if name in built_in_names():
        return Path(str(resources.files("optisize.process").joinpath("data", f"{name}.toml")))
    for candidate in ([beside / name] if beside is not None else []) + [Path(name)]:
        if os.path.isfile(candidate):
            return candidate
    made = "; one of your own transistors is made by `optisize process characterise`" if name.endswith(".toml") else ""
    raise InputError(
        f"process {shorten(name)} is neither built in nor a file; built in are {listing(built_in_names())}"
        f"{nearest(name, built_in_names())}{made}"
    )


def load_process(source: str | Path) -> Process:
    """Read a process file, or a built-in process by name.

    Raises InputError for an unknown name or a file that is not a valid process.
    """
    path = source if isinstance(source, Path) else locate_process(source)
    process = _beside(validated(Process, _with_law(read_toml(path), path), str(path)), path)
    if process.grid.minimum_length > process.grid.maximum_length:
        raise InputError(f"{path}: grid.minimum_length is above grid.maximum_length")
    if process.grid.minimum_width > process.grid.maximum_finger:
        raise InputError(f"{path}: grid.minimum_width is above grid.maximum_finger")
    return process


def _beside(process: Process, path: Path) -> Process:
    """Return the process with the files that it names found beside its own, and the tables looked at."""
    changed: dict[str, Any] = {}
    if process.library is not None:
        changed["library"] = process.library.beside(path.parent.absolute())
    if process.law == "table" and process.table is None:
        raise InputError(f'{path}: table: is missing; law "table" needs its file, see optisize process characterise')
    if process.table is not None:
        if process.law != "table":
            raise InputError(f'{path}: table: is of law "table", but the law is "{process.law}"')
        changed["table"] = TableFile(file=path.parent.absolute() / process.table.file)
    if not changed:
        return process
    process = process.model_copy(update=changed)
    try:
        names = process.corner_names
    except InputError as error:
        raise InputError(f"{path}: table.file: {error}") from None
    if process.table is not None:
        unknown = [name for name in process.corners if name not in names]
        if unknown:
            raise InputError(f"{path}: corners.{unknown[0]}: is not in the table; tabulated are {listing(names)}")
        for name, corner in process.corners.items():
            if (corner.nmos, corner.pmos) != (ChannelShift(), ChannelShift()):
                raise InputError(
                    f"{path}: corners.{name}: a table has its own transistors; only resistance can be given"
                )
    return process


def _with_law(data: dict[str, Any], path: Path) -> dict[str, Any]:
    """Fill the transistor tables by the law that the file names, so that messages name that law's keys."""
    law = data.get("law")
    if not isinstance(law, str) or law not in LAWS:
        problem = "is missing" if law is None else f"found {shorten(law)}"
        raise InputError(f"{path}: law: {problem}; allowed are {listing(LAWS)}{nearest(str(law), LAWS)}")
    tables = {
        table: validated(LAWS[law].parameters, data[table], str(path), (table,))
        for table in ("nmos", "pmos")
        if isinstance(data.get(table), dict)
    }
    return {**data, **tables}


def standing_alone(path: Path, process: Process) -> str:
    """Return the text of a process file with the files that it names by absolute paths, so that it holds anywhere."""
    text = read_bytes(path).decode("utf-8")
    tables = read_toml(path)
    for table, key, target in (
        ("table", "file", process.table.file if process.table else None),
        ("library", "path", process.library.path if process.library else None),
    ):
        if target is not None:
            written = re.escape(str(tables[table][key]))
            named = re.compile(rf"(\b{key}\s*=\s*)([\"']){written}\2")
            text = named.sub(lambda match, to=target: f"{match[1]}{match[2]}{to}{match[2]}", text, count=1)  # type: ignore[misc]
    return text
