"""The process file: what the foundry gives, validated, and turned into the arrays that laws are built from."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from functools import cached_property
from importlib import resources
from pathlib import Path
from typing import Annotated, Any, Literal

import numpy as np
from pydantic import Field

from optisize.errors import InputError, listing, nearest, shorten
from optisize.files import read_toml, validated
from optisize.process.law import Array, Law
from optisize.process.laws import LAWS, AnyParameters
from optisize.process.parameters import Parameters
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

    @cached_property
    def corner_names(self) -> tuple[str, ...]:
        """The corners of the process, ``typical`` first."""
        return ("typical", *(name for name in self.corners if name != "typical"))

    def corner(self, name: str) -> Corner:
        """Return a corner by name; ``typical`` shifts nothing unless the file says so.

        Raises InputError for a name that the process does not have.
        """
        if name in self.corners:
            return self.corners[name]
        if name == "typical":
            return Corner()
        raise InputError(
            f'corner "{name}" is not in the process; allowed are {listing(self.corner_names)}'
            f"{nearest(name, self.corner_names)}"
        )

    def transistor_arrays(self, channels: Sequence[Channel], temperature: float, corner: str) -> dict[str, Array]:
        """Return every transistor parameter as an array (T, 1) at a temperature [K] and corner."""
        shift = self.corner(corner)
        ratio = temperature / self.nominal.temperature
        rows = []
        for channel in channels:
            card = self.nmos if channel == "n" else self.pmos
            moved = shift.nmos if channel == "n" else shift.pmos
            row = card.model_dump()
            row["threshold"] += moved.threshold - card.threshold_drift * (temperature - self.nominal.temperature)
            row["current_factor"] *= moved.factor * ratio**card.mobility_exponent
            rows.append(row)
        return {key: np.array([[row[key]] for row in rows]) for key in rows[0]}

    def bind_law(
        self, channels: Sequence[Channel], width: Array, length: Array, temperature: float, corner: str
    ) -> tuple[Law, dict[str, Array]]:
        """Return the law of T transistors with widths and lengths [m] of shape (T, N), and its parameters."""
        parameters = self.transistor_arrays(channels, temperature, corner)
        return self.law_of(parameters, width, length, temperature), parameters

    def law_of(self, parameters: Mapping[str, Array], width: Array, length: Array, temperature: float) -> Law:
        """Return the law of transistors with parameters of shape (T, 1) or (T, N)."""
        ut = np.array([[float(thermal_voltage(temperature))]])
        return LAWS[self.law].law.bind(parameters, width, length, ut)

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
    raise InputError(
        f"process {shorten(name)} is neither built in nor a file; built in are {listing(built_in_names())}"
        f"{nearest(name, built_in_names())}"
    )


def load_process(source: str | Path) -> Process:
    """Read a process file, or a built-in process by name.

    Raises InputError for an unknown name or a file that is not a valid process.
    """
    path = source if isinstance(source, Path) else locate_process(source)
    process = validated(Process, _with_law(read_toml(path), path), str(path))
    if process.grid.minimum_length > process.grid.maximum_length:
        raise InputError(f"{path}: grid.minimum_length is above grid.maximum_length")
    if process.grid.minimum_width > process.grid.maximum_finger:
        raise InputError(f"{path}: grid.minimum_width is above grid.maximum_finger")
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
