"""Tables sampled from the charge law: what the table law gives can then be held against that law itself."""

from __future__ import annotations

import tempfile
from functools import lru_cache
from pathlib import Path

import numpy as np

from optisize.process.card import BOLTZMANN, Process, load_process
from optisize.process.law import Array
from optisize.process.spline import Box
from optisize.process.tabulated import BOXES, Condition, Grids, Sizes, Tables, gate_lift, write_tables
from optisize.simulator.characterise import tables_of
from optisize.simulator.plan import grids

SOURCE = "generic-180"
NOMINAL = 300.15
LENGTHS = np.array([0.18, 0.25, 0.4, 0.7, 1.2, 2.5, 5.0, 8.0]) * 1e-6
WIDTHS = np.array([0.22, 1.0, 10.0]) * 1e-6
TEXT = """\
title = "sampled"
law   = "table"
[nominal]
supply = "1.8 V"
[table]
file = "sampled.nc"
[nmos]
threshold_matching = "4.5 mV*um"
factor_matching    = "1.0 %*um"
[pmos]
threshold_matching = "4.0 mV*um"
factor_matching    = "0.9 %*um"
[resistor]
sheet_resistance = "1.0 kohm"
width            = "1 um"
capacitance      = "0.09 fF/um^2"
matching         = "2.2 %*um"
[grid]
step           = "5 nm"
minimum_length = "0.18 um"
maximum_length = "8 um"
minimum_width  = "0.22 um"
maximum_finger = "10 um"
diffusion      = "0.48 um"
spacing_factor = 1.6
"""
_KEPT: list[tempfile.TemporaryDirectory[str]] = []


def _points(sizes: tuple[Array, Array], box: Box) -> tuple[Array, ...]:
    """Return length, width, vg, vd and vs of every point of a table, each (1, points), and the shape of the table."""
    gate, vds, vsb = (axis.samples for axis in box.axes)
    length, width, g, d, s = np.meshgrid(*sizes, gate, vds, vsb, indexing="ij")
    vgs = g + gate_lift(s)[0]
    return tuple(x.reshape(1, -1) for x in (length, width, vgs + s, d + s, s))


def sampled_raw(source: Process, grid: Grids, channel: str, temperature: float, corner: str) -> dict[str, Array]:
    """Return what sweeps of one channel would give."""
    raw = {}
    for name, box in ((name, getattr(grid, name)) for name in BOXES):
        length, width, *v = _points((LENGTHS, WIDTHS), box)
        shape = (len(LENGTHS), len(WIDTHS), *(axis.count for axis in box.axes))
        law, parameters = source.bind_law([channel], width, length, temperature, corner)
        drain = law.drain(*v)
        if name == "current":
            raw["current"] = drain.id.reshape(shape)
        elif name == "vdsat":
            raw["vdsat"] = law.saturation(*v).vdsat.reshape(shape)
        elif name == "gate":
            gate = law.capacitances(*v)
            small = {"cgg": gate.cgs + gate.cgd + gate.cgb, "cgd": gate.cgd, "cgs": gate.cgs}
            raw |= {key: value.reshape(shape) for key, value in small.items()}
        elif name == "noise":
            white = 4.0 * BOLTZMANN * temperature * law.noise_conductance(*v)
            ones = np.ones_like(width)
            parts = {f: law.flicker(parameters, drain, tuple(v), (width, ones, length), f) for f in (1.0, 10.0)}
            small = {"white": white, "lower": white + parts[1.0], "low": white + parts[10.0]}
            raw |= {key: value.reshape(shape) for key, value in small.items()}
    reverse = grid.reverse[None]
    zero, one = np.zeros_like(reverse), np.ones_like(reverse)
    raw["area"] = law.junctions(parameters, one, zero, reverse)[0]
    raw["edge"] = law.junctions(parameters, zero, one, reverse)[0]
    return raw | {"gate": np.zeros_like(grid.reverse)}


def sampled_tables(conditions: tuple[Condition, ...] = (Condition("typical", NOMINAL),)) -> Tables:
    """Return tables of both channels of the source."""
    source, none = load_process(SOURCE), np.empty(0)
    grid = grids(1.8)
    sizes = dict.fromkeys("np", Sizes(LENGTHS, WIDTHS, LENGTHS, WIDTHS, none, none))
    raw = {(c, ch): sampled_raw(source, grid, ch, c.temperature, c.corner) for c in conditions for ch in "np"}
    return tables_of(grid, sizes, raw, {"title": "sampled charge law", "simulator": "the charge law"})


@lru_cache
def sampled_process() -> Path:
    """Return the path of a process file with a table of the source; it stays until the tests end."""
    _KEPT.append(tempfile.TemporaryDirectory(prefix="optisize-tests-"))
    directory = Path(_KEPT[-1].name)
    write_tables(directory / "sampled.nc", sampled_tables())
    path = directory / "sampled.toml"
    path.write_text(TEXT, encoding="utf-8")
    return path
