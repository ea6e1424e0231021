"""Transistors of every law at random sizes and terminal voltages, for the checks that hold for every law."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np

from optisize.process.card import Channel, Process, built_in_names, load_process, thermal_voltage
from optisize.process.law import Array, Law
from tests.process.tables import sampled_process

NOMINAL = 300.15
UT = float(thermal_voltage(NOMINAL))


SAMPLED = "sampled"  # a table of a built-in process


@lru_cache
def process_of(name: str) -> Process:
    return load_process(sampled_process() if name == SAMPLED else name)


@dataclass(frozen=True)
class Case:
    """A kind of transistor of a built-in process, or of a table of one."""

    process: str
    channel: Channel

    def __str__(self) -> str:
        return f"{self.process}-{self.channel}"

    @property
    def law_name(self) -> str:
        return process_of(self.process).law

    @property
    def parameters(self) -> dict[str, Array]:
        return process_of(self.process).transistor_arrays([self.channel], NOMINAL, "typical")

    def bind(self, width: Array, length: Array, **changes: float) -> Law:
        """Return the law for widths and lengths (T, N), with some parameters changed."""
        parameters: Mapping[str, Array] = self.parameters | {k: np.array([[v]]) for k, v in changes.items()}
        return process_of(self.process).law_of(parameters, width, length, NOMINAL)

    def random(self, shape: tuple[int, int] = (3, 400), seed: int = 7) -> Law:
        """Return transistors of random sizes, one for each element of `shape`."""
        rng = np.random.default_rng(seed)
        shortest = process_of(self.process).grid.minimum_length
        return self.bind(shortest * 2000.0 ** rng.random(shape), shortest * 40.0 ** rng.random(shape))


def voltages(shape: tuple[int, int] = (3, 400), seed: int = 11) -> tuple[Array, Array, Array]:
    """Return gate, drain and source voltages over the bulk, over all regions and both directions of the channel."""
    rng = np.random.default_rng(seed)
    vg = rng.uniform(-0.2, 2.0, shape)
    return vg, rng.uniform(-0.2, 1.8, shape), rng.uniform(-0.2, 1.2, shape)


CASES = [Case(process, channel) for process in (*built_in_names(), SAMPLED) for channel in ("n", "p")]
SQUARE_CASES = [case for case in CASES if case.law_name == "square"]
TABLE_CASES = [case for case in CASES if case.law_name == "table"]
CHARGE_CASES = [case for case in CASES if case.law_name == "charge"]
IDEAL_CHARGE = {"early_voltage": 1e15, "vertical_field": 0.0, "critical_field": 1e15}


def arrays(record: NamedTuple) -> dict[str, Array]:
    """Return the arrays of what a law gives, by name."""
    return record._asdict()
