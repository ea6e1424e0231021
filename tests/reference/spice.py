"""A writer of SPICE decks and a runner, for the checks against a circuit simulator; nothing of it is in the package.

Written from the SPICE manuals, not from the package's equations: it takes process values, sizes and the terminals of
the elements. Many sized stages stand side by side in one deck, each with sources of its own, so that one process of
the simulator solves them all. Names: node ``tail`` of stage 3 is ``tail_3``, transistor ``input.p`` is ``m_input_p_3``.
"""

from __future__ import annotations

import subprocess
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from optisize.process.card import Process
from optisize.process.law import Array
from optisize.process.parameters import TransistorParameters
from optisize.stage.circuit import Circuit

OXIDE_PERMITTIVITY = 3.9 * 8.854214871e-12  # F/m, the constant with which the level-1 model reads TOX
OPTIONS = ".options reltol=1e-7 abstol=1e-16 vntol=1e-10 gmin=1e-16 temp=27 tnom=27 itl1=500"
NODES = {"in+": "inp", "in-": "inn", "supply": "vdd", "ground": "0"}


@dataclass(frozen=True)
class Transistor:
    """One transistor of a deck: its name, its nodes, its channel and its drawn shape (SI)."""

    name: str
    drain: str
    gate: str
    source: str
    bulk: str
    channel: str
    width: float
    length: float
    drain_area: float
    source_area: float
    drain_edge: float
    source_edge: float


Device = Callable[[Transistor, Process], list[str]]


def number(value: float) -> str:
    """Return a number with every digit of it."""
    return f"{value:.17g}"


def node(name: str, k: int) -> str:
    """Return the name in the deck of a node of stage `k`."""
    return "0" if name == "ground" else f"{NODES.get(name, name)}_{k}"


def part(name: str, k: int) -> str:
    """Return the name in the deck of an element of stage `k`."""
    return f"{name.replace('.', '_')}_{k}"


def level1(t: Transistor, process: Process) -> list[str]:
    """Return a level-1 transistor with a model of its own, since lambda follows its length; junctions do not leak."""
    card: TransistorParameters = process.nmos if t.channel == "n" else process.pmos
    values = {
        "level": 1,
        "vto": card.threshold if t.channel == "n" else -card.threshold,
        "kp": card.current_factor,
        "gamma": card.body_effect,
        "phi": card.surface_potential,
        "lambda": card.channel_modulation / t.length,
        "tox": OXIDE_PERMITTIVITY / card.oxide_capacitance,
        "cgso": card.overlap_capacitance,
        "cgdo": card.overlap_capacitance,
        "cj": card.junction_capacitance,
        "cjsw": card.sidewall_capacitance,
        "mj": card.junction_grading,
        "mjsw": card.sidewall_grading,
        "pb": card.junction_potential,
        "is": 1e-30,
    }
    model = " ".join(f"{key}={number(value)}" for key, value in values.items())
    shape = {"w": t.width, "l": t.length, "ad": t.drain_area, "as": t.source_area}
    shape |= {"pd": t.drain_edge, "ps": t.source_edge}
    drawn = " ".join(f"{key}={number(value)}" for key, value in shape.items())
    return [
        f"m_{t.name} {t.drain} {t.gate} {t.source} {t.bulk} model_{t.name} {drawn}",
        f".model model_{t.name} {t.channel}mos {model}",
    ]


def transistors(circuit: Circuit, k: int) -> list[Transistor]:
    """Return the transistors of stage `k`; the units of a mirror are one device as wide as all of them."""
    top, drawn = circuit.topology, circuit.drawn
    return [
        Transistor(
            name=part(t.name, k),
            drain=node(t.drain, k),
            gate=node(t.gate, k),
            source=node(t.source, k),
            bulk=node(top.bulk_node(t), k),
            channel=top.channel(t),
            width=circuit.sizes[f"{t.group}.width"][k] * (circuit.sizes[t.units][k] if t.units else 1.0),
            length=circuit.sizes[f"{t.group}.length"][k],
            drain_area=drawn.drain_area[row, k],
            source_area=drawn.source_area[row, k],
            drain_edge=drawn.drain_edge[row, k],
            source_edge=drawn.source_edge[row, k],
        )
        for row, t in enumerate(top.transistors)
    ]


def stage(circuit: Circuit, k: int, device: Device) -> list[str]:
    """Return the elements of stage `k`, its supply and its load, without its inputs."""
    top, process, sizes = circuit.topology, circuit.process, circuit.sizes
    lines = [f"v_supply_{k} {node('supply', k)} 0 {number(circuit.conditions.supply)}"]
    for t in transistors(circuit, k):
        lines += device(t, process)
    for r in top.resistors:
        value = sizes[r.size][k]
        ends = node(r.a, k), node(r.b, k)
        lines.append(f"r_{part(r.name, k)} {ends[0]} {ends[1]} {number(value)}")
        squares = value / process.resistor.sheet_resistance
        half = 0.5 * process.resistor.capacitance * squares * process.resistor.width**2
        lines += [f"c_{part(r.name, k)}_{i} {end} 0 {number(half)}" for i, end in enumerate(ends)]
    for s in top.sources:
        a, b = (s.a, s.b) if top.input == "nmos" else (s.b, s.a)
        lines.append(f"i_{part(s.name, k)} {node(a, k)} {node(b, k)} {number(sizes[s.size][k])}")
    for name, _ in top.output:
        lines.append(f"c_load_{part(name, k)} {node(name, k)} 0 {number(circuit.conditions.load_capacitance)}")
    return lines


def nodesets(circuit: Circuit, k: int, voltages: Array) -> list[str]:
    """Return where the simulator shall begin: voltages of the unknown nodes to a tenth of a volt, no finer."""
    names = circuit.topology.unknown
    return [f".nodeset v({node(name, k)})={voltages[i, k]:.1f}" for i, name in enumerate(names)]


@dataclass(frozen=True)
class Plot:
    """The vectors of one analysis by name, each with one value a point."""

    names: dict[str, int]
    data: np.ndarray

    def __getitem__(self, name: str) -> np.ndarray:
        return self.data[self.names[name.lower()]]

    def stack(self, names: Sequence[str]) -> np.ndarray:
        """Return vectors of the given names, (names, points)."""
        return np.array([self[name] for name in names])


def read_raw(path: Path) -> Plot:
    """Read a binary raw file of one plot."""
    raw = path.read_bytes()
    head, _, body = raw.partition(b"Binary:\n")
    lines = head.decode("ascii").splitlines()
    fields = dict(line.split(": ", 1) for line in lines if ": " in line)
    count, points = int(fields["No. Variables"]), int(fields["No. Points"])
    start = lines.index("Variables:") + 1
    names = {}
    for line in lines[start : start + count]:
        index, name = line.split()[:2]
        inner = name[2:-1]  # parameters of devices are written as i(@m1[id])
        names.setdefault((inner if inner.startswith("@") else name).lower(), int(index))
    kind = np.complex128 if "complex" in fields["Flags"] else np.float64
    return Plot(names, np.frombuffer(body, dtype=kind, count=count * points).reshape(points, count).T)


def simulate(
    ngspice: str, folder: Path, lines: Sequence[str], analyses: dict[str, Sequence[str]], saves: Sequence[str] = ()
) -> dict[str, Plot]:
    """Run one deck.

    Args:
        ngspice: path of the simulator.
        folder: where the files go.
        lines: the elements.
        analyses: commands of the simulator by name; the plot that the last of them makes is returned under the name.
        saves: parameters of devices, such as ``@m1[gm]``, to keep besides all voltages and source currents.
    """
    saved = [
        f".save {' '.join(chunk)}" for chunk in np.array_split(np.array(saves), len(saves) // 50 + 1) if len(chunk)
    ]
    control = ["set filetype=binary"]
    for name, commands in analyses.items():
        control += [*commands, f"write {name}.raw all"]
    deck = ["* stages side by side", *lines, OPTIONS, ".save all", *saved, ".control", *control, ".endc", ".end"]
    (folder / "deck.sp").write_text("\n".join(deck) + "\n", encoding="ascii")
    done = subprocess.run(
        [ngspice, "-b", "-n", "deck.sp"], cwd=folder, capture_output=True, text=True, timeout=60, check=False
    )
    missing = [name for name in analyses if not (folder / f"{name}.raw").exists()]
    if missing:
        raise AssertionError(f"no result of {missing}: {done.stdout[-1500:]} {done.stderr[-1500:]}")
    return {name: read_raw(folder / f"{name}.raw") for name in analyses}
