"""Random sizings of every kind of stage, for the checks against a circuit simulator."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from optisize.process.card import Process, load_process
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import Topology, build
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.topology import FORMS, INPUTS, TAILS

DRAWS = {True: 2000, False: 12_000}  # sizings that are drawn in search of saturated ones, and of others
BLOCK = 250  # of them are solved at a time, until there are enough


@dataclass(frozen=True)
class Kind:
    """A kind of stage by the words of the problem file."""

    input: str
    load: str
    tail: str
    output: str = "single-ended"
    bulk: str = "rail"
    form: str = "simple"
    degenerated: bool = False

    @property
    def topology(self) -> Topology:
        """The stage itself."""
        return build(self.input, self.load, self.tail, self.output, self.bulk, self.form, self.degenerated)

    def __str__(self) -> str:
        extra = ["telescopic"] * (self.form == "telescopic") + ["degenerated"] * self.degenerated
        return "-".join((self.input, self.load, self.tail, self.output, self.bulk, *extra))


EVERY_KIND = [
    Kind(input, load, tail, output, form=form)
    for input in INPUTS
    for form, loads in ((name, form.loads) for name, form in FORMS.items())
    for load, entry in loads.items()
    for output in entry.outputs
    for tail in TAILS
]
SOURCE_TIED = [
    Kind("nmos", "resistor", "single", "differential", "source"),
    Kind("pmos", "mirror", "single", bulk="source"),
]
DEGENERATED = [
    Kind("nmos", "resistor", "single", "differential", degenerated=True),
    Kind("pmos", "source", "cascode", "differential", degenerated=True),
    Kind("nmos", "mirror", "single", bulk="source", degenerated=True),
    Kind("pmos", "mirror", "single", form="telescopic", degenerated=True),
]

# Widths and lengths in units of the shortest channel; currents [A]; voltage over a load resistor over the supply.
WIDTHS, LENGTHS, CURRENTS, DROPS = (4.0, 600.0), (1.0, 20.0), (5e-7, 2e-4), (0.04, 0.9)
CASCODE_LENGTHS, CASCODE_BIASES = (1.0, 4.0), ((1.0, 12.0), (2.0, 16.0))  # long diodes make room under the cascodes


def conditions(kind: Kind, process: Process) -> Conditions:
    """Return conditions with the common mode on the side of the supply where the kind has its room."""
    low, high = (0.5, 0.62) if kind.input == "nmos" else (0.38, 0.5)
    supply = process.nominal.supply
    return Conditions(
        supply=supply,
        common_mode=(low * supply, high * supply),
        load_capacitance=5e-13,
        output_common_mode=0.5 * supply if kind.topology.controls else None,
    )


def draw(kind: Kind, process: Process, count: int, seed: int) -> dict[str, np.ndarray]:
    """Return random sizes, logarithmic over wide ranges."""
    rng = np.random.default_rng(seed)

    def between(low: float, high: float) -> np.ndarray:
        return low * (high / low) ** rng.random(count)

    unit = process.grid.minimum_length
    sizes: dict[str, np.ndarray] = {}
    for size in kind.topology.sizes:
        widths, lengths = WIDTHS, LENGTHS
        if "cascode" in size.name:
            widths, lengths = CASCODE_BIASES if ".bias." in size.name else (WIDTHS, CASCODE_LENGTHS)
        if size.kind == "width":
            sizes[size.name] = unit * between(*widths)
        elif size.kind == "length":
            sizes[size.name] = unit * between(*lengths)
        elif size.kind == "current":
            sizes[size.name] = between(*CURRENTS)
        elif size.kind == "count":
            sizes[size.name] = rng.integers(2 if "cascode" in size.name or kind.form != "simple" else 1, 9, count) * 1.0
    supply, bias = process.nominal.supply, sizes.get("bias.current")
    if "tail.current" in sizes and bias is not None:
        sizes["tail.current"] = bias * rng.integers(2, 9, count)
    if "tail.resistance" in kind.topology.size_names:
        tail = bias * rng.integers(2, 9, count) if bias is not None else between(*CURRENTS)
        sizes["tail.resistance"] = between(0.05, 0.35) * supply / tail
    elif "tail.current" in sizes:
        tail = sizes["tail.current"]
    else:
        tail = sizes["tail.units"] * sizes["bias.current"]
    if "load.units" in sizes and bias is not None:
        pair = tail - bias if kind.form == "telescopic" else tail
        sizes["load.units"] = np.maximum(np.rint(0.5 * pair / bias), 1.0)
    if "load.resistance" in kind.topology.size_names:
        sizes["load.resistance"] = between(*DROPS) * supply / (0.5 * tail)
    if kind.degenerated:
        sizes["input.degeneration"] = between(0.01, 0.2) * supply / (0.5 * tail)
    return sizes


@lru_cache(maxsize=256)
def usable(kind: Kind, process_name: str, count: int, saturated: bool, seed: int) -> dict[str, np.ndarray]:
    """Return the sizes of `sized`, worked out once for all tests of a kind."""
    process = load_process(process_name)
    where = conditions(kind, process)
    sizes = draw(kind, process, DRAWS[saturated], seed)
    good: list[int] = []
    for start in range(0, DRAWS[saturated], BLOCK):
        part = {name: v[start : start + BLOCK] for name, v in sizes.items()}
        a = Analysis(size_circuit(kind.topology, process, where, part))
        room = a.room_at_rest
        conducting = a.drain.id.min(axis=0) > 1e-8
        good += (
            start + np.flatnonzero(a.converged & conducting & (room > 5e-3 if saturated else room < -5e-3))
        ).tolist()
        if len(good) >= count:
            break
    picked = np.array(good[:count])
    assert len(picked) == count, f"only {len(picked)} of {DRAWS[saturated]} sizings of {kind} can be used"
    return {name: v[picked] for name, v in sizes.items()}


def sized(kind: Kind, process_name: str, count: int, *, saturated: bool = True, seed: int = 1) -> Analysis:
    """Return `count` random sizings that have an operating point, all saturated or all with a transistor in triode.

    A sizing within 5 mV of the border between both is left out: there the first derivatives of the square law jump.
    """
    process = load_process(process_name)
    sizes = usable(kind, process_name, count, saturated, seed)
    return Analysis(size_circuit(kind.topology, process, conditions(kind, process), sizes))
