"""Problems of sized stages for the tests of decks, and what the simulator says of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from optisize.problem.evaluate import Problem
from optisize.problem.schema import SearchTable
from optisize.problem.space import SizingSpace
from optisize.process.card import load_process
from optisize.process.law import Array
from optisize.simulator.deck import Deck, benched, write_deck
from optisize.simulator.ngspice import run
from tests.reference.samples import Kind, conditions, sized

WARNINGS = ("warn", "error", "fail", "unrecog", "singular", "abort", "nan")


def problem_of(kind: Kind, process: str, **changed: object) -> Problem:
    """Return a problem of a kind of stage, with conditions changed; without goals, limits or free sizes."""
    card = load_process(process)
    return Problem(
        title="stage by stage",
        process_name=process,
        process=card,
        topology=kind.topology,
        conditions=replace(conditions(kind, card), **changed),
        space=SizingSpace(kind.topology, card, ()),
        goals=(),
        limits=(),
        settings=SearchTable(),
        text="",
        process_text="",
        hashes={"problem": "0" * 64, "process": "1" * 64},
    )


@dataclass(frozen=True)
class Simulated:
    """A deck, and what the simulator says."""

    deck: Deck
    said: str

    @property
    def warnings(self) -> list[str]:
        """The lines that a designer would stumble over."""
        return [line for line in self.said.splitlines() if any(word in line.lower() for word in WARNINGS)]

    @property
    def values(self) -> dict[str, float]:
        """The simulated measures."""
        return self.deck.read(self.said)


def sizing(kind: Kind, process: str, seed: int = 1) -> dict[str, Array]:
    """Return one random sizing of a kind, all of it saturated."""
    return dict(sized(kind, process, 1, seed=seed).circuit.sizes)


def simulated(
    ngspice: str, folder: Path, kind: Kind, process: str, names: Sequence[str], **changed: object
) -> Simulated:
    """Write the deck of a random sizing, and run it."""
    problem = problem_of(kind, process, **changed)
    deck = write_deck(problem, sizing(kind, process), f"a {kind}", benched(problem, names))
    return Simulated(deck, run(Path(ngspice), folder, deck.text))


def differences(s: Simulated) -> dict[str, tuple[float, float]]:
    """Return predicted and simulated values that are finite on both sides, by name."""
    values = s.values
    pairs = {m.name: (s.deck.predicted[m.name], values[m.name]) for m in s.deck.measures}
    return {name: pair for name, pair in pairs.items() if np.isfinite(pair).all()}
