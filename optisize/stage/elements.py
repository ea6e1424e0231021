"""The vocabulary of stages: sizes, elements between named nodes, and the pieces that a stage is joined from."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Literal, Protocol

from optisize.process.law import Array

Channel = Literal["n", "p"]
SizeKind = Literal["width", "length", "resistance", "current", "count"]
REFERENCE = "reference"  # the driven node at which a common-mode control holds the outputs

UNITS: dict[SizeKind, str] = {"width": "m", "length": "m", "resistance": "ohm", "current": "A", "count": ""}


@dataclass(frozen=True)
class Size:
    """One size or bias that a designer sets: its name, kind and meaning."""

    name: str
    kind: SizeKind
    meaning: str

    @property
    def unit(self) -> str:
        """The SI unit of the size."""
        return UNITS[self.kind]


@dataclass(frozen=True)
class Transistor:
    """A transistor between four nodes.

    Attributes:
        channel: ``input`` for the channel of the pair, ``opposite`` for the other one.
        group: whose ``width`` and ``length`` it has; transistors of one group are drawn alike.
        units: the size that says of how many equal units it is made; one where empty.
        saturates: whether it has to be saturated for the stage to work (a diode-connected one is by itself).
        even_fingers: whether it is drawn with an even number of fingers, so that a pair can be cross-coupled.
    """

    name: str
    drain: str
    gate: str
    source: str
    channel: Literal["input", "opposite"]
    group: str
    units: str = ""
    saturates: bool = True
    even_fingers: bool = False


@dataclass(frozen=True)
class Resistor:
    """A resistor between two nodes; `size` names its resistance."""

    name: str
    a: str
    b: str
    size: str


@dataclass(frozen=True)
class CurrentSource:
    """An ideal current from node `a` to node `b` for an n-channel input; `size` names its current."""

    name: str
    a: str
    b: str
    size: str


@dataclass(frozen=True)
class Control:
    """An ideal amplifier that sets a node so that the mean of others is at the reference, at every frequency."""

    name: str
    node: str
    senses: tuple[str, ...]
    reference: str = REFERENCE


class Start(Protocol):
    """What the first guess of a node voltage may ask for; voltages of shape (N,)."""

    def rail(self, node: str) -> Array:
        """Return the voltage of a driven node."""

    def size(self, name: str) -> Array:
        """Return a size."""

    def tail_current(self) -> Array:
        """Return the current that the tail is meant to carry."""

    def half(self) -> Array:
        """Return the current that each input transistor is meant to carry."""

    def height(self) -> Array:
        """Return how far the common mode stands from the rail of the tail."""

    def away(self, node: str, voltage: Array) -> Array:
        """Return a voltage that many volts from a rail towards the other one."""

    def toward_load(self, voltage: Array, by: Array) -> Array:
        """Return a voltage moved by that many volts towards the rail of the load."""

    def distance(self, voltage: Array) -> Array:
        """Return how far a voltage stands from the rail of the tail."""

    def gate_drive(self, transistor: str, current: Array, source: Array | float = 0.0) -> Array:
        """Return how far its gate stands from its channel's rail when a transistor carries a current.

        Args:
            transistor: its name.
            current: what it carries, saturated.
            source: how far its source stands from that rail.
        """

    def under(self, transistor: str, current: Array, gate: Array) -> Array:
        """Return how far its source stands from its channel's rail when a transistor carries a current."""

    def follow(self, transistor: str, current: Array) -> Array:
        """Return the source voltage at which a transistor with its gate at the common mode carries a current."""


Guess = Callable[[Start], Array]


@dataclass(frozen=True)
class Piece:
    """A pair, a load or a tail: its sizes, its elements, and a first guess for each node that it sets."""

    sizes: tuple[Size, ...]
    transistors: tuple[Transistor, ...] = ()
    resistors: tuple[Resistor, ...] = ()
    sources: tuple[CurrentSource, ...] = ()
    controls: tuple[Control, ...] = ()
    guesses: tuple[tuple[str, Guess], ...] = ()
    summary: str = ""


@dataclass(frozen=True)
class PairKind(Piece):
    """A pair; `leg` names the size whose current a bias leg of it sends through the tail, beside that of the pair."""

    leg: str = ""


@dataclass(frozen=True)
class LoadKind(Piece):
    """A load and what it means for the output.

    Attributes:
        outputs: the outputs that it can have.
        steered: the part of the tail current that full steering leaves to charge the output.
        symmetric: whether both sides of a matched stage are alike, so that one tells what the other does.
        refusal: why it has no other output.
    """

    outputs: tuple[str, ...] = ("single-ended",)
    steered: float = 0.5
    symmetric: bool = False
    refusal: str = ""


@dataclass(frozen=True)
class TailKind(Piece):
    """A tail and the current that it is meant to carry."""

    current: Guess = lambda start: start.size("tail.current")


@dataclass(frozen=True)
class Form:
    """How a pair stands under its load.

    Attributes:
        pair, loads: the pair itself, and the loads that go with it.
        delicate: whether its outputs stand on such high resistances that single precision does not do for them.
    """

    summary: str
    pair: PairKind
    loads: Mapping[str, LoadKind]
    delicate: bool = False
