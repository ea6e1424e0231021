"""What a process can do: transconductance efficiency, intrinsic gain and speed against inversion level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from optisize.process.card import Channel, Process
from optisize.process.law import Array

LEVELS = (0.01, 0.1, 1.0, 10.0, 100.0)
_WIDTH = 10e-6  # m; none of the figures depends on it, overlaps and matching aside


@dataclass(frozen=True)
class Characteristic:
    """One channel length of one kind of transistor, saturated, at several inversion levels, each (K,).

    Attributes:
        length: channel length [m].
        inversion: inversion level.
        gm_over_id: transconductance efficiency [1/V].
        intrinsic_gain: gm over gds.
        transit_frequency: gm over 2 pi times all gate capacitance [Hz].
        current_per_width: drain current per width [A/m].
    """

    channel: Channel
    length: float
    inversion: Array
    gm_over_id: Array
    intrinsic_gain: Array
    transit_frequency: Array
    current_per_width: Array


def lengths(process: Process) -> tuple[float, ...]:
    """Return a few channel lengths from the shortest upwards, on the grid."""
    grid = process.grid
    wanted = [grid.minimum_length * k for k in (1.0, 2.0, 5.0, 20.0)]
    return tuple(round(x / grid.step) * grid.step for x in wanted if x <= grid.maximum_length)


def characteristic(
    process: Process, channel: Channel, length: float, levels: Sequence[float] = LEVELS
) -> Characteristic:
    """Return the characteristic of one channel length at the process's nominal temperature.

    The source is at the bulk and the drain at half of the usual supply, or at twice vdsat where that is more.
    """
    wanted = np.array([levels], dtype=float)
    size = np.ones_like(wanted)
    law, _ = process.bind_law(
        [channel], _WIDTH * size, length * size, process.nominal.temperature, process.corner_names[0]
    )
    vs = np.zeros_like(wanted)
    low, high = np.full_like(wanted, -2.0), np.full_like(wanted, 20.0)
    for _ in range(60):
        vg = 0.5 * (low + high)
        below = law.saturation(vg, vs + 1.0, vs).inversion < wanted
        low, high = np.where(below, vg, low), np.where(below, high, vg)
    vg = 0.5 * (low + high)
    vd = np.maximum(0.5 * process.nominal.supply, 2.0 * law.saturation(vg, vs + 1.0, vs).vdsat)
    drain, gate = law.drain(vg, vd, vs), law.capacitances(vg, vd, vs)
    total = gate.cgs + gate.cgd + gate.cgb
    return Characteristic(
        channel=channel,
        length=length,
        inversion=wanted[0],
        gm_over_id=(drain.gm / drain.id)[0],
        intrinsic_gain=(drain.gm / drain.gds)[0],
        transit_frequency=(drain.gm / (2.0 * np.pi * total))[0],
        current_per_width=drain.id[0] / _WIDTH,
    )


@dataclass(frozen=True)
class Parameter:
    """One parameter of a process with its value as text and its meaning."""

    table: str
    name: str
    value: str
    meaning: str


def parameters(process: Process) -> list[Parameter]:
    """Return every parameter of a process with unit and meaning, in the order of the process file."""
    from optisize.quantities import In

    rows = []
    tables = ("nominal", "nmos", "pmos", "resistor", "grid")
    named = [(name, getattr(process, name)) for name in tables]
    for corner in process.corners:
        for part in ("nmos", "pmos"):
            named.append((f"corners.{corner}.{part}", getattr(process.corners[corner], part)))
        named.append((f"corners.{corner}", process.corners[corner]))
    for table, record in named:
        for name, info in type(record).model_fields.items():
            marks = [m for m in info.metadata if isinstance(m, In)]
            if marks:
                rows.append(Parameter(table, name, marks[0].text(getattr(record, name)), info.description or ""))
    return rows
