"""Where everything of a stage stands in its schematic: a place for each element, a level for each node that needs one.

Written once, for an input of n-channel transistors: the tail's rail is below. A new load or tail needs places for its
elements, and a row or column of its own only where there is none yet; rows and columns that a stage has nothing in
take no room.
"""

from __future__ import annotations

from dataclasses import dataclass

LEFT, RIGHT = -1.0, 1.0

COLUMNS = (
    "tail cascode leg",
    "bias leg",
    "left",
    "centre",
    "right",
    "input cascode leg",
    "load cascode leg",
    "load leg",
)
# From the tail's rail to the load's; those that begin with "over" or "at" are levels of wires between elements.
ROWS = (
    "tail",
    "over tail",
    "tail cascode",
    "over tail cascode",
    "at tail",
    "degeneration",
    "pair",
    "over pair",
    "input cascode",
    "at output",
    "load cascode",
    "over load cascode",
    "control",
    "load",
)


@dataclass(frozen=True)
class Place:
    """Where an element stands.

    Attributes:
        column, row: its own.
        side: the side of its label; its gate points to the other one.
        under_gate: whether its gate points to the side of its label too, which then stands below it.
    """

    column: str
    row: str
    side: float = RIGHT
    under_gate: bool = False

    @property
    def gate(self) -> float:
        """The side of its gate."""
        return self.side if self.under_gate else -self.side


TRANSISTORS = {
    "input.p": Place("left", "pair", LEFT, under_gate=True),
    "input.n": Place("right", "pair", RIGHT, under_gate=True),
    "input.cascode.p": Place("left", "input cascode", LEFT),
    "input.cascode.n": Place("right", "input cascode", RIGHT),
    "input.cascode.bias": Place("input cascode leg", "pair", RIGHT),
    "load.p": Place("left", "load", LEFT),
    "load.n": Place("right", "load", RIGHT),
    "load.bias": Place("load leg", "load", RIGHT),
    "load.cascode.p": Place("left", "load cascode", LEFT),
    "load.cascode.n": Place("right", "load cascode", RIGHT),
    "load.cascode.bias": Place("load cascode leg", "load", RIGHT),
    "tail": Place("centre", "tail", RIGHT),
    "tail.cascode": Place("centre", "tail cascode", RIGHT),
    "tail.cascode.bias": Place("tail cascode leg", "tail", LEFT),
    "bias": Place("bias leg", "tail", LEFT),
    "bias.cascode": Place("bias leg", "tail cascode", LEFT),
}
RESISTORS = {
    "input.degeneration.p": Place("left", "degeneration", LEFT),
    "input.degeneration.n": Place("right", "degeneration", RIGHT),
    "load.p": Place("left", "load", LEFT),
    "load.n": Place("right", "load", RIGHT),
    "tail": Place("centre", "tail", RIGHT),
}
SOURCES = {
    "tail": Place("centre", "tail", RIGHT),
    "bias": Place("bias leg", "load", LEFT),
    "tail.cascode.bias": Place("tail cascode leg", "load", LEFT),
    "input.cascode.bias": Place("input cascode leg", "load", RIGHT),
    "load.bias": Place("load leg", "tail", RIGHT),
    "load.cascode.bias": Place("load cascode leg", "tail", RIGHT),
}
CONTROLS = {"load": Place("centre", "control", LEFT)}


@dataclass(frozen=True)
class Level:
    """Where the parts of a node that stand apart are joined.

    Attributes:
        row: the level of the wire that joins them.
        column, offset: where a wire from gates comes to that level, in units from the column's line.
        port: the side to which the node leaves the stage, where it is an output.
    """

    row: str
    column: str = ""
    offset: float = 0.0
    port: float = 0.0


LEVELS = {
    "tail": Level("at tail"),
    "left": Level("at output", "left", 3.9, LEFT),
    "right": Level("at output", "right", -3.9, RIGHT),
    "bias": Level("over tail cascode", "bias leg", 3.9),
    "tail_cascode": Level("over tail", "bias leg", 2.5),
    "input_gate": Level("over pair", "right", -2.5),
    "load_cascode": Level("over load cascode", "right", -2.5),
}
