"""The kinds of stage as data: which elements stand between which nodes, and which sizes they need.

Every kind is written once, for both input channels: ``tail_rail`` is ground for an n-channel input and the supply for
a p-channel one, ``load_rail`` the other rail. Input transistors have the input's channel, load transistors the other
one. A new load or tail is an entry of `LOADS` or `TAILS`, a new way to stack them one of `FORMS`; the solver, the
small signal and the measures read the entries and know no kind by name.

Bias legs are ideal copies of ``bias.current``, the reference of the chip, into transistors that are sized and counted.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from optisize.process.law import Array
from optisize.stage.elements import (
    REFERENCE,
    Channel,
    Control,
    CurrentSource,
    Form,
    Guess,
    LoadKind,
    PairKind,
    Piece,
    Resistor,
    Size,
    Start,
    TailKind,
    Transistor,
)

BIAS_CURRENT = Size("bias.current", "current", "current of the bias branch, and of each leg that makes a gate voltage")


def _shape(group: str, of: str) -> tuple[Size, Size]:
    """Return the width and the length of a group of transistors."""
    return (
        Size(f"{group}.width", "width", f"channel width of {of}"),
        Size(f"{group}.length", "length", f"channel length of {of}"),
    )


def _gate(rail: str, transistor: str, current: Callable[[Start], Array]) -> Guess:
    """Return the guess of a gate that stands from a rail by what a transistor needs to carry a current."""
    return lambda s: s.away(rail, s.gate_drive(transistor, current(s)))


def _under_cascode(bias: str, cascode: str, current: Callable[[Start], Array]) -> Callable[[Start], Array]:
    """Return how far the source of a cascode stands from the rail at which its gate voltage is made."""
    return lambda s: np.maximum(s.under(cascode, current(s), s.gate_drive(bias, _leg(s))), LEAST_STACKED)


LEAST_STACKED = 0.03  # V, in a first guess


def _leg(s: Start) -> Array:
    return s.size("bias.current")


def _half(s: Start) -> Array:
    return s.half()


def _tail(s: Start) -> Array:
    return s.follow("input.p", s.half())


PAIR = PairKind(
    sizes=(
        Size("input.width", "width", "channel width of each input transistor"),
        Size("input.length", "length", "channel length of the input transistors"),
    ),
    transistors=(
        Transistor("input.p", "left", "in+", "tail", "input", "input", even_fingers=True),
        Transistor("input.n", "right", "in-", "tail", "input", "input", even_fingers=True),
    ),
    guesses=(("tail", _tail),),
)


def _input_gate(s: Start) -> Array:
    """Return how far the gates of the input's cascodes stand from the rail of the tail."""
    return s.gate_drive("input.cascode.bias", _leg(s), s.distance(_tail(s)))


def _input_drain(s: Start) -> Array:
    """Return how far the drains of a cascoded pair stand from the rail of the tail."""
    return np.maximum(s.under("input.cascode.p", s.half(), _input_gate(s)), s.distance(_tail(s)) + LEAST_STACKED)


# The gate voltage of the cascodes stands on the tail, so that it follows the common mode.
CASCODED_PAIR = PairKind(
    sizes=(
        *PAIR.sizes,
        *_shape("input.cascode", "each cascode of the input transistors"),
        *_shape("input.cascode.bias", "the diode on the tail that makes the gate voltage of the input's cascodes"),
        BIAS_CURRENT,
    ),
    transistors=(
        Transistor("input.p", "left_low", "in+", "tail", "input", "input", even_fingers=True),
        Transistor("input.n", "right_low", "in-", "tail", "input", "input", even_fingers=True),
        Transistor("input.cascode.p", "left", "input_gate", "left_low", "input", "input.cascode", even_fingers=True),
        Transistor("input.cascode.n", "right", "input_gate", "right_low", "input", "input.cascode", even_fingers=True),
        Transistor(
            "input.cascode.bias", "input_gate", "input_gate", "tail", "input", "input.cascode.bias", saturates=False
        ),
    ),
    sources=(CurrentSource("input.cascode.bias", "load_rail", "input_gate", "bias.current"),),
    guesses=(
        ("tail", _tail),
        ("left_low", lambda s: s.away("tail_rail", _input_drain(s))),
        ("right_low", lambda s: s.away("tail_rail", _input_drain(s))),
        ("input_gate", lambda s: s.away("tail_rail", _input_gate(s))),
    ),
    leg="bias.current",
)

# Joined to a pair where its size is given: the sources of the pair then stand on these resistors.
DEGENERATION = Piece(
    summary="a resistor from the source of each input transistor to the tail",
    sizes=(
        Size("input.degeneration", "resistance", "resistance from the source of each input transistor to the tail"),
    ),
    resistors=(
        Resistor("input.degeneration.p", "left_source", "tail", "input.degeneration"),
        Resistor("input.degeneration.n", "right_source", "tail", "input.degeneration"),
    ),
    guesses=(
        ("tail", lambda s: s.toward_load(_tail(s), -s.size("input.degeneration") * s.half())),
        ("left_source", _tail),
        ("right_source", _tail),
    ),
)
DEGENERATED = {"input.p": "left_source", "input.n": "right_source"}

_ONE_OUTPUT = "a mirror has one output: the other side is its diode"
_HELD = "common-mode control holds the mean of two outputs"
_BOTH = ("single-ended", "differential")
_LOAD_GATE = _gate("load_rail", "load.p", _half)


def _current_source(name: str, drain: str) -> Transistor:
    """Return one of the current sources of a load, its gate set by the common-mode control."""
    return Transistor(name, drain, "load_gate", "load_rail", "opposite", "load", "load.units", even_fingers=True)


_LOAD_BIAS = Transistor(
    "load.bias", "load_bias", "load_bias", "load_rail", "opposite", "load", saturates=False, even_fingers=True
)  # of fingers like those of its mirror


LOADS: dict[str, LoadKind] = {
    "resistor": LoadKind(
        summary="a resistor from each drain to the rail",
        sizes=(Size("load.resistance", "resistance", "resistance of each load resistor"),),
        resistors=(
            Resistor("load.p", "left", "load_rail", "load.resistance"),
            Resistor("load.n", "right", "load_rail", "load.resistance"),
        ),
        guesses=tuple(
            (node, lambda s: s.away("load_rail", s.size("load.resistance") * s.half())) for node in ("left", "right")
        ),
        outputs=_BOTH,
        symmetric=True,
    ),
    "diode": LoadKind(
        summary="a diode-connected transistor from each drain to the rail",
        sizes=_shape("load", "each load transistor"),
        transistors=(
            Transistor("load.p", "left", "left", "load_rail", "opposite", "load", saturates=False, even_fingers=True),
            Transistor("load.n", "right", "right", "load_rail", "opposite", "load", saturates=False, even_fingers=True),
        ),
        guesses=(("left", _LOAD_GATE), ("right", _LOAD_GATE)),
        outputs=_BOTH,
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
        guesses=(("left", _LOAD_GATE), ("right", _LOAD_GATE)),
        steered=1.0,
        refusal=_ONE_OUTPUT,
    ),
    "source": LoadKind(
        summary="two current sources under ideal common-mode control, which holds the outputs at output_common_mode",
        sizes=(
            *_shape("load", "one unit of the current sources and of their bias"),
            Size("load.units", "count", "number of units in each current source; its bias has one"),
            BIAS_CURRENT,
        ),
        transistors=(
            Transistor("load.p", "left", "load_gate", "load_rail", "opposite", "load", "load.units", even_fingers=True),
            Transistor(
                "load.n", "right", "load_gate", "load_rail", "opposite", "load", "load.units", even_fingers=True
            ),
            _LOAD_BIAS,
        ),
        sources=(CurrentSource("load.bias", "load_bias", "tail_rail", "bias.current"),),
        controls=(Control("load", "load_gate", ("left", "right")),),
        guesses=(
            ("left", lambda s: s.rail(REFERENCE)),
            ("right", lambda s: s.rail(REFERENCE)),
            ("load_gate", _LOAD_GATE),
            ("load_bias", _gate("load_rail", "load.bias", _leg)),
        ),
        outputs=("differential",),
        symmetric=True,
        refusal=_HELD,
    ),
}

_CASCODED_LOAD_SIZES = (
    *_shape("load.cascode", "each cascode of the load"),
    *_shape("load.cascode.bias", "the diode at the rail that makes the gate voltage of the load's cascodes"),
    BIAS_CURRENT,
)
_LOAD_CASCODES = (
    Transistor("load.cascode.p", "left", "load_cascode", "left_high", "opposite", "load.cascode", even_fingers=True),
    Transistor("load.cascode.n", "right", "load_cascode", "right_high", "opposite", "load.cascode", even_fingers=True),
    Transistor(
        "load.cascode.bias", "load_cascode", "load_cascode", "load_rail", "opposite", "load.cascode.bias",
        saturates=False,
    ),
)  # fmt: skip
_LOAD_CASCODE_LEG = CurrentSource("load.cascode.bias", "load_cascode", "tail_rail", "bias.current")
_OVER_CASCODE = _under_cascode("load.cascode.bias", "load.cascode.p", _half)
_LOAD_CASCODE_GUESSES: tuple[tuple[str, Guess], ...] = (
    ("left_high", lambda s: s.away("load_rail", _OVER_CASCODE(s))),
    ("right_high", lambda s: s.away("load_rail", _OVER_CASCODE(s))),
    ("load_cascode", _gate("load_rail", "load.cascode.bias", _leg)),
)

CASCODED_LOADS: dict[str, LoadKind] = {
    "mirror": LoadKind(
        summary="a cascoded mirror, its gates at the drain of the cascode",
        sizes=(*LOADS["mirror"].sizes, *_CASCODED_LOAD_SIZES),
        transistors=(
            Transistor("load.p", "left_high", "left", "load_rail", "opposite", "load", even_fingers=True),
            Transistor("load.n", "right_high", "left", "load_rail", "opposite", "load", even_fingers=True),
            *_LOAD_CASCODES,
        ),
        sources=(_LOAD_CASCODE_LEG,),
        guesses=(("left", _LOAD_GATE), ("right", _LOAD_GATE), *_LOAD_CASCODE_GUESSES),
        steered=1.0,
        refusal=_ONE_OUTPUT,
    ),
    "source": LoadKind(
        summary="two cascoded current sources under ideal common-mode control",
        sizes=(*LOADS["source"].sizes, *_CASCODED_LOAD_SIZES),
        transistors=(
            _current_source("load.p", "left_high"),
            _current_source("load.n", "right_high"),
            LOADS["source"].transistors[2],
            *_LOAD_CASCODES,
        ),
        sources=(*LOADS["source"].sources, _LOAD_CASCODE_LEG),
        controls=LOADS["source"].controls,
        guesses=(*LOADS["source"].guesses, *_LOAD_CASCODE_GUESSES),
        outputs=("differential",),
        symmetric=True,
        refusal=_HELD,
    ),
}

FORMS: dict[str, Form] = {
    "simple": Form("the load on the drains of the pair", PAIR, LOADS),
    "telescopic": Form(
        "cascodes over the pair and under the load, mirror or source", CASCODED_PAIR, CASCODED_LOADS, delicate=True
    ),
}

_TAIL_SIZES = (
    Size("tail.width", "width", "channel width of one unit of tail and bias"),
    Size("tail.length", "length", "channel length of the units of tail and bias"),
    Size("tail.units", "count", "number of units in the tail; the bias has one"),
)
_BIAS_LEG = CurrentSource("bias", "load_rail", "bias", "bias.current")
_UNDER_TAIL_CASCODE = _under_cascode("tail.cascode.bias", "bias.cascode", _leg)


def _mirrored(s: Start) -> Array:
    return s.size("tail.units") * s.size("bias.current")


def _through_resistor(s: Start) -> Array:
    """Return the current of a resistive tail: the input transistors' drive changes little, so two passes do."""
    resistance = s.size("tail.resistance")
    current = 0.5 * s.height() / resistance
    for _ in range(2):
        drop = s.height() - s.gate_drive("input.p", 0.5 * current)
        current = np.maximum(drop, 0.1 * s.height()) / resistance
    return current


TAILS: dict[str, TailKind] = {
    "ideal": TailKind(
        summary="an ideal current source: the limiting case",
        sizes=(Size("tail.current", "current", "tail current"),),
        sources=(CurrentSource("tail", "tail", "tail_rail", "tail.current"),),
        current=lambda s: s.size("tail.current"),
    ),
    "resistor": TailKind(
        summary="a resistor to the rail",
        sizes=(Size("tail.resistance", "resistance", "resistance of the tail resistor"),),
        resistors=(Resistor("tail", "tail", "tail_rail", "tail.resistance"),),
        current=_through_resistor,
    ),
    "single": TailKind(
        summary="one transistor, mirrored from a diode-connected unit that carries bias.current",
        sizes=(*_TAIL_SIZES, BIAS_CURRENT),
        transistors=(
            Transistor("tail", "tail", "bias", "tail_rail", "input", "tail", units="tail.units"),
            Transistor("bias", "bias", "bias", "tail_rail", "input", "tail", saturates=False),
        ),
        sources=(_BIAS_LEG,),
        guesses=(("bias", _gate("tail_rail", "bias", _leg)),),
        current=_mirrored,
    ),
    "cascode": TailKind(
        summary="a cascoded mirror of bias.current, its cascodes' gate voltage from a diode of its own",
        sizes=(
            *_TAIL_SIZES,
            *_shape("tail.cascode", "one unit of the cascodes over tail and bias"),
            *_shape("tail.cascode.bias", "the diode at the rail that makes the gate voltage of the tail's cascodes"),
            BIAS_CURRENT,
        ),
        transistors=(
            Transistor("tail", "tail_low", "bias", "tail_rail", "input", "tail", units="tail.units"),
            Transistor("tail.cascode", "tail", "tail_cascode", "tail_low", "input", "tail.cascode", units="tail.units"),
            Transistor("bias", "bias_low", "bias", "tail_rail", "input", "tail"),
            Transistor("bias.cascode", "bias", "tail_cascode", "bias_low", "input", "tail.cascode"),
            Transistor(
                "tail.cascode.bias", "tail_cascode", "tail_cascode", "tail_rail", "input", "tail.cascode.bias",
                saturates=False,
            ),
        ),
        sources=(_BIAS_LEG, CurrentSource("tail.cascode.bias", "load_rail", "tail_cascode", "bias.current")),
        guesses=(
            ("bias", _gate("tail_rail", "bias", _leg)),
            ("tail_low", lambda s: s.away("tail_rail", _UNDER_TAIL_CASCODE(s))),
            ("bias_low", lambda s: s.away("tail_rail", _UNDER_TAIL_CASCODE(s))),
            ("tail_cascode", _gate("tail_rail", "tail.cascode.bias", _leg)),
        ),
        current=_mirrored,
    ),
}  # fmt: skip

INPUTS: dict[str, Channel] = {"nmos": "n", "pmos": "p"}
OUTPUTS: dict[str, tuple[tuple[str, float], ...]] = {
    "single-ended": (("right", 1.0),),
    "differential": (("right", 1.0), ("left", -1.0)),
}
BULKS = ("rail", "source")
STAGE_WORDS: dict[str, tuple[str, ...]] = {
    "input": tuple(INPUTS),
    "load": tuple(LOADS),
    "tail": tuple(TAILS),
    "output": tuple(OUTPUTS),
    "form": tuple(FORMS),
    "bulk": BULKS,
}
