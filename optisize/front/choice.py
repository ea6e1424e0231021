"""A design that was chosen from a front, and why: its reason, what it misses, its neighbours, its sizing file."""

from __future__ import annotations

import os
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import pandas as pd

from optisize.errors import InputError
from optisize.files import write_text
from optisize.front.aims import Aim, Axis
from optisize.front.card import Card, card
from optisize.front.neighbours import Neighbour
from optisize.front.run import Run
from optisize.front.table import sizes_of
from optisize.problem.sizing_file import sizing_text
from optisize.process.law import Array
from optisize.quantities import write

STARTING_POINT = "A starting point for your simulator, not a sign-off."


@dataclass(frozen=True)
class Missing:
    """A condition or a wish that the chosen design does not meet.

    Attributes:
        asked: as it was asked: ``gain>=40 dB``.
        name, unit: of the column.
        bound, value: what was asked and what the design has [unit].
    """

    asked: str
    name: str
    unit: str
    bound: float
    value: float

    @classmethod
    def of(cls, aim: Aim, position: int) -> Missing:
        """Return what the design in a row misses of an aim."""
        return cls(aim.text, aim.name, aim.unit, aim.bound, float(aim.values[position]))

    @property
    def by(self) -> float:
        """How far the design is from it [unit]; not a number where the design has no such figure."""
        return abs(self.bound - self.value)

    def __str__(self) -> str:
        """Return ``gain>=40 dB is missed by 18.6 dB: it is 21.38 dB``."""
        if np.isnan(self.value):
            return f"{self.asked} is not known: the design has no such figure"
        return f"{self.asked} is missed by {write(self.by, self.unit, 3)}: it is {write(self.value, self.unit)}"


@dataclass(frozen=True)
class Choice:
    """One design of a front, and why this one.

    Attributes:
        run: whose front it is.
        position: its row.
        rule: ``least``, ``most``, ``wish``, ``knee``, or ``balance`` where the front has no knee.
        why: the reason, in a sentence.
        steps: what a step to either side gives and costs, a sentence each.
        missing: the conditions and wishes that it does not meet; empty where it meets all.
        neighbours: the designs to either side, along every axis.
        axes: the goals, and what else it was chosen by.
    """

    run: Run
    position: int
    rule: str
    why: str
    steps: tuple[str, ...]
    missing: tuple[Missing, ...]
    neighbours: tuple[Neighbour, ...]
    axes: tuple[Axis, ...]

    @property
    def met(self) -> bool:
        """Whether it meets everything that was asked."""
        return not self.missing

    @property
    def design(self) -> int:
        """Its number on the front."""
        return self.number(self.position)

    def number(self, position: int) -> int:
        """Return the number of the design in a row of the front."""
        return int(self.run.front["design"].iloc[position])

    @property
    def row(self) -> pd.Series:
        """Its row of the front."""
        return self.run.front.iloc[self.position]

    @property
    def label(self) -> str:
        """What to call it: ``design 12 of results/sample``."""
        return f"design {self.design}{f' of {self.run.path}' if self.run.path is not None else ''}"

    @property
    def columns(self) -> dict[str, Array]:
        """Its sizes [SI] by name, each (1,)."""
        return sizes_of(self.run.problem, self.run.front.iloc[self.position : self.position + 1])

    @property
    def sizes(self) -> dict[str, float]:
        """Its sizes [SI] by name."""
        return {name: float(v[0]) for name, v in self.columns.items()}

    @cached_property
    def card(self) -> Card:
        """Its measures against limits, its drawn shapes and its operating point."""
        return card(self.run.problem, self.columns, self.label)

    def __str__(self) -> str:
        """Return what it is, why it was chosen and what it misses."""
        return " ".join([f"{self.label}: {self.why}", *(f"{missing}." for missing in self.missing), *self.steps])

    def _repr_html_(self) -> str:
        from optisize.front.notebook import choice_html

        return choice_html(self)

    def save(self, path: str | Path) -> Path:
        """Write it as a sizing file, whole or not at all, which reads back to exactly this design; return the path.

        Raises:
            InputError: the file exists.
            OptisizeError: it cannot be written.
        """
        target = Path(path)
        check_new(target)
        mind = [f"Mind: {missing}." for missing in self.missing]
        notes = [f"{self.run.problem.title}: {self.label}", self.why, *mind, STARTING_POINT]
        write_text(target, sizing_text(self.run.problem.space, self.sizes, self.label, notes))
        return target


def check_new(path: Path) -> None:
    """Raise InputError when a file is already there."""
    if os.path.lexists(path):
        raise InputError(f"{path}: already exists; give another file, or remove it")
