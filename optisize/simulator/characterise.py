"""From a SPICE model library to tables: decks, runs side by side, checks, and the tables that come of it."""

from __future__ import annotations

import os
import re
import subprocess
import tempfile
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor, as_completed
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

from optisize import __version__
from optisize.errors import InputError, SimulationFailed, listing
from optisize.process.card import BOLTZMANN, thermal_voltage
from optisize.process.law import Array
from optisize.process.library import Library, LibraryDevice
from optisize.process.pinch import pinch_off, specific_current
from optisize.process.table import Surfaces, TableLaw
from optisize.process.tabulated import CHANNELS, SMALL, ChannelTable, Condition, Grids, Sizes, Tables, built
from optisize.simulator.limits import LibraryText, model_limits, read_library
from optisize.simulator.ngspice import last_lines, run
from optisize.simulator.plan import grids, sizes
from optisize.simulator.sweeps import FIGURES, CurrentSweep, JunctionSweep, SmallSweep, Subject, Sweep

LENGTHS_PER_DECK = 3
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
        request: what was asked for, its devices with the path to their transistor.
        text: what the library says at the first corner.
        grids, sizes: voltages, and sizes by channel.
        figures: of the operating point, by channel.
    """

    request: Request
    text: LibraryText
    grids: Grids
    sizes: Mapping[str, Sizes]
    figures: Mapping[str, tuple[str, ...]]

    def sweeps(self, condition: Condition, channel: str) -> list[Sweep]:
        """Return the sweeps of one channel at one condition."""
        of, library = self.sizes[channel], self.request.library
        subject = Subject(library, channel, condition.corner, condition.temperature, self.figures[channel])
        stride = (self.grids.current.axes[1].count - 1) // (self.grids.vdsat.axes[1].count - 1)
        parts = np.array_split(of.lengths, int(np.ceil(len(of.lengths) / LENGTHS_PER_DECK)))
        sweeps: list[Sweep] = [CurrentSweep(subject, part, of.widths, self.grids.current, stride) for part in parts]
        small = self.grids.small
        sweeps += [SmallSweep(subject, of.lengths, of.small_widths, small, k) for k in range(small.axes[2].count)]
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
    texts = [read_library(library.path, [*library.init_sections, s]) for s in library.sections.values()]
    figures: dict[str, tuple[str, ...]] = dict.fromkeys(CHANNELS, FIGURES)
    models = {channel: library.device(channel).name for channel in CHANNELS}
    if simulator is not None:
        library, figures, models = _tried(simulator, request)
    else:
        library = _by_text(library, texts[0])
    for channel in CHANNELS:
        if library.device(channel).kind == "subcircuit" and not library.device(channel).inner:
            raise InputError(f"{library.device(channel).name}: name the transistor inside of it with --inner")
    chosen = {}
    for channel in CHANNELS:
        name = library.device(channel).name
        limits = model_limits(texts[0], models[channel])
        chosen[channel] = sizes(limits, request.lengths[channel], request.widths[channel], name)
    return Plan(replace(request, library=library), texts[0], grids(request.supply), chosen, figures)


def _by_text(library: Library, text: LibraryText) -> Library:
    """Return the library with the path to each transistor as the text of its subcircuit says."""
    changed = {}
    for key in ("nmos", "pmos"):
        device: LibraryDevice = getattr(library, key)
        if device.kind == "subcircuit" and not device.inner:
            changed[key] = device.model_copy(update={"inner": _first_inside(device.name, text)})
    return library.model_copy(update=changed)


def _first_inside(name: str, text: LibraryText) -> str:
    """Return the first transistor of a subcircuit, or an empty text."""
    inside = False
    for line in text.lines:
        words = line.split()
        if words[0].lower() == ".subckt":
            inside = len(words) > 1 and words[1].lower() == name.lower()
        elif inside and words[0].lower().startswith("m"):
            return words[0].lower()
    return ""


def _tried(
    simulator: Path, request: Request
) -> tuple[Library, dict[str, tuple[str, ...]], dict[str, str]]:
    """Try one transistor of each channel; return the library with their paths, their figures, and their models."""
    library, figures, models = request.library, {}, {}
    for channel in CHANNELS:
        corner = next(iter(library.sections))
        subject = Subject(library, channel, corner, request.temperatures[0])
        lengths, widths = request.lengths[channel], request.widths[channel]
        keys = f"{library.device(channel).name} of {library.path.name}"
        with tempfile.TemporaryDirectory(prefix="optisize-") as name:
            said = run(simulator, Path(name), _probe(subject, lengths, widths), timeout=TIMEOUT)
        devices, rows = _shown(said)
        if not devices or not {"id", "vdsat"} <= rows.keys():
            raise SimulationFailed(f"{keys}: the simulator finds no such transistor{last_lines(_without_noise(said))}")
        device = library.device(channel)
        found = [d for d in devices if device.kind == "model" or not device.inner or d.endswith(f".{device.inner}")]
        if device.kind == "subcircuit":
            if len(found) != 1:
                inner = listing(d.split(".", 2)[-1] for d in devices)
                raise InputError(f"{keys}: has the transistors {inner}; say with --inner which one is read")
            path = found[0].split(".", 2)[-1]
            library = library.model_copy(update={f"{channel}mos": device.model_copy(update={"inner": path})})
        figures[channel] = tuple(f for f in FIGURES if f in rows)
        model = rows["model"][devices.index(found[0])]
        models[channel] = model.rpartition(".")[0] if model.rpartition(".")[2].isdigit() else model
    return library, figures, models


def _probe(subject: Subject, lengths: Sequence[float], widths: Sequence[float]) -> str:
    """Return a deck that shows one transistor at one operating point."""
    s = subject
    width, length = (max(widths) if widths else 5e-6), (max(lengths) if lengths else 1e-6)
    lines = [*s.head("what there is"), f"vg g 0 {s.sign}", f"vd d 0 {s.sign}"]
    lines.append(s.instance("probe", ("d", "g", "0", "0"), width, length))
    shown = ("l", "w", "id", "isub", "vdsat", "gm", "gds")
    return "\n".join([*lines, ".control", "set num_threads=1", "op", f"show m : {' '.join(shown)}", ".endc", ".end"])


def _shown(said: str) -> tuple[list[str], dict[str, list[str]]]:
    """Return the devices that the simulator shows, and its rows of figures by name."""
    rows: dict[str, list[str]] = {}
    for line in said.splitlines():
        words = line.split()
        if len(words) >= 2 and re.fullmatch(r"[a-z]\w*", words[0]) and "?" not in words[1]:
            rows.setdefault(words[0], words[1:])
    return rows.get("device", []), rows


def _without_noise(said: str) -> str:
    return "\n".join(x for x in said.splitlines() if not x.startswith("Note:") and "no simulations run" not in x)


def characterise(
    planned: Plan, simulator: Path, *, workers: int | None = None, watch: Callable[[int, int], None] | None = None
) -> Tables:
    """Run every sweep, side by side, and return the tables.

    Args:
        planned: what to run.
        simulator: its path.
        workers: how many run at the same time; the cores that there are where None.
        watch: called with how many sweeps are done, and of how many.

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
                watch(done, len(jobs))
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
            said = run(simulator, folder, sweep.deck(), timeout=TIMEOUT)
        except SimulationFailed as failure:
            raise SimulationFailed(f"{sweep.title}: {failure}") from None
        return sweep.collect(folder, said)


def _joined(parts: Sequence[Mapping[str, Array]]) -> dict[str, Array]:
    """Return the figures of several sweeps put together: currents by length, capacitances and noise by vsb."""
    names = dict.fromkeys(name for part in parts for name in part)
    joined = {}
    for name in names:
        arrays = [part[name] for part in parts if name in part]
        axis = {"current": 0, "vdsat": 0}.get(name, -1)
        joined[name] = np.concatenate(arrays, axis=axis) if len(arrays) > 1 else arrays[0]
    return joined


def attributes(planned: Plan, simulator: Path) -> dict[str, str]:
    """Return what a file of tables says of where it comes from."""
    library, texts = planned.request.library, planned.text
    return {
        "title": f"transistors of {library.path.name} for the table law of optisize",
        "library": str(library.path),
        "library_sha256": texts.sha256,
        "library_files": ";".join(str(file) for file in texts.files),
        "devices": ";".join(library.device(channel).name for channel in CHANNELS),
        "sections": ";".join(f"{corner}={section}" for corner, section in library.sections.items()),
        "shape": "one finger; a transistor of F fingers in U units is F U of them in parallel (m = F U, nf = 1)",
        "simulator": version(simulator),
        "made_by": f"optisize {__version__}",
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
    }


def version(simulator: Path) -> str:
    """Return name and version of the simulator, as it says itself."""
    try:
        done = subprocess.run([str(simulator), "--version"], capture_output=True, text=True, timeout=20, check=False)
    except (OSError, subprocess.TimeoutExpired):
        return simulator.name
    match = re.search(r"ngspice-\S+", done.stdout)
    return match[0] if match else simulator.name


def tables_of(
    grid: Grids,
    of: Mapping[str, Sizes],
    raw: Mapping[tuple[Condition, str], Mapping[str, Array]],
    described: Mapping[str, str],
) -> Tables:
    """Return tables of what was swept.

    Args:
        grid, of: voltages, and sizes by channel.
        raw: by condition and channel: `current` [A] and `vdsat` [V]; `cgg`, `cgd`, `cgs` [F], `white`, `low`, `lower`
            [A^2/Hz, at any frequency, at ten hertz and at one]; `area`, `edge`, `gate` of the junctions.
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
    shape = (len(of.lengths), len(of.small_widths), *(axis.count for axis in grid.small.axes))
    figures = {"pinch_off": p, "vdsat": raw["vdsat"]} | {name: np.zeros(shape) for name in SMALL}
    junction = {name: raw[name] for name in ("area", "edge", "gate")}
    return ChannelTable(specific, 1.0, figures, junction)


def _with_small(surfaces: Surfaces, row: int, raw: Mapping[str, Array], temperature: float) -> ChannelTable:
    """Return the table of one channel with capacitances and noise, which need the slopes of its currents."""
    channel = CHANNELS[row]
    of, table = surfaces.sizes[channel], surfaces.tables[channel]
    width, length = of.small_widths[:, None, None, None], of.lengths[:, None, None, None, None]
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
    vgs, vds, vsb = (axis.samples for axis in surfaces.grids.small.axes)
    width, length, g, d, s = np.meshgrid(of.small_widths, of.lengths, vgs, vds, vsb, indexing="ij")
    width, length, g, d, s = (np.moveaxis(x, 1, 0) for x in (width, length, g, d, s))
    flat = [x.reshape(1, -1) for x in (width, length, g, d, s)]
    parameters = {
        "channel": np.array([[row]]),
        "threshold": np.zeros((1, 1)),
        "current_factor": np.ones((1, 1)),
    }
    law = TableLaw.of(surfaces, parameters, flat[0], flat[1], np.ones_like(flat[0]))
    drain = law.drain(flat[2] + flat[4], flat[3] + flat[4], flat[4])
    return {"gm": drain.gm.reshape(g.shape), "gms": drain.gms.reshape(g.shape)}


def _filled(values: Array, known: Array) -> Array:
    """Return values with those that are not known as the next ones that are, along vgs from its upper end."""
    filled = np.where(known, values, 0.0)
    for i in range(filled.shape[2] - 2, -1, -1):
        filled[:, :, i] = np.where(known[:, :, i], filled[:, :, i], filled[:, :, i + 1])
    return filled
