"""Tables from sweeps of any simulator, or of measured transistors: a CSV file with a row for every point.

Its columns, in SI units, voltages and currents as of a conducting n-channel transistor whatever the channel:

    channel                  n or p
    length, width            of one finger [m]
    vgs, vds, vsb            [V]; every combination of the values that there are, vds above zero
    id                       drain current [A]
    isub                     the part of id that flows to the bulk [A]; none where the column is missing
    vdsat                    [V]; estimated from the current where the column is missing
    cgg, cgd, cgs            of the gate to all terminals, to drain and to source, overlaps included [F]
    noise_white              of the drain current, without flicker noise [A^2/Hz]
    noise_1hz, noise_10hz    the whole of it at these frequencies
    corner, temperature      optional: typical, and the temperature of the command [K]

The columns of capacitances and noise may be filled at some of the points only, again every combination of some values;
without the columns of noise, white noise is that of long channels and there is no flicker noise. A second file has the
junctions: channel, reverse [V], area [F/m^2], edge and gate [F/m]; corner and temperature as above.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from scipy.interpolate import make_interp_spline

from optisize import __version__
from optisize.errors import InputError, listing, nearest
from optisize.files import near_file
from optisize.process.card import BOLTZMANN, thermal_voltage
from optisize.process.law import Array
from optisize.process.pinch import level, pinch_off, share_figure, share_of, softplus, specific_current, without_cliffs
from optisize.process.spline import Box
from optisize.process.tabulated import CHANNELS, Condition, Grids, Sizes, Tables, gate_lift
from optisize.simulator.characterise import tables_of
from optisize.simulator.plan import grids_between

SIZE = ("length", "width")
VOLTAGES = ("vgs", "vds", "vsb")
CAPACITANCES = ("cgg", "cgd", "cgs")
NOISE = ("noise_white", "noise_1hz", "noise_10hz")
JUNCTION = ("reverse", "area", "edge", "gate")
LEAST_CURRENT = 1e-20  # A
FEWEST = {"vgs": 8, "vds": 5, "vsb": 3}
FEWEST_SMALL = {"vgs": 4, "vds": 3, "vsb": 2}


def tables_from_csv(path: Path, junctions: Path | None, temperature: float) -> Tables:
    """Return the tables of a file of sweeps.

    Args:
        path: of the sweeps.
        junctions: of the file of junctions; without one, junctions have no capacitance.
        temperature: absolute, of rows that do not say theirs [K].

    Raises InputError for a file that is none, lacks columns or points, or has values that make no sense.
    """
    frame = _read(path, ["channel", *SIZE, *VOLTAGES, "id", *CAPACITANCES], temperature)
    drawn = None if junctions is None else _read(junctions, ["channel", *JUNCTION], temperature)
    parts = {(_condition(key), str(key[2])): rows for key, rows in frame.groupby(["corner", "temperature", "channel"])}
    conditions = tuple(dict.fromkeys(condition for condition, _ in parts))
    for condition in conditions:
        for channel in CHANNELS:
            if (condition, channel) not in parts:
                raise InputError(f'{path}: {condition}: has no rows of channel "{channel}"')
    cubes = {key: _Cube(path, rows, FEWEST, "id") for key, rows in parts.items()}
    small = {
        key: _Cube(path, rows.dropna(subset=list(CAPACITANCES)), FEWEST_SMALL, "cgg") for key, rows in parts.items()
    }
    sizes = {channel: _sizes(path, cubes, small, channel) for channel in CHANNELS}
    grids = _grids(list(cubes.values()))
    raw = {
        (condition, channel): {
            **_currents(cubes[condition, channel], grids, condition.temperature),
            **_small(small[condition, channel], cubes[condition, channel], grids, condition.temperature),
            **_junctions(drawn, condition, channel, grids.reverse, junctions),
        }
        for condition, channel in cubes
    }
    described = {"title": f"transistors of {path.name}", "simulator": path.name, "made_by": f"optisize {__version__}"}
    return tables_of(grids, sizes, raw, described)


def _condition(key: Any) -> Condition:
    return Condition(str(key[0]), float(key[1]))


def _read(path: Path, needed: Sequence[str], temperature: float) -> pd.DataFrame:
    """Read a file whose columns are there and whose numbers are numbers."""
    if not path.is_file():
        raise InputError(f"{path}: there is no such file{near_file(path)}")
    try:
        frame = pd.read_csv(path, skipinitialspace=True, comment="#")
    except (ValueError, OSError) as error:
        raise InputError(f"{path}: is no CSV file: {error}") from None
    frame.columns = frame.columns.str.strip()
    for name in needed:
        if name not in frame:
            raise InputError(f'{path}: the column "{name}" is missing{nearest(name, frame.columns)}')
    frame["corner"] = frame["corner"].astype(str) if "corner" in frame else "typical"
    if "temperature" not in frame:
        frame["temperature"] = temperature
    wrong = set(frame["channel"]) - set(CHANNELS)
    if wrong:
        raise InputError(f"{path}: channel: found {listing(map(str, wrong))}; allowed are {listing(CHANNELS)}")
    for name in frame.columns.difference(["channel", "corner"]):
        values = pd.to_numeric(frame[name], errors="coerce")
        bad = values.isna() & frame[name].notna()
        if bad.any():
            row = int(np.flatnonzero(bad)[0])
            raise InputError(f'{path}: row {row + 2}: {name}: found "{frame[name].iloc[row]}"; a number is needed')
        frame[name] = values
    return frame


class _Cube:
    """Points on every combination of lengths, widths and voltages."""

    def __init__(self, path: Path, rows: pd.DataFrame, fewest: dict[str, int], figure: str) -> None:
        """Lay the rows out; raise InputError for missing or repeated points and for too few voltages."""
        if "id" in rows and figure == "id":
            rows = rows[rows["vds"] > 0.0]
        self.axes = [np.unique(rows[name]) for name in (*SIZE, *VOLTAGES)]
        for name, axis in zip(VOLTAGES, self.axes[2:], strict=True):
            if len(axis) < fewest[name]:
                raise InputError(
                    f"{path}: {figure}: found {len(axis)} values of {name}; at least {fewest[name]} are needed"
                )
        shape = tuple(len(axis) for axis in self.axes)
        if len(rows) != np.prod(shape):
            counts = " x ".join(str(n) for n in shape)
            raise InputError(
                f"{path}: {figure}: found {len(rows)} rows of a channel; every combination of its lengths, widths, "
                f"vgs, vds and vsb is needed once, {counts}"
            )
        order = rows.sort_values([*SIZE, *VOLTAGES])
        self._columns = {name: order[name].to_numpy(dtype=float).reshape(shape) for name in order if _numeric(name)}
        if figure == "id":
            # A transistor that is off may carry no current, or that of a simulator's rounding.
            self._columns["id"] = np.maximum(self["id"], LEAST_CURRENT)
            if not self.has(["id"]) or (self["id"][..., -1, -1, :] <= LEAST_CURRENT).any():
                raise InputError(f"{path}: id: a current above zero is needed at the highest vgs and vds")

    def __getitem__(self, name: str) -> Array:
        return self._columns[name]

    def has(self, names: Sequence[str]) -> bool:
        """Tell whether columns are there and full."""
        return all(name in self._columns and np.isfinite(self._columns[name]).all() for name in names)


def _numeric(name: object) -> bool:
    return name not in ("channel", "corner")


def _sizes(path: Path, cubes: dict[Any, _Cube], small: dict[Any, _Cube], channel: str) -> Sizes:
    """Return the sizes of a channel; they have to be the same at all conditions."""
    found = [[*cubes[key].axes[:2], *small[key].axes[:2]] for key in cubes if key[1] == channel]
    for other in found[1:]:
        if any(not np.array_equal(a, b) for a, b in zip(found[0], other, strict=True)):
            raise InputError(f"{path}: channel {channel} has other lengths or widths at another corner or temperature")
    lengths, widths, small_lengths, small_widths = found[0]
    return Sizes(lengths, widths, small_lengths, small_widths, np.empty(0), np.empty(0))


def _grids(cubes: list[_Cube]) -> Grids:
    """Return the voltages that all sweeps reach."""
    ends = [(max(c.axes[k][0] for c in cubes), min(c.axes[k][-1] for c in cubes)) for k in (2, 3, 4)]
    gate, drain, body = ends
    lifts = gate_lift(np.array(body))[0]
    return grids_between((gate[0] - min(lifts[0], 0.0), gate[1] - max(lifts[1], 0.0)), drain, body)


def _resampled(cube: _Cube, values: Array, box: Box, grids: Grids) -> Array:
    """Return values of a cube at the voltages of a spline, (lengths, widths, gate, vds, vsb)."""
    gate, drain, body = (axis.samples for axis in box.axes)
    vgs, vds, vsb = cube.axes[2:]

    def along(x: Array, y: Array, at: Array, axis: int) -> Array:
        at = np.clip(at, x[0], x[-1])
        found: Array = make_interp_spline(x, y, k=min(3, len(x) - 1), axis=axis)(at)
        return found

    values = along(np.log(vds + 0.3), values, np.log(drain + 0.3), 3)
    values = along(vsb, values, body, 4)
    parts = [along(vgs, values[..., k], gate + lift, 2) for k, lift in enumerate(gate_lift(body)[0])]
    return np.stack(parts, axis=-1)


def _currents(cube: _Cube, grids: Grids, temperature: float) -> dict[str, Array]:
    """Return `current`, `vdsat` and, where it is given, `leak` at the voltages of the tables."""
    ut = float(thermal_voltage(temperature))
    scale, p = _pinch_offs(cube, ut)
    length, width = (axis.reshape(shape) for axis, shape in zip(cube.axes[:2], _FIRST, strict=True))
    vdsat = cube["vdsat"] if cube.has(["vdsat"]) else 2.0 * ut * softplus(p, ut)[0] + 4.0 * ut
    resampled = _resampled(cube, p, grids.current, grids)
    drain = grids.current.axes[1].samples[:, None]
    current = level(resampled, drain, ut) * scale * width / length
    found = {"current": current, "vdsat": _resampled(cube, vdsat, grids.vdsat, grids)}
    if cube.has(["isub"]):
        share = share_figure(cube["isub"] / cube["id"])
        found["leak"] = share_of(_resampled(cube, share, grids.leak, grids)) * grids.thinned(current, grids.leak)
    return found


_FIRST = ((-1, 1, 1, 1, 1), (-1, 1, 1, 1))


def _pinch_offs(cube: _Cube, ut: float) -> tuple[float, Array]:
    """Return the specific current of a square, and the pinch-off voltages of a cube."""
    length, width = (axis.reshape(shape) for axis, shape in zip(cube.axes[:2], _FIRST, strict=True))
    square = cube["id"] * length / width
    at_rest = int(np.abs(cube.axes[4]).argmin())
    scale = specific_current(cube.axes[2], square[-1, -1, :, -1, at_rest], ut)
    p = pinch_off(square / scale, np.broadcast_to(cube.axes[3][:, None], square.shape), ut)
    return scale, without_cliffs(p, cube.axes[2], 2)


def _small(cube: _Cube, whole: _Cube, grids: Grids, temperature: float) -> dict[str, Array]:
    """Return capacitances and noise at the voltages of the tables."""
    found = {name: _resampled(cube, cube[name], grids.gate, grids) for name in CAPACITANCES}
    if cube.has(NOISE):
        rows = {
            name: np.log(np.maximum(cube[column], 1e-60))
            for name, column in zip(("white", "lower", "low"), NOISE, strict=True)
        }
        return found | {name: np.exp(_resampled(cube, row, grids.noise, grids)) for name, row in rows.items()}
    ut = float(thermal_voltage(temperature))
    lengths = [int(np.abs(whole.axes[0] - x).argmin()) for x in cube.axes[0]]
    widths = [int(np.abs(whole.axes[1] - x).argmin()) for x in cube.axes[1]]
    scale, p = _pinch_offs(whole, ut)
    at = _resampled(whole, p[np.ix_(lengths, widths)], grids.noise, grids)
    length, width = (axis.reshape(shape) for axis, shape in zip(cube.axes[:2], _FIRST, strict=True))
    # Half of gms in weak inversion, two thirds of it in strong: the saturated channel of Enz and Vittoz.
    u, s = softplus(at, ut)
    gamma = (1.0 + u**2 / (1.0 + u**2) / 3.0) / 2.0
    white = 4.0 * BOLTZMANN * temperature * gamma * scale * width / length * u * s / ut
    return found | {"white": white, "lower": white, "low": white}


def _junctions(
    frame: pd.DataFrame | None, condition: Condition, channel: str, reverse: Array, path: Path | None
) -> dict[str, Array]:
    """Return the capacitances of junctions at the voltages of the tables."""
    if frame is None:
        return {name: np.zeros(len(reverse)) for name in JUNCTION[1:]}
    chosen = frame[
        (frame["channel"] == channel)
        & (frame["corner"] == condition.corner)
        & np.isclose(frame["temperature"], condition.temperature, atol=0.05)
    ].sort_values("reverse")
    if len(chosen) < 2:
        raise InputError(f"{path}: {condition}: has fewer than two rows of channel {channel}")
    return {name: np.interp(reverse, chosen["reverse"], chosen[name]) for name in JUNCTION[1:]}
