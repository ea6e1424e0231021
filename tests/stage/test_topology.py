"""The kinds of stage as data, against the drawings of a handbook: Gray, Hurst, Lewis and Meyer, Analysis and Design of
Analog Integrated Circuits, ch. 3 and 4 (from memory)."""

from __future__ import annotations

import pytest

from optisize.errors import InputError
from optisize.stage.assembly import Topology, build
from optisize.stage.topology import LOADS, TAILS


def drawn(topology: Topology) -> set[tuple[str, ...]]:
    """Return every transistor as channel, drain, gate, source and bulk."""
    return {(topology.channel(t), t.drain, t.gate, t.source, topology.bulk_node(t)) for t in topology.transistors}


def test_n_channel_pair_with_resistors_and_mirrored_tail() -> None:
    top = build("nmos", "resistor", "single", "differential")
    assert drawn(top) == {
        ("n", "left", "in+", "tail", "ground"),
        ("n", "right", "in-", "tail", "ground"),
        ("n", "tail", "bias", "ground", "ground"),
        ("n", "bias", "bias", "ground", "ground"),
    }
    assert {frozenset((r.a, r.b)) for r in top.resistors} == {
        frozenset(("left", "supply")),
        frozenset(("right", "supply")),
    }
    assert [(s.a, s.b, s.size) for s in top.sources] == [("supply", "bias", "bias.current")]
    assert dict(top.output) == {"right": 1.0, "left": -1.0}
    assert set(top.unknown) == {"left", "right", "tail", "bias"}


def test_p_channel_pair_with_mirror_and_ideal_tail() -> None:
    top = build("pmos", "mirror", "ideal", bulk="source")
    assert drawn(top) == {
        ("p", "left", "in+", "tail", "tail"),
        ("p", "right", "in-", "tail", "tail"),
        ("n", "left", "left", "ground", "ground"),
        ("n", "right", "left", "ground", "ground"),
    }
    assert top.polarity == -1.0
    assert [(s.a, s.b) for s in top.sources] == [("tail", "supply")]
    assert dict(top.output) == {"right": 1.0}
    assert {t.name for t in top.transistors if t.saturates} == {"input.p", "input.n", "load.n"}


@pytest.mark.parametrize("input", ["nmos", "pmos"])
@pytest.mark.parametrize("load", list(LOADS))
@pytest.mark.parametrize("tail", list(TAILS))
def test_every_kind_is_complete(input: str, load: str, tail: str) -> None:
    """Each unknown node has a guess and at least two elements; every element's sizes are sizes of the stage."""
    for output in LOADS[load].outputs:
        top = build(input, load, tail, output)
        ends = [n for t in top.transistors for n in (t.drain, t.gate, t.source)]
        ends += [n for e in (*top.resistors, *top.sources) for n in (e.a, e.b)]
        assert set(ends) <= {*top.unknown, "in+", "in-", "supply", "ground"}
        for node in top.unknown:
            assert ends.count(node) >= 2
        needed = {f"{t.group}.{kind}" for t in top.transistors for kind in ("width", "length")}
        needed |= {t.units for t in top.transistors if t.units}
        needed |= {e.size for e in (*top.resistors, *top.sources)}
        assert needed == set(top.size_names)
        assert all(size.meaning for size in top.sizes)


def test_a_mirror_has_one_output() -> None:
    with pytest.raises(InputError, match=r'"differential" does not go with load "mirror".*single-ended'):
        build("nmos", "mirror", "single", "differential")
