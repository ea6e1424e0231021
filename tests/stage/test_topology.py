"""The kinds of stage as data, against the drawings of a handbook: Gray, Hurst, Lewis and Meyer, Analysis and Design of
Analog Integrated Circuits, ch. 3, 4, 6 and 12 (from memory)."""

from __future__ import annotations

import pytest

from optisize.errors import InputError
from optisize.stage.assembly import Topology, build
from optisize.stage.topology import FORMS, INPUTS, TAILS

STACKED = {"form": "telescopic"}
ALL = [
    (input, form, load, tail, output)
    for input in INPUTS
    for form, stacking in FORMS.items()
    for load, kind in stacking.loads.items()
    for tail in TAILS
    for output in kind.outputs
]


def drawn(topology: Topology) -> dict[str, tuple[str, ...]]:
    """Return every transistor as channel, drain, gate, source and bulk."""
    return {
        t.name: (topology.channel(t), t.drain, t.gate, t.source, topology.bulk_node(t)) for t in topology.transistors
    }


def legs(topology: Topology) -> set[tuple[str, ...]]:
    """Return every current source as it flows: from, to and size."""
    turned = topology.polarity < 0.0
    return {(s.b, s.a, s.size) if turned else (s.a, s.b, s.size) for s in topology.sources}


PAIR = {
    "input.p": ("n", "left", "in+", "tail", "ground"),
    "input.n": ("n", "right", "in-", "tail", "ground"),
}
SINGLE_TAIL = {
    "tail": ("n", "tail", "bias", "ground", "ground"),
    "bias": ("n", "bias", "bias", "ground", "ground"),
}


def test_n_channel_pair_with_resistors_and_mirrored_tail() -> None:
    top = build("nmos", "resistor", "single", "differential")
    assert drawn(top) == PAIR | SINGLE_TAIL
    assert {frozenset((r.a, r.b)) for r in top.resistors} == {
        frozenset(("left", "supply")),
        frozenset(("right", "supply")),
    }
    assert legs(top) == {("supply", "bias", "bias.current")}
    assert dict(top.output) == {"right": 1.0, "left": -1.0}
    assert set(top.unknown) == {"left", "right", "tail", "bias"}


def test_p_channel_pair_with_mirror_and_ideal_tail() -> None:
    top = build("pmos", "mirror", "ideal", bulk="source")
    assert drawn(top) == {
        "input.p": ("p", "left", "in+", "tail", "tail"),
        "input.n": ("p", "right", "in-", "tail", "tail"),
        "load.p": ("n", "left", "left", "ground", "ground"),
        "load.n": ("n", "right", "left", "ground", "ground"),
    }
    assert top.polarity == -1.0
    assert [(s.a, s.b) for s in top.sources] == [("tail", "supply")]
    assert legs(top) == {("supply", "tail", "tail.current")}
    assert dict(top.output) == {"right": 1.0}
    assert {t.name for t in top.transistors if t.saturates} == {"input.p", "input.n", "load.n"}


def test_diodes_over_a_resistor() -> None:
    top = build("nmos", "diode", "resistor", "differential")
    assert drawn(top) == PAIR | {
        "load.p": ("p", "left", "left", "supply", "supply"),
        "load.n": ("p", "right", "right", "supply", "supply"),
    }
    assert [(r.a, r.b, r.size) for r in top.resistors] == [("tail", "ground", "tail.resistance")]
    assert top.sources == ()
    assert {t.name for t in top.transistors if t.saturates} == {"input.p", "input.n"}


def test_sources_under_control_with_cascoded_tail() -> None:
    """The gate of the two current sources is one node, which the control alone sets; the bias of the sources is counted
    but does not set it."""
    top = build("pmos", "source", "cascode", "differential")
    assert drawn(top) == {
        "input.p": ("p", "left", "in+", "tail", "supply"),
        "input.n": ("p", "right", "in-", "tail", "supply"),
        "load.p": ("n", "left", "load_gate", "ground", "ground"),
        "load.n": ("n", "right", "load_gate", "ground", "ground"),
        "load.bias": ("n", "load_bias", "load_bias", "ground", "ground"),
        "tail": ("p", "tail_low", "bias", "supply", "supply"),
        "tail.cascode": ("p", "tail", "tail_cascode", "tail_low", "supply"),
        "bias": ("p", "bias_low", "bias", "supply", "supply"),
        "bias.cascode": ("p", "bias", "tail_cascode", "bias_low", "supply"),
        "tail.cascode.bias": ("p", "tail_cascode", "tail_cascode", "supply", "supply"),
    }
    assert legs(top) == {
        ("supply", "load_bias", "bias.current"),
        ("bias", "ground", "bias.current"),
        ("tail_cascode", "ground", "bias.current"),
    }
    assert [(c.node, c.senses, c.reference) for c in top.controls] == [("load_gate", ("left", "right"), "reference")]
    assert top.driven == ("in+", "in-", "supply", "ground", "reference")
    units = {t.name: t.units for t in top.transistors if t.units}
    assert units == {
        "load.p": "load.units",
        "load.n": "load.units",
        "tail": "tail.units",
        "tail.cascode": "tail.units",
    }
    assert {t.name for t in top.transistors if not t.saturates} == {"load.bias", "tail.cascode.bias"}


def test_telescopic_mirror() -> None:
    """The gates of the upper mirror are at the drain of its cascode; the cascodes of the pair take their gate voltage
    from a diode that stands on the tail."""
    top = build("nmos", "mirror", "single", **STACKED)
    assert drawn(top) == SINGLE_TAIL | {
        "input.p": ("n", "left_low", "in+", "tail", "ground"),
        "input.n": ("n", "right_low", "in-", "tail", "ground"),
        "input.cascode.p": ("n", "left", "input_gate", "left_low", "ground"),
        "input.cascode.n": ("n", "right", "input_gate", "right_low", "ground"),
        "input.cascode.bias": ("n", "input_gate", "input_gate", "tail", "ground"),
        "load.p": ("p", "left_high", "left", "supply", "supply"),
        "load.n": ("p", "right_high", "left", "supply", "supply"),
        "load.cascode.p": ("p", "left", "load_cascode", "left_high", "supply"),
        "load.cascode.n": ("p", "right", "load_cascode", "right_high", "supply"),
        "load.cascode.bias": ("p", "load_cascode", "load_cascode", "supply", "supply"),
    }
    assert legs(top) == {
        ("supply", "bias", "bias.current"),
        ("supply", "input_gate", "bias.current"),
        ("load_cascode", "ground", "bias.current"),
    }
    assert dict(top.output) == {"right": 1.0}
    assert top.leg == "bias.current"


def test_telescopic_sources() -> None:
    top = build("pmos", "source", "ideal", "differential", "source", **STACKED)
    assert drawn(top) == {
        "input.p": ("p", "left_low", "in+", "tail", "tail"),
        "input.n": ("p", "right_low", "in-", "tail", "tail"),
        "input.cascode.p": ("p", "left", "input_gate", "left_low", "supply"),
        "input.cascode.n": ("p", "right", "input_gate", "right_low", "supply"),
        "input.cascode.bias": ("p", "input_gate", "input_gate", "tail", "supply"),
        "load.p": ("n", "left_high", "load_gate", "ground", "ground"),
        "load.n": ("n", "right_high", "load_gate", "ground", "ground"),
        "load.bias": ("n", "load_bias", "load_bias", "ground", "ground"),
        "load.cascode.p": ("n", "left", "load_cascode", "left_high", "ground"),
        "load.cascode.n": ("n", "right", "load_cascode", "right_high", "ground"),
        "load.cascode.bias": ("n", "load_cascode", "load_cascode", "ground", "ground"),
    }
    assert legs(top) == {
        ("supply", "tail", "tail.current"),
        ("input_gate", "ground", "bias.current"),
        ("supply", "load_bias", "bias.current"),
        ("supply", "load_cascode", "bias.current"),
    }
    assert [(c.node, c.senses) for c in top.controls] == [("load_gate", ("left", "right"))]


@pytest.mark.parametrize("form", list(FORMS))
@pytest.mark.parametrize(
    ("bulk", "bulks"), [("rail", ("ground", "ground")), ("source", ("left_source", "right_source"))]
)
def test_degeneration(form: str, bulk: str, bulks: tuple[str, str]) -> None:
    """A resistor from each source to the tail, nothing else; a bulk at the source stands on the resistor with it."""
    plain = build("nmos", "mirror", "single", bulk=bulk, form=form)
    top = build("nmos", "mirror", "single", bulk=bulk, form=form, degenerated=True)
    expected = drawn(plain)
    for name, source in (("input.p", "left_source"), ("input.n", "right_source")):
        expected[name] = (*expected[name][:3], source, source if bulk == "source" else "ground")
    assert drawn(top) == expected
    assert {(r.a, r.b, r.size) for r in top.resistors} == {
        ("left_source", "tail", "input.degeneration"),
        ("right_source", "tail", "input.degeneration"),
    }
    assert set(top.unknown) == {*plain.unknown, "left_source", "right_source"}
    assert set(top.size_names) == {*plain.size_names, "input.degeneration"}


@pytest.mark.parametrize("degenerated", [False, True])
@pytest.mark.parametrize(("input", "form", "load", "tail", "output"), ALL)
def test_every_kind_is_complete(input: str, form: str, load: str, tail: str, output: str, degenerated: bool) -> None:
    """Each unknown node has a guess and at least two elements; every element's sizes are sizes of the stage, and each
    size is named once."""
    top = build(input, load, tail, output, form=form, degenerated=degenerated)
    ends = [n for t in top.transistors for n in (t.drain, t.gate, t.source)]
    ends += [n for e in (*top.resistors, *top.sources) for n in (e.a, e.b)]
    ends += [n for c in top.controls for n in (c.node, *c.senses)]
    assert set(ends) <= {*top.unknown, "in+", "in-", "supply", "ground"}
    for node in top.unknown:
        assert ends.count(node) >= 2
    assert len(set(top.unknown)) == len(top.unknown)
    needed = {f"{t.group}.{kind}" for t in top.transistors for kind in ("width", "length")}
    needed |= {t.units for t in top.transistors if t.units}
    needed |= {e.size for e in (*top.resistors, *top.sources)}
    assert needed == set(top.size_names)
    assert len(top.size_names) == len(needed)
    assert all(size.meaning for size in top.sizes)
    names = [x.name for x in (*top.transistors, *top.controls)]
    assert len(set(names)) == len(names)
    # The units of a group are drawn alike, so all of them have an even number of fingers or none has.
    assert len({(t.group, t.even_fingers) for t in top.transistors}) == len({t.group for t in top.transistors})


@pytest.mark.parametrize(("input", "form", "load", "tail", "output"), ALL)
def test_both_channels_are_one_drawing(input: str, form: str, load: str, tail: str, output: str) -> None:
    """A p-channel stage is the n-channel one with rails and channels exchanged and every source turned round."""
    turned = {"ground": "supply", "supply": "ground", "n": "p", "p": "n"}
    top = build(input, load, tail, output, form=form)
    other = build("pmos" if input == "nmos" else "nmos", load, tail, output, form=form)
    assert drawn(top) == {name: tuple(turned.get(x, x) for x in ends) for name, ends in drawn(other).items()}
    assert legs(top) == {(turned.get(b, b), turned.get(a, a), size) for a, b, size in legs(other)}


@pytest.mark.parametrize("form", list(FORMS))
def test_a_mirror_has_one_output(form: str) -> None:
    with pytest.raises(InputError, match=r'"differential" does not go with load "mirror".*single-ended'):
        build("nmos", "mirror", "single", "differential", form=form)


@pytest.mark.parametrize("form", list(FORMS))
def test_control_needs_two_outputs(form: str) -> None:
    with pytest.raises(InputError, match=r'"single-ended" does not go with load "source".*differential'):
        build("pmos", "source", "ideal", "single-ended", form=form)


@pytest.mark.parametrize("load", ["resistor", "diode"])
def test_loads_without_cascodes_have_no_telescopic_form(load: str) -> None:
    with pytest.raises(InputError, match=rf'"{load}" does not go with form "telescopic"; allowed are .*mirror.*source'):
        build("nmos", load, "single", "differential", form="telescopic")
