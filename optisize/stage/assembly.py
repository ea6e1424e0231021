"""A whole stage joined from its pieces: pair, load and tail, with the input's channel and the output chosen."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TypeVar

from optisize.errors import InputError, listing
from optisize.stage.elements import (
    REFERENCE,
    Channel,
    Control,
    CurrentSource,
    Guess,
    LoadKind,
    PairKind,
    Piece,
    Resistor,
    Size,
    Transistor,
)
from optisize.stage.topology import DEGENERATED, DEGENERATION, FORMS, INPUTS, OUTPUTS, TAILS

DRIVEN = ("in+", "in-", "supply", "ground")
Named = TypeVar("Named")


@dataclass(frozen=True)
class Topology:
    """A whole stage.

    Attributes:
        transistors, resistors, sources, controls: the elements, ``tail_rail`` and ``load_rail`` replaced by the rails.
        sizes: every size that the stage needs, in the order of the pieces.
        unknown: the nodes whose voltage is solved for.
        output: nodes of the output with their signs.
        guesses: first guess of each unknown node.
        leg: the size whose current flows through the tail beside that of the pair, if any.
        steered: the part of the tail current that full steering leaves to charge the output.
        symmetric: whether both sides are alike.
        delicate: whether single precision does not do for it.
    """

    input: str
    load: str
    tail: str
    output_kind: str
    bulk: str
    form: str
    transistors: tuple[Transistor, ...]
    resistors: tuple[Resistor, ...]
    sources: tuple[CurrentSource, ...]
    controls: tuple[Control, ...]
    sizes: tuple[Size, ...]
    output: tuple[tuple[str, float], ...]
    guesses: tuple[tuple[str, Guess], ...]
    tail_current: Guess
    leg: str
    steered: float
    symmetric: bool
    delicate: bool
    rails: tuple[tuple[str, str], ...]

    @property
    def unknown(self) -> tuple[str, ...]:
        """The nodes whose voltage is solved for."""
        return tuple(node for node, _ in self.guesses)

    @property
    def mean_is_held(self) -> bool:
        """Whether a control holds the mean of the outputs, so that nothing moves it."""
        outputs = {node for node, _ in self.output}
        return any(set(control.senses) == outputs for control in self.controls)

    @property
    def driven(self) -> tuple[str, ...]:
        """The nodes whose voltage is given: inputs and rails, and the reference of a common-mode control."""
        return (*DRIVEN, REFERENCE) if self.controls else DRIVEN

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


@lru_cache(maxsize=256)
def build(
    input: str,
    load: str,
    tail: str,
    output: str = "single-ended",
    bulk: str = "rail",
    form: str = "simple",
    degenerated: bool = False,
) -> Topology:
    """Join a pair, a load and a tail.

    Args:
        input, load, tail, output, bulk, form: as in the problem file.
        degenerated: whether the sources of the pair stand on resistors.

    Raises InputError for a combination that makes no sense.
    """
    pair, load_kind, tail_kind = FORMS[form].pair, _load(form, load, output), TAILS[tail]
    pieces: list[Piece] = [_degenerated(pair) if degenerated else pair]
    pieces += [DEGENERATION] if degenerated else []
    pieces += [load_kind, tail_kind]
    rails = {"tail_rail": "ground", "load_rail": "supply"}
    if INPUTS[input] == "p":
        rails = {"tail_rail": "supply", "load_rail": "ground"}

    def at(node: str) -> str:
        return rails.get(node, node)

    return Topology(
        input=input,
        load=load,
        tail=tail,
        output_kind=output,
        bulk=bulk,
        form=form,
        transistors=tuple(
            replace(t, drain=at(t.drain), gate=at(t.gate), source=at(t.source)) for x in pieces for t in x.transistors
        ),
        resistors=tuple(replace(r, a=at(r.a), b=at(r.b)) for x in pieces for r in x.resistors),
        sources=tuple(replace(s, a=at(s.a), b=at(s.b)) for x in pieces for s in x.sources),
        controls=tuple(control for x in pieces for control in x.controls),
        sizes=_once((size.name, size) for x in pieces for size in x.sizes),
        output=OUTPUTS[output],
        # A piece that comes later knows better: degeneration moves the tail.
        guesses=tuple({node: (node, guess) for x in pieces for node, guess in x.guesses}.values()),
        tail_current=tail_kind.current,
        leg=pair.leg,
        steered=load_kind.steered,
        symmetric=load_kind.symmetric,
        delicate=FORMS[form].delicate,
        rails=tuple(rails.items()),
    )


def _load(form: str, load: str, output: str) -> LoadKind:
    """Return the load of a form, or refuse the combination."""
    loads = FORMS[form].loads
    if load not in loads:
        raise InputError(f'stage.load: "{load}" does not go with form "{form}"; allowed are {listing(loads)}')
    kind = loads[load]
    if output not in kind.outputs:
        raise InputError(
            f'stage.output: "{output}" does not go with load "{load}": {kind.refusal}; '
            f"allowed are {listing(kind.outputs)}"
        )
    return kind


def _degenerated(pair: PairKind) -> PairKind:
    """Return a pair whose sources stand on resistors."""
    transistors = (replace(t, source=DEGENERATED.get(t.name, t.source)) for t in pair.transistors)
    return replace(pair, transistors=tuple(transistors))


def _once(named: Iterable[tuple[str, Named]]) -> tuple[Named, ...]:
    """Return what pieces share only once, in the order of its last mention."""
    kept: dict[str, Named] = {}
    for name, value in named:
        kept.pop(name, None)
        kept[name] = value
    return tuple(kept.values())
