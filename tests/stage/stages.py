"""Stages for the checks of the kernel: one sizing by hand of every kind, and processes with effects left out."""

from __future__ import annotations

from itertools import product

import numpy as np

from optisize.process.card import Process, load_process
from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.bias import OperatingPoint, operating_point
from optisize.stage.circuit import Circuit, Conditions, size_circuit
from optisize.stage.assembly import Topology, build

KINDS: list[tuple[str, ...]] = [
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


def by_hand(topology: Topology, **changes: float | Array) -> dict[str, Array]:
    """Return the sizing by hand, with sizes changed; ``input_width`` stands for ``input.width``."""
    changed = BY_HAND | {key.replace("_", "."): value for key, value in changes.items()}
    values = np.broadcast_arrays(*(np.atleast_1d(changed[name]) for name in topology.size_names))
    return {name: value.astype(float) for name, value in zip(topology.size_names, values, strict=True)}


def random_sizes(topology: Topology, count: int, seed: int, ranges: dict[str, tuple[float, float]] = RANGES) -> dict:
    """Return random sizes over ranges by kind, by default far beyond anything that makes sense."""
    rng = np.random.default_rng(seed)
    sizes = {}
    for size in topology.sizes:
        low, high = ranges.get(size.kind, (1.0, 20.0))
        sizes[size.name] = low * (high / low) ** rng.random(count)
    return sizes


def middle(input: str, supply: float = 3.3) -> float:
    """Return a common mode at which a stage of that input has room."""
    return (0.56 if input == "nmos" else 0.44) * supply


def analysed(kind: tuple[str, ...], process: Process | str = "handbook", bulk: str = "rail", **changes) -> Analysis:
    """Return the analysis of the sizing by hand."""
    p = load_process(process) if isinstance(process, str) else process
    topology = build(*kind[:4], bulk, *kind[5:])
    common = middle(kind[0], p.nominal.supply)
    held = 0.5 * p.nominal.supply if topology.controls else None
    conditions = Conditions(p.nominal.supply, (common, common), 1e-12, output_common_mode=held)
    return Analysis(size_circuit(topology, p, conditions, by_hand(topology, **changes)))


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
