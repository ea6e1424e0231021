"""Where the output stands as wanted: operating point and input solved together, against the plain operating point at
that input. Common practice, no source."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import size_circuit
from optisize.stage.measures import CATALOGUE
from optisize.stage.nulling import Null, null
from tests.stage.stages import KINDS, Kind, analysed, driven_point, named, saturated, under, without

ONE_OUTPUT = [kind for kind in KINDS if kind[3] == "single-ended"]


def nulled(a: Analysis, wanted: Array, start: Array | None = None) -> Null:
    """Return where the output stands as wanted, (N,), from the operating point unless from elsewhere."""
    begin = a.point.v if start is None else start
    return null(a.circuit.network, begin, a.drives[:, 0], a.wiring.output_weights, wanted)


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_the_output_stands_as_wanted(kind: Kind, process: str) -> None:
    """Half of its swing from rest, up and down; the input that is found, applied to the stage, does it, and leaves the
    common mode where it was."""
    a = saturated(kind, process, 6, 41)
    down, up = a.output_excursions
    rest, common = a.wiring.output(a.point.v), a.circuit.conditions.middle
    for wanted in (rest, rest + 0.5 * up, rest - 0.5 * down):
        found = nulled(a, wanted)
        assert found.found.all()
        np.testing.assert_allclose(a.wiring.output(found.v), wanted, atol=1e-9)
        inputs = [found.v[a.wiring.index[node]] for node in ("in+", "in-")]
        np.testing.assert_allclose(inputs[0] - inputs[1], found.input, atol=1e-13)
        np.testing.assert_allclose(inputs[0] + inputs[1], 2.0 * common, atol=1e-12)
        again = driven_point(a.circuit, *inputs)
        assert again.converged.all()
        # An input known to rounding leaves the output of a high gain that much open.
        open_ = 1e-7 + 1e-12 * np.abs(a.adm)
        assert (np.abs(a.wiring.output(again.v) - wanted) < open_).all()
    np.testing.assert_allclose(nulled(a, rest).input, 0.0, atol=1e-9)


@pytest.mark.parametrize("kind", ONE_OUTPUT, ids=named)
def test_systematic_offset(kind: Kind) -> None:
    """The differential input that brings the output to the wanted voltage: to first order, what is missing over the
    gain; none where nothing is wanted, and none where the output stands right by itself."""
    a = analysed(kind, input_width=np.array([70e-6, 100e-6, 140e-6]))
    measure = CATALOGUE["offset_systematic"]
    assert (measure.of(a) == 0.0).all()
    rest = a.wiring.output(a.point.v)
    for missing in (1e-3, -2e-3):
        wishing = under(a, output_common_mode=float(rest[1]) + missing)
        expected = (float(rest[1]) + missing - rest) / a.adm
        near = np.abs(expected * a.adm) < 5e-3
        assert near[1]
        np.testing.assert_allclose(measure.of(wishing)[near], expected[near], rtol=1e-2, atol=1e-12)
        base, half = np.full(3, a.circuit.conditions.middle), 0.5 * measure.of(wishing)
        there = driven_point(a.circuit, base + half, base - half)
        np.testing.assert_allclose(a.wiring.output(there.v), float(rest[1]) + missing, atol=1e-6)
    right = under(a, output_common_mode=float(rest[1]))
    assert np.abs(measure.of(right)[1]) < 1e-9


def test_offset_of_a_square_law_pair_by_hand() -> None:
    """A resistor's drop of R I/2 (1 - y) is wanted: vid = vov (sqrt(1 + y) - sqrt(1 - y)), without gds (standard)."""
    process = without("handbook", channel_modulation=0.0, body_effect=0.0)
    a = analysed(("nmos", "resistor", "ideal", "single-ended"), process)
    vov = float(np.sqrt(100e-6 / (process.nmos.current_factor * 50.0)))
    for y in (-0.7, 0.2, 0.9):
        wishing = under(a, output_common_mode=3.3 - 20e3 * 50e-6 * (1.0 - y))
        expected = vov * (np.sqrt(1.0 + y) - np.sqrt(1.0 - y))
        np.testing.assert_allclose(CATALOGUE["offset_systematic"].of(wishing), expected, rtol=1e-7)
        np.testing.assert_allclose(CATALOGUE["offset"].of(wishing) > abs(expected), True)


@pytest.mark.parametrize("kind", [k for k in KINDS if k[3] == "differential"], ids=named)
def test_no_systematic_offset_between_two_outputs(kind: Kind) -> None:
    """Whatever their common mode should be, a matched pair of outputs has none."""
    a = under(analysed(kind), output_common_mode=1.5)
    assert (CATALOGUE["offset_systematic"].of(a) == 0.0).all()


def test_what_cannot_be_had_is_flagged() -> None:
    """An output beyond what full steering reaches: not found, left where it started, and not a number, without harm to
    the design beside it."""
    a = analysed(("nmos", "resistor", "ideal", "single-ended"), load_resistance=np.array([5e3, 20e3]))
    found = nulled(a, np.array([2.2, 2.2]))
    assert found.found.tolist() == [False, True]
    np.testing.assert_array_equal(found.v[:, 0], a.point.v[:, 0])
    wishing = under(a, output_common_mode=2.2)
    offset = CATALOGUE["offset_systematic"].of(wishing)
    assert np.isnan(offset).tolist() == [True, False]
    alone = analysed(("nmos", "resistor", "ideal", "single-ended"), load_resistance=20e3)
    np.testing.assert_allclose(CATALOGUE["offset_systematic"].of(under(alone, output_common_mode=2.2)), offset[1:])


@pytest.mark.parametrize("kind", ONE_OUTPUT, ids=named)
def test_the_start_does_not_matter(kind: Kind) -> None:
    """From another input than rest the same input is found, counted from there."""
    a = analysed(kind, input_width=np.array([70e-6, 140e-6]))
    rest = a.wiring.output(a.point.v)
    shift = 0.1 / np.maximum(np.abs(a.adm), 1.0)
    base = np.full(2, a.circuit.conditions.middle)
    elsewhere = driven_point(a.circuit, base + 0.5 * shift, base - 0.5 * shift)
    np.testing.assert_allclose(nulled(a, rest, elsewhere.v).input, -shift, rtol=1e-5, atol=1e-10)


def test_what_it_starts_from_is_left_alone() -> None:
    a = analysed(("nmos", "mirror", "single", "single-ended"))
    kept = a.point.v.copy()
    a.point.v.setflags(write=False)
    nulled(a, a.wiring.output(a.point.v) + 0.1)
    np.testing.assert_array_equal(a.point.v, kept)


def test_the_input_moves_both_ways_alike() -> None:
    """Turning the wish about the rest of a differential output turns the input (symmetry)."""
    a = analysed(("nmos", "resistor", "single", "differential"))
    up, down = (nulled(a, np.array([w])).input for w in (0.3, -0.3))
    np.testing.assert_allclose(up, -down, rtol=1e-9)
    other = replace(a.circuit.conditions, load_capacitance=1e-9)
    same = Analysis(size_circuit(a.topology, a.circuit.process, other, a.circuit.sizes))
    np.testing.assert_array_equal(nulled(same, np.array([0.3])).input, up)
