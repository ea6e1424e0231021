"""A sized stage: a topology with sizes, in a process, under conditions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from optisize.process.card import Process
from optisize.process.law import Array, Law, Pick, picked, taken
from optisize.stage.assembly import Topology
from optisize.stage.layout import Drawn, draw_transistors, finger_count, resistor_area, resistor_length
from optisize.stage.network import Network
from optisize.stage.wiring import Wiring, wiring


@dataclass(frozen=True)
class Conditions:
    """What the stage is exposed to: SI values, the same for every design.

    Attributes:
        supply: supply voltage [V].
        common_mode: lowest and highest common-mode input voltage [V].
        load_capacitance: from each output to ground [F].
        temperature: absolute temperature [K].
        corner: name of the process corner.
        output_common_mode: where a common-mode control holds the outputs, or where one output is wanted at rest [V].
    """

    supply: float
    common_mode: tuple[float, float]
    load_capacitance: float
    temperature: float = 300.15
    corner: str = "typical"
    output_common_mode: float | None = None

    @property
    def middle(self) -> float:
        """The middle of the common-mode range, where all but the range itself is measured."""
        return 0.5 * (self.common_mode[0] + self.common_mode[1])


@dataclass(frozen=True)
class Circuit:
    """A topology with sizes, in a process, under conditions, for N designs.

    Attributes:
        network: the equations.
        process, conditions: what the stage is made in and exposed to.
        parameters: transistor parameters, each (T, 1) or (T, N).
        sizes: every size by name, each (N,).
        units, width, length: of the transistors, each (T, N); `width` is that of one unit.
    """

    network: Network
    process: Process
    conditions: Conditions
    parameters: Mapping[str, Array]
    sizes: Mapping[str, Array]
    units: Array
    width: Array
    length: Array

    @property
    def wiring(self) -> Wiring:
        """The constant arrays of the topology."""
        return self.network.wiring

    @property
    def topology(self) -> Topology:
        """The topology."""
        return self.network.wiring.topology

    @property
    def law(self) -> Law:
        """The law of the transistors."""
        return self.network.law

    @property
    def designs(self) -> int:
        """The number of designs."""
        return self.network.designs

    def take(self, columns: Pick) -> Circuit:
        """Return the same circuit for some of the designs."""
        return Circuit(
            network=self.network.take(columns),
            process=self.process,
            conditions=self.conditions,
            parameters={k: taken(v, slice(None), columns) for k, v in self.parameters.items()},
            sizes={k: v[columns] for k, v in self.sizes.items()},
            **{name: picked(getattr(self, name), columns) for name in ("units", "width", "length")},
        )

    def law_with(self, parameters: Mapping[str, Array]) -> Law:
        """Return the law of the same transistors with other parameters."""
        c = self.conditions
        fingers = self.drawn.fingers * self.units
        width = self.width * self.units
        return self.process.law_of(parameters, width, self.length, c.temperature, c.corner, fingers)

    def driven(self, positive: Array, negative: Array) -> Array:
        """Return the voltages of the driven nodes (K, N) for input voltages (N,)."""
        voltages = np.empty((len(self.topology.driven), len(positive)))
        voltages[0], voltages[1] = positive, negative
        voltages[2], voltages[3] = self.conditions.supply, 0.0
        if self.topology.controls:
            voltages[4] = self.conditions.output_common_mode
        return voltages

    @cached_property
    def drawn(self) -> Drawn:
        """The drawn shapes of the transistors."""
        even = np.array([[x.even_fingers] for x in self.topology.transistors])
        return draw_transistors(self.width, self.length, self.units, even, self.process.grid)

    @cached_property
    def resistances(self) -> Array:
        """The drawn resistances (R, N), at nominal conditions."""
        rows = [self.sizes[r.size] for r in self.topology.resistors]
        return np.array(rows).reshape(len(rows), self.designs)

    @cached_property
    def resistor_lengths(self) -> Array:
        """The drawn lengths of the resistors (R, N) [m]."""
        return resistor_length(self.resistances, self.process.resistor)

    @cached_property
    def resistor_areas(self) -> Array:
        """The drawn areas of the resistors (R, N) [m^2]."""
        return resistor_area(self.resistances, self.process.resistor)

    @cached_property
    def resistor_capacitances(self) -> Array:
        """The capacitance of each resistor to the substrate (R, N) [F]."""
        r = self.process.resistor
        return r.capacitance * self.resistor_lengths * r.width


def size_circuit(topology: Topology, process: Process, conditions: Conditions, sizes: Mapping[str, Array]) -> Circuit:
    """Put sizes into a topology.

    Args:
        topology: the stage.
        process: the process.
        conditions: what the stage is exposed to.
        sizes: every size of the topology in SI units, each (N,).
    """
    wires = wiring(topology)
    t = topology.transistors
    count = len(next(iter(sizes.values())))
    one = np.ones(count)
    width = np.array([sizes[f"{x.group}.width"] for x in t])
    length = np.array([sizes[f"{x.group}.length"] for x in t])
    units = np.array([sizes[x.units] if x.units else one for x in t])
    channels = [topology.channel(x) for x in t]
    even = np.array([[x.even_fingers] for x in t])
    fingers = finger_count(width, process.grid, even) * units
    temperature, corner = conditions.temperature, conditions.corner
    law, parameters = process.bind_law(channels, width * units, length, temperature, corner, fingers)
    ratio = process.resistance_ratio(conditions.temperature, conditions.corner)
    conductances = [1.0 / (sizes[r.size] * ratio) for r in topology.resistors] + [one for _ in topology.controls]
    currents = [topology.polarity * sizes[s.size] for s in topology.sources]
    network = Network(
        wiring=wires,
        supply=conditions.supply,
        law=law,
        conductances=np.array(conductances).reshape(len(conductances), count),
        currents=np.array(currents).reshape(len(currents), count),
        designs=count,
    )
    return Circuit(
        network=network,
        process=process,
        conditions=conditions,
        parameters=parameters,
        sizes=dict(sizes),
        units=units,
        width=width,
        length=length,
    )
