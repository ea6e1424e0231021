"""The kinds of stage as data: which elements stand between which nodes, and which sizes they need.

Every kind is written once, for both input channels: ``tail_rail`` is ground for an n-channel input and the supply for
a p-channel one, ``load_rail`` the other rail. Input transistors have the input's channel, load transistors the other
one. A new load or tail is an entry of `LOADS` or `TAILS`; the solver, the small signal and the measures read the
entries and know no kind by name.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal, Protocol

from optisize.errors import InputError, listing
from optisize.process.law import Array

Channel = Literal["n", "p"]
SizeKind = Literal["width", "length", "resistance", "current", "count"]

UNITS: dict[SizeKind, str] = {"width": "m", "length": "m", "resistance": "ohm", "current": "A", "count": ""}
DRIVEN = ("in+", "in-", "supply", "ground")


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


class Start(Protocol):
    """What the first guess of a node voltage may ask for; voltages of shape (N,)."""

    def rail(self, node: str) -> Array:
        """Return the voltage of a driven node."""

    def size(self, name: str) -> Array:
        """Return a size."""

    def tail_current(self) -> Array:
        """Return the current that the tail is meant to carry."""

    def away(self, node: str, voltage: Array) -> Array:
        """Return a voltage that many volts from a rail towards the other one."""

    def gate_drive(self, transistor: str, current: Array) -> Array:
        """Return the gate-source voltage magnitude at which a transistor with its source at its rail carries it."""

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
    guesses: tuple[tuple[str, Guess], ...] = ()
    summary: str = ""


def _half(start: Start) -> Array:
    return 0.5 * start.tail_current()


PAIR = Piece(
    sizes=(
        Size("input.width", "width", "channel width of each input transistor"),
        Size("input.length", "length", "channel length of the input transistors"),
    ),
    transistors=(
        Transistor("input.p", "left", "in+", "tail", "input", "input", even_fingers=True),
        Transistor("input.n", "right", "in-", "tail", "input", "input", even_fingers=True),
    ),
    guesses=(("tail", lambda s: s.follow("input.p", _half(s))),),
)


@dataclass(frozen=True)
class LoadKind(Piece):
    """A load and what it means for the output.

    Attributes:
        outputs: the outputs that it can have.
        steered: the part of the tail current that full steering leaves to charge the output.
        symmetric: whether both sides of a matched stage are alike, so that one tells what the other does.
    """

    outputs: tuple[str, ...] = ("single-ended",)
    steered: float = 0.5
    symmetric: bool = False
    refusal: str = ""


LOADS: dict[str, LoadKind] = {
    "resistor": LoadKind(
        summary="a resistor from each drain to the rail",
        sizes=(Size("load.resistance", "resistance", "resistance of each load resistor"),),
        resistors=(
            Resistor("load.p", "left", "load_rail", "load.resistance"),
            Resistor("load.n", "right", "load_rail", "load.resistance"),
        ),
        guesses=tuple(
            (node, lambda s: s.away("load_rail", s.size("load.resistance") * _half(s))) for node in ("left", "right")
        ),
        outputs=("single-ended", "differential"),
        symmetric=True,
    ),
    "mirror": LoadKind(
        summary="a current mirror that turns the pair's difference into one output",
        sizes=(
            Size("load.width", "width", "channel width of each mirror transistor"),
            Size("load.length", "length", "channel length of the mirror transistors"),
        ),
        transistors=(
            Transistor("load.p", "left", "left", "load_rail", "opposite", "load", saturates=False, even_fingers=True),
            Transistor("load.n", "right", "left", "load_rail", "opposite", "load", even_fingers=True),
        ),
        guesses=tuple(
            (node, lambda s: s.away("load_rail", s.gate_drive("load.p", _half(s)))) for node in ("left", "right")
        ),
        steered=1.0,
        refusal="a mirror has one output: the other side is its diode",
    ),
}


@dataclass(frozen=True)
class TailKind(Piece):
    """A tail and the current that it is meant to carry."""

    current: Guess = _half


TAILS: dict[str, TailKind] = {
    "ideal": TailKind(
        summary="an ideal current source: the limiting case",
        sizes=(Size("tail.current", "current", "tail current"),),
        sources=(CurrentSource("tail", "tail", "tail_rail", "tail.current"),),
        current=lambda s: s.size("tail.current"),
    ),
    "single": TailKind(
        summary="one transistor, mirrored from a diode-connected unit that carries bias.current",
        sizes=(
            Size("tail.width", "width", "channel width of one unit of tail and bias"),
            Size("tail.length", "length", "channel length of the units of tail and bias"),
            Size("tail.units", "count", "number of units in the tail; the bias has one"),
            Size("bias.current", "current", "current of the bias branch"),
        ),
        transistors=(
            Transistor("tail", "tail", "bias", "tail_rail", "input", "tail", units="tail.units"),
            Transistor("bias", "bias", "bias", "tail_rail", "input", "tail", saturates=False),
        ),
        sources=(CurrentSource("bias", "load_rail", "bias", "bias.current"),),
        guesses=(("bias", lambda s: s.away("tail_rail", s.gate_drive("bias", s.size("bias.current")))),),
        current=lambda s: s.size("tail.units") * s.size("bias.current"),
    ),
}

INPUTS: dict[str, Channel] = {"nmos": "n", "pmos": "p"}
OUTPUTS: dict[str, tuple[tuple[str, float], ...]] = {
    "single-ended": (("right", 1.0),),
    "differential": (("right", 1.0), ("left", -1.0)),
}
BULKS = ("rail", "source")


@dataclass(frozen=True)
class Topology:
    """A whole stage: pair, load and tail joined, with the input's channel and the output chosen.

    Attributes:
        transistors, resistors, sources: the elements, with ``tail_rail`` and ``load_rail`` replaced by the rails.
        sizes: every size that the stage needs, in the order of the pieces.
        unknown: the nodes whose voltage is solved for.
        output: nodes of the output with their signs.
        guesses: first guess of each unknown node.
        steered: the part of the tail current that full steering leaves to charge the output.
        symmetric: whether both sides are alike.
    """

    input: str
    load: str
    tail: str
    output_kind: str
    bulk: str
    transistors: tuple[Transistor, ...]
    resistors: tuple[Resistor, ...]
    sources: tuple[CurrentSource, ...]
    sizes: tuple[Size, ...]
    unknown: tuple[str, ...]
    output: tuple[tuple[str, float], ...]
    guesses: tuple[tuple[str, Guess], ...]
    tail_current: Guess
    steered: float
    symmetric: bool
    rails: tuple[tuple[str, str], ...]

    @property
    def polarity(self) -> float:
        """+1 for an n-channel input, -1 for a p-channel one."""
        return 1.0 if INPUTS[self.input] == "n" else -1.0

    def channel(self, transistor: Transistor) -> Channel:
        """Return the channel of a transistor: ``n`` or ``p``."""
        same = transistor.channel == "input"
        return INPUTS[self.input] if same else ("p" if INPUTS[self.input] == "n" else "n")

    def bulk_node(self, transistor: Transistor) -> str:
        """Return the node of the bulk: its channel's rail, or the source of the pair where the stage says so."""
        if self.bulk == "source" and transistor.group == "input":
            return transistor.source
        return "ground" if self.channel(transistor) == "n" else "supply"

    def rail(self, node: str) -> str:
        """Return the name of a node with ``tail_rail`` and ``load_rail`` resolved."""
        return dict(self.rails).get(node, node)

    @property
    def size_names(self) -> tuple[str, ...]:
        """The names of the sizes."""
        return tuple(size.name for size in self.sizes)


@lru_cache(maxsize=64)
def build(input: str, load: str, tail: str, output: str = "single-ended", bulk: str = "rail") -> Topology:
    """Join a pair, a load and a tail.

    Raises InputError for a combination that makes no sense.
    """
    load_kind, tail_kind = LOADS[load], TAILS[tail]
    if output not in load_kind.outputs:
        raise InputError(
            f'stage.output: "{output}" does not go with load "{load}": {load_kind.refusal}; '
            f"allowed are {listing(load_kind.outputs)}"
        )
    rails = {"tail_rail": "ground", "load_rail": "supply"}
    if INPUTS[input] == "p":
        rails = {"tail_rail": "supply", "load_rail": "ground"}

    def at(node: str) -> str:
        return rails.get(node, node)

    pieces: tuple[Piece, ...] = (PAIR, load_kind, tail_kind)
    transistors = tuple(
        Transistor(**{**t.__dict__, "drain": at(t.drain), "gate": at(t.gate), "source": at(t.source)})
        for piece in pieces
        for t in piece.transistors
    )
    resistors = tuple(Resistor(r.name, at(r.a), at(r.b), r.size) for piece in pieces for r in piece.resistors)
    sources = tuple(CurrentSource(s.name, at(s.a), at(s.b), s.size) for piece in pieces for s in piece.sources)
    guesses = tuple(guess for piece in pieces for guess in piece.guesses)
    return Topology(
        input=input,
        load=load,
        tail=tail,
        output_kind=output,
        bulk=bulk,
        transistors=transistors,
        resistors=resistors,
        sources=sources,
        sizes=tuple(size for piece in pieces for size in piece.sizes),
        unknown=tuple(node for node, _ in guesses),
        output=OUTPUTS[output],
        guesses=guesses,
        tail_current=tail_kind.current,
        steered=load_kind.steered,
        symmetric=load_kind.symmetric,
        rails=tuple(rails.items()),
    )
