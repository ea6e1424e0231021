"""From a SPICE model library to tables: decks, runs side by side, checks, and the tables that come of it."""

from __future__ import annotations

import os
import re
import tempfile
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor, as_completed
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from optisize import __version__
from optisize.errors import InputError, SimulationFailed, listing, nearest
from optisize.process.card import BOLTZMANN, thermal_voltage
from optisize.process.law import Array
from optisize.process.library import Library, LibraryDevice
from optisize.process.pinch import pinch_off, share_figure, specific_current, without_cliffs
from optisize.process.surfaces import Surfaces
from optisize.process.table import TableLaw
from optisize.process.tabulated import (
    CHANNELS,
    GATE,
    NOISE,
    ChannelTable,
    Condition,
    Grids,
    Sizes,
    Tables,
    built,
    gate_lift,
)
from optisize.simulator.limits import LibraryText, model_limits, read_library
from optisize.simulator.ngspice import last_lines, run
from optisize.simulator.plan import grids, sizes
from optisize.simulator.recognise import names, recognised
from optisize.simulator.resimulate import version_of
from optisize.simulator.sweeps import (
    FIGURES,
    RAW,
    CurrentSweep,
    GateSweep,
    JunctionSweep,
    NoiseSweep,
    Subject,
    Sweep,
)

LENGTHS_PER_DECK = 3
LENGTHS_PER_NOISE_DECK = 5  # a noise analysis of twice as many transistors takes four times as long
SMALL_SWEPT = ("cgg", "cgd", "cgs", "white", "low", "lower")
TIMEOUT = 900.0  # s, of one deck
OFF = 1e-33  # A^2/Hz; white noise below it is that of a transistor that is off


@dataclass(frozen=True)
class Request:
    """What is to be characterised.

    Attributes:
        library: the library with a section for every corner, its path absolute.
        supply: of the process [V].
        temperatures: absolute [K].
        lengths, widths: of the designer's choice by channel [m]; empty for those that the library suggests.
    """

    library: Library
    supply: float
    temperatures: tuple[float, ...]
    lengths: Mapping[str, Sequence[float]]
    widths: Mapping[str, Sequence[float]]

    @property
    def conditions(self) -> tuple[Condition, ...]:
        """Every corner at every temperature."""
        return tuple(Condition(c, t) for c in self.library.sections for t in self.temperatures)


@dataclass(frozen=True)
class Plan:
    """Everything that is to be simulated.

    Attributes:
        request: what was asked for, its devices as the library knows them.
        text: what the library says at the first corner.
        grids, sizes: voltages, and sizes by channel.
        figures: of the operating point, by channel.
        models: of each channel.
        marks: in the simulator's names of noise, by channel.
    """

    request: Request
    text: LibraryText
    grids: Grids
    sizes: Mapping[str, Sizes]
    figures: Mapping[str, tuple[str, ...]]
    models: Mapping[str, str]
    marks: Mapping[str, str]

    def sweeps(self, condition: Condition, channel: str) -> list[Sweep]:
        """Return the sweeps of one channel at one condition."""
        of, library = self.sizes[channel], self.request.library
        at = condition.corner, condition.temperature
        subject = Subject(library, channel, *at, self.figures[channel], self.marks[channel])
        parts = np.array_split(of.lengths, int(np.ceil(len(of.lengths) / LENGTHS_PER_DECK)))
        sweeps: list[Sweep] = [CurrentSweep(subject, part, of.widths, self.grids) for part in parts]
        few = np.array_split(of.small_lengths, int(np.ceil(len(of.small_lengths) / LENGTHS_PER_NOISE_DECK)))
        for body in range(self.grids.gate.axes[2].count):
            sweeps.append(GateSweep(subject, of.small_lengths, of.small_widths, self.grids, body))
        for body in range(self.grids.noise.axes[2].count):
            sweeps += [NoiseSweep(subject, part, of.small_widths, self.grids, body) for part in few]
        middle = len(of.lengths) // 2
        sweeps.append(JunctionSweep(subject, float(of.widths[-1]), float(of.lengths[middle]), self.grids.reverse))
        return sweeps

    def all_sweeps(self) -> list[tuple[Condition, str, Sweep]]:
        """Return every sweep with its condition and channel, in the order in which they are run."""
        return [(c, ch, s) for c in self.request.conditions for ch in CHANNELS for s in self.sweeps(c, ch)]


def plan(request: Request, simulator: Path | None) -> Plan:
    """Look at a library and lay out what is to be simulated.

    Args:
        request: what is asked for.
        simulator: with which one transistor of each channel is tried; none to take the library by its text alone.

    Raises:
        InputError: the library, a section or a size is not there.
        SimulationFailed: the library does not parse, or a device is not in it.
    """
    library = request.library
    everything = read_library(library.path, [*library.init_sections, *library.sections.values()])
    text = read_library(library.path, [*library.init_sections, next(iter(library.sections.values()))])
    known = {f"{ch}mos": recognised(library.device(ch), text) for ch in CHANNELS}
    library = library.model_copy(update={**known, "sha256": everything.sha256})
    figures: dict[str, tuple[str, ...]] = dict.fromkeys(CHANNELS, FIGURES)
    models = {channel: library.device(channel).name.lower() for channel in CHANNELS}
    marks = dict.fromkeys(CHANNELS, ".")
    request = replace(request, library=library)
    if simulator is not None:
        for channel in CHANNELS:
            device, figures[channel], models[channel], marks[channel] = _tried(simulator, request, channel, text)
            library = library.model_copy(update={f"{channel}mos": device})
    for channel in CHANNELS:
        device = library.device(channel)
        if device.kind == "subcircuit" and not device.inner:
            raise InputError(f"{device.name}: say with --inner which transistor inside of it is read")
    chosen = {}
    for channel in CHANNELS:
        limits = model_limits(text, models[channel])
        name = library.device(channel).name
        chosen[channel] = sizes(limits, request.lengths[channel], request.widths[channel], name)
    return Plan(replace(request, library=library), text, grids(request.supply), chosen, figures, models, marks)


def _tried(
    simulator: Path, request: Request, channel: str, text: LibraryText
) -> tuple[LibraryDevice, tuple[str, ...], str, str]:
    """Try one transistor; return how it is called, the figures of its operating point, its model, and the mark."""
    library = request.library
    device = library.device(channel)
    subject = Subject(library, channel, next(iter(library.sections)), request.temperatures[0])
    with tempfile.TemporaryDirectory(prefix="optisize-") as name:
        deck = _probe(subject, request.lengths[channel], request.widths[channel])
        said = run(simulator, Path(name), deck, timeout=TIMEOUT)
    devices, rows = _shown(said)
    if not devices or not {"id", "vdsat"} <= rows.keys():
        told = "\n".join(line for line in said.splitlines() if not line.startswith("Note:"))
        there = names(text)
        hint = "" if device.name.lower() in [name.lower() for name in there] else nearest(device.name, there)
        raise SimulationFailed(
            f"{device.name} of {library.path.name}: the simulator shows no operating point of such a transistor"
            f"{hint}{last_lines(told)}"
        )
    found = devices
    if device.kind == "subcircuit":
        found = [d for d in devices if d.endswith(f".{device.inner}")] if device.inner else devices
        inside = [d.split(".", 2)[-1] for d in devices]
        if len(found) != 1:
            raise InputError(
                f"{device.name}: has the transistors {listing(inside)}; say with --inner which one is read"
            )
        device = device.model_copy(update={"inner": found[0].split(".", 2)[-1]})
    model = rows["model"][devices.index(found[0])]
    head, _, tail = model.rpartition(".")
    noise = re.search(r"onoise([._])m[.\w]*probe", said)
    mark = noise[1] if noise else "."
    return device, tuple(f for f in FIGURES if f in rows), head if tail.isdigit() else model, mark


def _probe(subject: Subject, lengths: Sequence[float], widths: Sequence[float]) -> str:
    """Return a deck that shows one transistor at one operating point."""
    s = subject
    width, length = (max(widths) if widths else 5e-6), (max(lengths) if lengths else 1e-6)
    lines = [*s.head("what there is"), f"vg g 0 {s.sign}", f"vd in 0 {s.sign} ac 1", "rd in d 1"]
    lines.append(s.instance("probe", ("d", "g", "0", "0"), width, length))
    commands = ["set num_threads=1", "op", f"show m : {' '.join(FIGURES)}"]
    commands += ["noise v(d) vd dec 1 1 10 1", "setplot previous", "display"]
    return "\n".join([*lines, ".control", *commands, ".endc", ".end"]) + "\n"


def _shown(said: str) -> tuple[list[str], dict[str, list[str]]]:
    """Return the devices that the simulator shows, and its rows of figures by name."""
    rows: dict[str, list[str]] = {}
    for line in said.splitlines():
        words = line.split()
        if len(words) >= 2 and re.fullmatch(r"[a-z]\w*", words[0]) and "?" not in words[1]:
            rows.setdefault(words[0], words[1:])
    return rows.get("device", []), rows


def characterise(
    planned: Plan, simulator: Path, *, workers: int | None = None, watch: Callable[[int], None] | None = None
) -> Tables:
    """Run every sweep, side by side, and return the tables.

    Args:
        planned: what to run.
        simulator: its path.
        workers: how many run at the same time; the cores that there are where None.
        watch: called with the number of sweeps that are done.

    Raises SimulationFailed, with the simulator's last lines, as soon as one of them gives nothing that can be used.
    """
    jobs = planned.all_sweeps()
    results: list[dict[str, Array]] = [{} for _ in jobs]
    pool = ThreadPoolExecutor(workers or len(os.sched_getaffinity(0)))
    try:
        running = {pool.submit(_simulated, simulator, sweep): k for k, (_, _, sweep) in enumerate(jobs)}
        for done, future in enumerate(as_completed(running), start=1):
            results[running[future]] = future.result()
            if watch is not None:
                watch(done)
    finally:
        pool.shutdown(cancel_futures=True)
    found: dict[tuple[Condition, str], list[dict[str, Array]]] = {}
    for (condition, channel, _), result in zip(jobs, results, strict=True):
        found.setdefault((condition, channel), []).append(result)
    raw = {key: _joined(parts) for key, parts in found.items()}
    return tables_of(planned.grids, planned.sizes, raw, attributes(planned, simulator))


def _simulated(simulator: Path, sweep: Sweep) -> dict[str, Array]:
    """Run one sweep in a folder of its own that is removed afterwards."""
    with tempfile.TemporaryDirectory(prefix="optisize-") as name:
        folder = Path(name)
        try:
            said = run(simulator, folder, sweep.deck(), timeout=TIMEOUT, wanted=[RAW])
            return sweep.collect(folder, said)
        except SimulationFailed as failure:
            raise SimulationFailed(f"{sweep.title}: {failure}") from None


def _joined(parts: Sequence[Mapping[str, Array]]) -> dict[str, Array]:
    """Return the figures of several sweeps put together: by length, capacitances and noise also by vsb."""
    swept = dict.fromkeys(name for part in parts for name in part)
    joined = {}
    for name in swept:
        arrays = [part[name] for part in parts if name in part]
        if name in ("current", "vdsat", "leak"):
            joined[name] = np.concatenate(arrays)
        elif name in SMALL_SWEPT:
            joined[name] = np.concatenate([np.concatenate(row) for row in _by_body(parts, name)], axis=-1)
        elif name != "body":
            joined[name] = arrays[0]
    return joined


def _by_body(parts: Sequence[Mapping[str, Array]], name: str) -> list[list[Array]]:
    """Return a figure of sweeps by vsb, and within it by length, in the order in which they were run."""
    rows: dict[int, list[Array]] = {}
    for part in parts:
        if name in part:
            rows.setdefault(int(part["body"]), []).append(part[name])
    return list(rows.values())


def attributes(planned: Plan, simulator: Path) -> dict[str, str]:
    """Return what a file of tables says of where it comes from."""
    library = planned.request.library
    return {
        "title": f"transistors of {library.path.name} for the table law of optisize",
        "library": str(library.path),
        "library_sha256": library.sha256,
        "devices": ";".join(library.device(channel).name for channel in CHANNELS),
        "sections": ";".join(f"{corner}={section}" for corner, section in library.sections.items()),
        "shape": "one finger; a transistor of F fingers in U units is F U of them in parallel (m = F U, nf = 1)",
        "simulator": version_of(simulator),
        "made_by": f"optisize {__version__}",
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
    }


def tables_of(
    grid: Grids,
    of: Mapping[str, Sizes],
    raw: Mapping[tuple[Condition, str], Mapping[str, Array]],
    described: Mapping[str, str],
) -> Tables:
    """Return tables of what was swept.

    Args:
        grid, of: voltages, and sizes by channel.
        raw: by condition and channel: `current` [A], `vdsat` [V] and, if any, `leak` [A]; `cgg`, `cgd`, `cgs` [F];
            `white`, `low`, `lower` [A^2/Hz, at any frequency, at ten hertz and at one]; `area`, `edge`, `gate` of the
            junctions.
        described: attributes of the file.
    """
    made: dict[Condition, dict[str, ChannelTable]] = {}
    for condition in dict.fromkeys(c for c, _ in raw):
        ut = float(thermal_voltage(condition.temperature))
        tables = {ch: _currents(grid, of[ch], raw[condition, ch], ut) for ch in CHANNELS}
        surfaces = Surfaces.fitted(grid, of, tables, ut)
        made[condition] = {
            ch: _with_small(surfaces, row, raw[condition, ch], condition.temperature) for row, ch in enumerate(CHANNELS)
        }
    return built(grid, of, made, described)


def _currents(grid: Grids, of: Sizes, raw: Mapping[str, Array], ut: float) -> ChannelTable:
    """Return the table of one channel with its currents, and nothing of its capacitances and noise."""
    square = raw["current"] * of.lengths[:, None, None, None, None] / of.widths[:, None, None, None]
    vgs, vds, vsb = (axis.samples for axis in grid.current.axes)
    at_rest = int(np.abs(vsb).argmin())
    specific = specific_current(vgs, square[-1, -1, :, -1, at_rest], ut)
    p = pinch_off(square / specific, np.broadcast_to(vds[:, None], square.shape), ut)
    p = without_cliffs(p, vgs, 2)
    figures = {"pinch_off": p, "vdsat": raw["vdsat"], "leak": _share(grid, raw)}
    for name in (*GATE, *NOISE):
        counts = [axis.count for axis in grid.boxes[name].axes]
        figures[name] = np.zeros((len(of.small_lengths), len(of.small_widths), *counts))
    junction = {name: raw[name] for name in ("area", "edge", "gate")}
    return ChannelTable(specific, 1.0, figures, junction)


def _share(grid: Grids, raw: Mapping[str, Array]) -> Array:
    """Return the figure of the share of the current that flows to the bulk."""
    if "leak" not in raw:
        return np.zeros_like(grid.thinned(raw["current"], grid.leak))
    return share_figure(raw["leak"] / grid.thinned(raw["current"], grid.leak))


def _with_small(surfaces: Surfaces, row: int, raw: Mapping[str, Array], temperature: float) -> ChannelTable:
    """Return the table of one channel with capacitances and noise, which need the slopes of its currents."""
    channel = CHANNELS[row]
    of, table = surfaces.sizes[channel], surfaces.tables[channel]
    width, length = of.small_widths[:, None, None, None], of.small_lengths[:, None, None, None, None]
    area = width * length
    drain = _slopes(surfaces, row)
    white = raw["white"]
    on = (white > OFF) & (drain["gms"] > 0.0)
    noise = _filled(white / (4.0 * BOLTZMANN * temperature * np.where(on, drain["gms"], 1.0)), on)
    lower, low = raw["lower"] - white, raw["low"] - white
    flickering = on & (lower > 0.0) & (low > 0.0) & (drain["gm"] > 0.0)
    exponent = float(np.median(np.log10(lower[flickering] / low[flickering]))) if flickering.any() else 1.0
    flicker = _filled(lower / np.where(flickering, drain["gm"], 1.0) ** 2 * area, flickering)
    figures = dict(table.figures) | {"noise": noise, "flicker": flicker}
    figures |= {"cgs": raw["cgs"] / area, "cgd": raw["cgd"] / area}
    figures["cgb"] = (raw["cgg"] - raw["cgs"] - raw["cgd"]) / area
    return replace(table, flicker_exponent=exponent, figures=figures)


def _slopes(surfaces: Surfaces, row: int) -> dict[str, Array]:
    """Return gm and gms of every transistor whose noise was swept, (lengths, widths, vgs, vds, vsb)."""
    of = surfaces.sizes[CHANNELS[row]]
    vgs, vds, vsb = (axis.samples for axis in surfaces.grids.noise.axes)
    width, length, g, d, s = np.meshgrid(of.small_widths, of.small_lengths, vgs, vds, vsb, indexing="ij")
    width, length, g, d, s = (np.moveaxis(x, 1, 0) for x in (width, length, g, d, s))
    flat = [x.reshape(1, -1) for x in (width, length, g, d, s)]
    parameters = {
        "channel": np.array([[row]]),
        "threshold": np.zeros((1, 1)),
        "current_factor": np.ones((1, 1)),
    }
    law = TableLaw.of(surfaces, parameters, flat[0], flat[1], np.ones_like(flat[0]))
    gate = flat[2] + gate_lift(flat[4])[0] + flat[4]
    drain = law.drain(gate, flat[3] + flat[4], flat[4])
    return {"gm": drain.gm.reshape(g.shape), "gms": drain.gms.reshape(g.shape)}


def _filled(values: Array, known: NDArray[np.bool_]) -> Array:
    """Return values with those that are not known as the next ones that are, along vgs from its upper end."""
    filled = np.where(known, values, 0.0)
    for i in range(filled.shape[2] - 2, -1, -1):
        filled[:, :, i] = np.where(known[:, :, i], filled[:, :, i], filled[:, :, i + 1])
    return filled
