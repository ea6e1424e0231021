"""Tables of transistors: what was sampled, at which sizes and voltages, and the file that holds it.

One file holds both channels of one library at one or more conditions (corner and temperature), each table over the
width of a finger, the channel length, gate voltage, vds and vsb. All of it is of a transistor of one finger in
n-channel sense, in SI units; figures that grow with the drawn area are kept per area, so that they hardly vary with
the size.
"""

from __future__ import annotations

import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from optisize.errors import InputError, OptisizeError, listing
from optisize.process.law import Array
from optisize.process.spline import Axis, Box

LIFT, LIFT_POTENTIAL = 0.7, 0.8  # V^0.5 and V; of planar transistors, about
LEAST_POTENTIAL = 0.05  # V
FORMAT = "optisize table 1"
CHANNELS = ("n", "p")
GATE, NOISE = ("cgs", "cgd", "cgb"), ("noise", "flicker")
BOXES = ("current", "vdsat", "leak", "gate", "noise")
UNITS = {
    "pinch_off": (
        "V",
        "the p of which current = specific_current width / length (F(p) - F(p - vds)), "
        "F(v) = ln(1 + exp(v / 2 ut))^2, ut = k temperature / q",
    ),
    "vdsat": ("V", "drain-source voltage at which saturation begins"),
    "leak": ("1", "-1 / ln of the share of the drain current that flows to the bulk; zero where nothing does"),
    "cgs": ("F m-2", "capacitance of the gate to the source, over width and length"),
    "cgd": ("F m-2", "capacitance of the gate to the drain, over width and length"),
    "cgb": ("F m-2", "capacitance of the gate to the bulk, over width and length"),
    "noise": ("1", "white noise of the channel: its conductance over the derivative of the current to the source"),
    "flicker": ("V2 m2", "flicker noise at the gate at 1 Hz, times width and length"),
}
AXES = {
    "gate": f"vgs - {LIFT} (sqrt({LIFT_POTENTIAL} + vsb) - sqrt({LIFT_POTENTIAL})) in n-channel sense",
    "vds": "vds in n-channel sense",
    "vsb": "vsb in n-channel sense",
}
SIZES = ("lengths", "widths", "small_lengths", "small_widths", "length_edges", "width_edges")
JUNCTION = {"area": "F m-2", "edge": "F m-1", "gate": "F m-1"}


def gate_lift(vsb: Array) -> tuple[Array, Array]:
    """Return by how much the source's voltage over the bulk lifts the gate's axis [V], and the slope of that."""
    root = np.sqrt(np.maximum(vsb + LIFT_POTENTIAL, LEAST_POTENTIAL))
    return LIFT * (root - LIFT_POTENTIAL**0.5), 0.5 * LIFT / root


@dataclass(frozen=True)
class Grids:
    """The voltages at which tables are sampled, and the splines through them.

    The gate's axis is its voltage over the source less the lift of a fixed body effect, so that thresholds lie at about
    the same place of it whatever vsb is.

    Attributes:
        current: gate, vds, vsb of the drain current.
        vdsat: the same of the saturation voltage, at some of these voltages.
        leak: the same of what flows to the bulk, at some of these voltages.
        gate: the same of the capacitances of the gate.
        noise: the same of noise.
        reverse: voltages over the junctions, (R,) [V].
    """

    current: Box
    vdsat: Box
    leak: Box
    gate: Box
    noise: Box
    reverse: Array

    @property
    def boxes(self) -> dict[str, Box]:
        """The splines by the name of what they go through."""
        return (
            {"pinch_off": self.current, "vdsat": self.vdsat, "leak": self.leak}
            | dict.fromkeys(GATE, self.gate)
            | dict.fromkeys(NOISE, self.noise)
        )

    def thinned(self, values: Array, box: Box) -> Array:
        """Return what is sampled at the voltages of the current at those of another box, which are some of them.

        Args:
            values: (..., gate, vds, vsb).
            box: `vdsat` or `leak`.
        """
        gates, drains = (
            (a.count - 1) // (b.count - 1) for a, b in zip(self.current.axes[:2], box.axes[:2], strict=True)
        )
        return values[..., ::gates, ::drains, :]


@dataclass(frozen=True)
class ChannelTable:
    """One kind of transistor at one condition, (lengths, widths, vgs, vds, vsb), of one finger and in n-channel sense.

    Attributes:
        specific_current: 2 n beta ut^2 of a square [A], about; the scale of the inversion level.
        flicker_exponent: of the frequency.
        figures: by name: `pinch_off` [V], see `optisize.process.pinch`, `vdsat` [V] and `leak`; at the sizes for
            capacitances and noise: `cgs`, `cgd`, `cgb` [F/m^2], `noise`, `flicker` [V^2 m^2].
        junction: of one junction over the reverse voltage: `area` [F/m^2], `edge` and `gate` [F/m], each (R,).
    """

    specific_current: float
    flicker_exponent: float
    figures: Mapping[str, Array]
    junction: Mapping[str, Array]


@dataclass(frozen=True)
class Sizes:
    """The sizes of one channel at which tables are sampled [m].

    Attributes:
        lengths, widths: of the current; widths are those of one finger.
        small_lengths, small_widths: of capacitances and noise.
        length_edges, width_edges: where the library's model changes its form, so that no interpolation reaches across.
    """

    lengths: Array
    widths: Array
    small_lengths: Array
    small_widths: Array
    length_edges: Array
    width_edges: Array


@dataclass(frozen=True)
class Condition:
    """What a table was made at: corner and temperature [K]."""

    corner: str
    temperature: float

    def __str__(self) -> str:
        return f"{self.corner} at {self.temperature - 273.15:g} degC"


@dataclass
class Tables:
    """The tables of one library: `at` gives those of one condition.

    Attributes:
        grids: the voltages.
        sizes: the sizes of each channel.
        conditions: in the order of the file.
        attributes: what else the file says of itself.
    """

    grids: Grids
    sizes: Mapping[str, Sizes]
    conditions: tuple[Condition, ...]
    attributes: Mapping[str, str]
    _data: Any = None
    _kept: dict[Condition, dict[str, ChannelTable]] = field(default_factory=dict)
    _lock: Any = field(default_factory=threading.Lock)

    @property
    def corners(self) -> tuple[str, ...]:
        """The corners that are tabulated, each once."""
        return tuple(dict.fromkeys(c.corner for c in self.conditions))

    def find(self, corner: str, temperature: float) -> Condition:
        """Return the condition of a corner and temperature [K].

        Raises InputError, naming those that there are: nothing is interpolated between conditions.
        """
        for condition in self.conditions:
            if condition.corner == corner and abs(condition.temperature - temperature) < 0.05:
                return condition
        raise InputError(
            f"{Condition(corner, temperature)} is not in the table; tabulated are {listing(map(str, self.conditions))}"
        )

    def at(self, condition: Condition) -> dict[str, ChannelTable]:
        """Return the tables of both channels at one of the conditions; read once."""
        with self._lock:
            if condition not in self._kept:
                self._kept[condition] = self._read(self.conditions.index(condition))
            return self._kept[condition]

    def _read(self, row: int) -> dict[str, ChannelTable]:
        with _opened(self._data) as file:
            return {channel: _channel_table(file, channel, row) for channel in CHANNELS}


def built(
    grids: Grids,
    sizes: Mapping[str, Sizes],
    tables: Mapping[Condition, Mapping[str, ChannelTable]],
    attributes: Mapping[str, str],
) -> Tables:
    """Return tables that are already in memory."""
    return Tables(grids, sizes, tuple(tables), attributes, None, {c: dict(t) for c, t in tables.items()})


def write_tables(path: Path, tables: Tables) -> None:
    """Write a file of tables: netCDF, version 3, every variable with its unit and meaning."""
    from scipy.io import netcdf_file

    with netcdf_file(path, "w", version=2) as file:
        file.format_of_tables = FORMAT
        for name, text in tables.attributes.items():
            setattr(file, name, text)
        file.corners = ";".join(c.corner for c in tables.conditions)
        _write_axes(file, tables)
        for channel in CHANNELS:
            _write_channel(file, channel, [tables.at(c)[channel] for c in tables.conditions])


def _variable(file: Any, name: str, kind: str, dimensions: Sequence[str], values: Array, unit: str, text: str) -> Any:
    variable = file.createVariable(name, kind, tuple(dimensions))
    variable[:] = values
    variable.units, variable.long_name = unit, text
    return variable


def _write_axes(file: Any, tables: Tables) -> None:
    """Write the coordinates: conditions, voltages, sizes."""
    file.createDimension("condition", len(tables.conditions))
    temperatures = np.array([c.temperature for c in tables.conditions])
    _variable(file, "temperature", "d", ["condition"], temperatures, "K", "absolute temperature")
    for box in BOXES:
        for name, axis in zip(AXES, getattr(tables.grids, box).axes, strict=True):
            key = f"{name}_{box}"
            file.createDimension(key, axis.count)
            text = f"{AXES[name]}, of {box}"
            variable = _variable(file, key, "d", [key], axis.samples, "V", text)
            variable.degree, variable.bend = axis.degree, axis.bend
    file.createDimension("reverse", len(tables.grids.reverse))
    _variable(file, "reverse", "d", ["reverse"], tables.grids.reverse, "V", "reverse voltage of a junction")
    meanings = {
        "lengths": "channel length",
        "widths": "width of one finger",
        "small_lengths": "channel length, of capacitances and noise",
        "small_widths": "width of one finger, of capacitances and noise",
        "length_edges": "length at which the model of the library changes its form",
        "width_edges": "width at which the model of the library changes its form",
    }
    for channel, sizes in tables.sizes.items():
        for name, text in meanings.items():
            values = getattr(sizes, name)
            if len(values):
                key = f"{channel}_{name}"
                file.createDimension(key, len(values))
                _variable(file, key, "d", [key], values, "m", f"{text}, {channel}-channel")


def _write_channel(file: Any, channel: str, tables: Sequence[ChannelTable]) -> None:
    """Write the tables of one channel at all conditions."""
    for name, (unit, text) in UNITS.items():
        box = "gate" if name in GATE else "noise" if name in NOISE else {"pinch_off": "current"}.get(name, name)
        of = "small_" if box in ("gate", "noise") else ""
        axes = [f"{axis}_{box}" for axis in AXES]
        dimensions = ["condition", f"{channel}_{of}lengths", f"{channel}_{of}widths", *axes]
        variable = file.createVariable(f"{channel}_{name}", "f", tuple(dimensions))
        variable.units, variable.long_name = unit, f"{text}, {channel}-channel"
        for row, table in enumerate(tables):
            variable[row] = table.figures[name].astype(np.float32)
    for name, unit in JUNCTION.items():
        values = np.array([t.junction[name] for t in tables])
        text = f"capacitance of a junction per {name}, {channel}-channel"
        _variable(file, f"{channel}_junction_{name}", "d", ["condition", "reverse"], values, unit, text)
    for name, unit in (("specific_current", "A"), ("flicker_exponent", "1")):
        values = np.array([getattr(t, name) for t in tables])
        _variable(file, f"{channel}_{name}", "d", ["condition"], values, unit, f"{name}, {channel}-channel")


def _opened(path: Path) -> Any:
    from scipy.io import netcdf_file

    return netcdf_file(path, "r", mmap=True)


def _values(file: Any, name: str, row: int | None = None) -> Array:
    """Return a copy of a variable, or of one row of it, in double precision."""
    variable = file.variables[name]
    return np.array(variable[:] if row is None else variable[row], dtype=float)


def _channel_table(file: Any, channel: str, row: int) -> ChannelTable:
    return ChannelTable(
        specific_current=float(_values(file, f"{channel}_specific_current", row)),
        flicker_exponent=float(_values(file, f"{channel}_flicker_exponent", row)),
        figures={name: _values(file, f"{channel}_{name}", row) for name in UNITS},
        junction={name: _values(file, f"{channel}_junction_{name}", row) for name in JUNCTION},
    )


def read_tables(path: Path) -> Tables:
    """Read a file of tables; what is sampled is read when it is asked for.

    Raises InputError when it is missing or no such file, OptisizeError when it cannot be read.
    """
    if not path.is_file():
        raise InputError(f"{path}: there is no such table")
    try:
        with _opened(path) as file:
            if _text(file, "format_of_tables") != FORMAT:
                raise InputError(f"{path}: is no table of this version of optisize; characterise the library again")
            return _contents(file, path)
    except OSError as error:
        raise OptisizeError(f"{path}: cannot be read: {error.strerror or error}") from None
    except (KeyError, ValueError, TypeError, IndexError, AttributeError, EOFError) as error:
        raise InputError(f"{path}: is no whole table ({type(error).__name__}: {error})") from None


def _text(file: Any, name: str) -> str:
    value = getattr(file, name, b"")
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def _contents(file: Any, path: Path) -> Tables:
    """Return everything but the tables themselves, after a look at whether they are all there."""
    boxes = {}
    for box in BOXES:
        axes = [_axis(file, f"{axis}_{box}") for axis in AXES]
        boxes[box] = Box((axes[0], axes[1], axes[2]))
    sizes = {}
    for channel in CHANNELS:
        found = {
            name: _values(file, f"{channel}_{name}") if f"{channel}_{name}" in file.variables else np.empty(0)
            for name in SIZES
        }
        sizes[channel] = Sizes(**found)
        for name in UNITS:
            if not file.variables[f"{channel}_{name}"].shape:
                raise ValueError(f"{channel}_{name} is empty")
    corners = _text(file, "corners").split(";")
    temperatures = _values(file, "temperature")
    conditions = tuple(Condition(c, float(t)) for c, t in zip(corners, temperatures, strict=True))
    texts = {name: _text(file, name) for name in file._attributes if name not in ("format_of_tables", "corners")}
    return Tables(Grids(**boxes, reverse=_values(file, "reverse")), sizes, conditions, texts, path)


def _axis(file: Any, name: str) -> Axis:
    variable = file.variables[name]
    samples = _values(file, name)
    return Axis(
        float(samples[0]), float(samples[-1]), len(samples), degree=int(variable.degree), bend=float(variable.bend)
    )
