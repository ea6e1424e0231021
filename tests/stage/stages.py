"""Stages for the checks of the kernel: one sizing by hand of every kind, and processes with effects left out."""

from __future__ import annotations

from dataclasses import replace
from itertools import product

import numpy as np

from optisize.process.card import Process, load_process, thermal_voltage
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology, build
from optisize.stage.bias import OperatingPoint, operating_point
from optisize.stage.circuit import Circuit, Conditions, size_circuit

UT = float(thermal_voltage(300.15))
Kind = tuple[str, ...]
KINDS: list[Kind] = [
    (input, load, tail, output)
    for input, (load, output), tail in product(
        ("nmos", "pmos"),
        (("resistor", "single-ended"), ("resistor", "differential"), ("mirror", "single-ended")),
        ("ideal", "single"),
    )
] + [  # every other load, tail and form once or more; all of them together stand against the circuit simulator
    ("nmos", "diode", "resistor", "differential"),
    ("pmos", "diode", "cascode", "single-ended"),
    ("nmos", "source", "single", "differential"),
    ("pmos", "source", "cascode", "differential"),
    ("nmos", "source", "ideal", "differential"),
    ("pmos", "mirror", "resistor", "single-ended"),
    ("nmos", "mirror", "cascode", "single-ended"),
    ("nmos", "mirror", "single", "single-ended", "rail", "telescopic"),
    ("pmos", "source", "cascode", "differential", "rail", "telescopic"),
]

# Handbook process: 100 uA in the tail, 1 V across a load resistor, everything saturated.
BY_HAND = {
    "input.width": 100e-6,
    "input.length": 2e-6,
    "input.degeneration": 2e3,
    "input.cascode.width": 100e-6,
    "input.cascode.length": 1e-6,
    "input.cascode.bias.width": 5e-6,
    "input.cascode.bias.length": 3e-6,
    "load.width": 60e-6,
    "load.length": 4e-6,
    "load.units": 2.0,
    "load.resistance": 20e3,
    "load.cascode.width": 120e-6,
    "load.cascode.length": 1e-6,
    "load.cascode.bias.width": 8e-6,
    "load.cascode.bias.length": 3e-6,
    "tail.width": 30e-6,
    "tail.length": 3e-6,
    "tail.units": 4.0,
    "tail.resistance": 9e3,
    "tail.current": 100e-6,
    "tail.cascode.width": 30e-6,
    "tail.cascode.length": 1e-6,
    "tail.cascode.bias.width": 6e-6,
    "tail.cascode.bias.length": 3e-6,
    "bias.current": 25e-6,
}
RANGES = {"width": (1e-8, 1e-2), "length": (1e-8, 1e-3), "resistance": (10.0, 1e11), "current": (1e-14, 0.1)}


# At 1.8 V and below: a twentieth of the currents, 0.4 V across a load resistor, deeper gates for the cascodes.
LOW_VOLTAGE = {"current": 0.05, "resistance": 8.0}
LOW_VOLTAGE_CASCODE_BIAS = 0.3


def stage(kind: Kind, bulk: str = "rail", degenerated: bool = False) -> Topology:
    """Return the topology of a kind: input, load, tail and, where it says so, output, bulk and form."""
    form = kind[5] if len(kind) > 5 else "simple"
    return build(*kind[:4], bulk=bulk, form=form, degenerated=degenerated)


def exposed(topology: Topology, supply: float, low: float, high: float | None = None, load: float = 1e-12):
    """Return conditions; common-mode control holds the outputs at half of the supply."""
    held = 0.5 * supply if topology.controls else None
    return Conditions(supply, (low, low if high is None else high), load, output_common_mode=held)


def by_hand(topology: Topology, **changes: float | Array) -> dict[str, Array]:
    """Return the sizing by hand, with sizes changed; ``input_width`` stands for ``input.width``."""
    changed = BY_HAND | {key.replace("_", "."): value for key, value in changes.items()}
    values = np.broadcast_arrays(*(np.atleast_1d(changed[name]) for name in topology.size_names))
    return {name: value.astype(float) for name, value in zip(topology.size_names, values, strict=True)}


def random_sizes(topology: Topology, count: int, seed: int, ranges: dict[str, tuple[float, float]] = RANGES) -> dict:
    """Return random sizes over ranges by kind, by default far beyond anything that makes sense."""
    rng = np.random.default_rng(seed)
    sizes = {}
    for size in sorted(topology.sizes, key=lambda size: size.name):
        low, high = ranges.get(size.kind, (1.0, 20.0))
        sizes[size.name] = low * (high / low) ** rng.random(count)
    return sizes


def near_hand(topology: Topology, process: Process, count: int, seed: int, spread: float = 1.6) -> dict[str, Array]:
    """Return random sizes around those by hand, up to a factor each way, scaled to the supply of the process."""
    rng, low = np.random.default_rng(seed), process.nominal.supply < 2.0
    kinds = {size.name: size.kind for size in topology.sizes}
    sizes = {}
    for name, value in sorted(by_hand(topology).items()):
        sizes[name] = value * spread ** rng.uniform(-1.0, 1.0, count)
        if low:
            sizes[name] *= LOW_VOLTAGE.get(kinds[name], 1.0)
            if name.endswith("cascode.bias.width"):
                sizes[name] *= LOW_VOLTAGE_CASCODE_BIAS
    return sizes


def has_room(kind: Kind, process: str) -> bool:
    """Tell whether a kind fits under the supply of a process: not four transistors between 1.2 V."""
    return process != "generic-65" or (kind[2] != "cascode" and len(kind) < 6)


def kinds_in(*processes: str) -> list[tuple[str, Kind]]:
    """Return every kind in each process that has room for it."""
    return [(process, kind) for process in processes for kind in KINDS if has_room(kind, process)]


def named(case: object) -> str | None:
    """Return the name of a kind in the list of tests."""
    return "-".join(case) if isinstance(case, tuple) else None


def middle(input: str, supply: float = 3.3) -> float:
    """Return a common mode at which a stage of that input has room."""
    return (0.56 if input == "nmos" else 0.44) * supply


def analysed(kind: Kind, process: Process | str = "handbook", bulk: str = "rail", **changes: float | Array) -> Analysis:
    """Return the analysis of the sizing by hand; degenerated where that resistance is among the changes."""
    p = load_process(process) if isinstance(process, str) else process
    topology = stage(kind, bulk, "input_degeneration" in changes)
    conditions = exposed(topology, p.nominal.supply, middle(kind[0], p.nominal.supply))
    return Analysis(size_circuit(topology, p, conditions, by_hand(topology, **changes)))


def under(a: Analysis, **conditions: object) -> Analysis:
    """Return the analysis of the same sizes under conditions that differ."""
    c = a.circuit
    return Analysis(size_circuit(a.topology, c.process, replace(c.conditions, **conditions), c.sizes))


def saturated(
    kind: Kind, process: str, count: int, seed: int, bulk: str = "rail", half_range: float = 0.0, room: float = 0.02
) -> Analysis:
    """Return random stages around the sizing by hand, all saturated in the middle of their common-mode range."""
    p, topology = load_process(process), stage(kind, bulk)
    common = middle(kind[0], p.nominal.supply)
    conditions = exposed(topology, p.nominal.supply, common - half_range, common + half_range)
    every = Analysis(size_circuit(topology, p, conditions, near_hand(topology, p, 5 * count + 10, seed)))
    good = np.flatnonzero(every.converged & (every.room_at_rest > room))[:count]
    assert len(good) == count
    return Analysis(every.circuit.take(good))


def figure(a: Analysis, transistor: str, name: str) -> Array:
    """Return a derivative of one transistor, (N,)."""
    return getattr(a.drain, name)[a.wiring.rows[transistor]]


def without(process: str, **parameters: float) -> Process:
    """Return a process with some parameters of both kinds of transistor changed."""
    p = load_process(process)
    return p.model_copy(
        update={"nmos": p.nmos.model_copy(update=parameters), "pmos": p.pmos.model_copy(update=parameters)}
    )


def driven_point(circuit: Circuit, positive: Array, negative: Array) -> OperatingPoint:
    """Return the operating point with input voltages that differ from design to design."""
    return operating_point(circuit, circuit.driven(positive, negative))


def pair_currents(circuit: Circuit, point: OperatingPoint) -> Array:
    """Return the currents of the two input transistors, positive for either channel, (2, N)."""
    terminals = circuit.network.terminals(point.v)
    pair = circuit.wiring.pair
    return circuit.law.drain(terminals.gate, terminals.drain, terminals.source).id[pair]
