"""What a stage answers at one frequency: the adjoint solve against forward ones and against the nonlinear stage, the
rails, impedances, and what capacitance does to rejection and phase."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from optisize.process.law import Array
from optisize.stage.bias import operating_point, settle
from optisize.stage.measures import CATALOGUE, decibels
from optisize.stage.response import Response, response
from tests.stage.stages import KINDS, Kind, analysed, figure, kinds_in, named, saturated, under, without

WIDTHS = np.array([60e-6, 100e-6, 160e-6])
FREQUENCIES = (0.0, 1e3, 3e6, 2e9)


def pull(r: Response, driven: Array) -> Array:
    """Return how the residual moves with voltages on all driven nodes, (U, N), at the frequency of a response."""
    w = r.a.wiring
    through = np.tensordot(w.conductance_stamp, driven, (1, 0)) @ r.a.slopes
    charged = np.tensordot(w.capacitance_stamp, driven, (1, 0)) @ r.a.capacitance_branches
    return through + 2j * np.pi * r.frequency * charged


def sides(r: Response, driven: Array) -> Array:
    """Return how the nodes of the output move with voltages on the driven nodes, by numpy's solver."""
    a = r.a
    matrix = a.matrix + 2j * np.pi * r.frequency * a.capacitance_matrix
    moved = np.linalg.solve(matrix.transpose(2, 0, 1), -pull(r, driven).T[:, :, None])[:, :, 0].T
    return np.array([moved[a.wiring.index[node]] for node, _ in a.topology.output])


@pytest.mark.parametrize("frequency", FREQUENCIES)
@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_everything_raised_raises_the_output(kind: Kind, frequency: float) -> None:
    """All driven nodes moved together by one volt move every output by one: voltages are differences, and all
    capacitance is between nodes of the stage or to its ground. By the adjoint sums, and drive by drive."""
    a = analysed(kind, input_width=WIDTHS)
    r = response(a, frequency)
    every = np.zeros(len(a.wiring.nodes))
    every[a.wiring.unknowns :] = 1.0
    mean = -(r.adjoint[:, -1] * pull(r, every)).sum(axis=0)
    close = 1e-5 if a.topology.delicate else 1e-8
    np.testing.assert_allclose(mean, 1.0, atol=close)
    reference = every * 0.0
    if a.topology.controls:
        reference[a.wiring.index["reference"]] = 1.0
    held = -(r.adjoint[:, -1] * pull(r, reference)).sum(axis=0)
    np.testing.assert_allclose(sum(r.mean_gain(x) for x in ("common", "supply", "ground")) + held, 1.0, atol=close)
    np.testing.assert_allclose(held, 1.0 if a.topology.controls else 0.0, atol=close)
    whole = sum(r.gain(x) for x in ("common", "supply", "ground"))
    np.testing.assert_allclose(whole, 1.0 if len(a.topology.output) == 1 else 0.0, atol=close)


@pytest.mark.parametrize("frequency", FREQUENCIES)
@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_adjoint_is_the_forward_solve(kind: Kind, frequency: float) -> None:
    """Transposed equations give the same gains (linear algebra), to the output and to the mean of its sides."""
    a = analysed(kind, input_width=WIDTHS)
    r = response(a, frequency)
    drives = {
        "differential": {"positive": 0.5, "negative": -0.5},
        "common": {"positive": 1.0, "negative": 1.0},
        "supply": {"supply": 1.0},
        "ground": {"ground": 1.0},
    }
    for name, driven in drives.items():
        moved = sides(r, a.wiring.drive(**driven))
        signs = np.array([sign for _, sign in a.topology.output])[:, None]
        scale = np.abs(a.adm) * 1e-7 + 1e-9
        assert (np.abs(r.gain(name) - (signs * moved).sum(axis=0)) < scale).all(), name
        assert (np.abs(r.mean_gain(name) - moved.mean(axis=0)) < scale).all(), name
    exact = a.differential_transfer.at(np.full(3, 2.0 * np.pi * frequency))
    np.testing.assert_allclose(r.differential, exact, rtol=1e-6)


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_slow_is_at_rest(kind: Kind) -> None:
    """At a microhertz the answers are those at DC, and those at DC the gains of the analysis."""
    a = analysed(kind, input_width=WIDTHS)
    slow, rest = response(a, 1e-6), response(a, 0.0)
    assert np.iscomplexobj(slow.differential)
    assert not np.iscomplexobj(rest.differential)
    for name in ("differential", "common", "supply", "ground"):
        np.testing.assert_allclose(slow.gain(name), rest.gain(name), rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(rest.differential, a.adm, rtol=1e-6)
    np.testing.assert_allclose(rest.mean_gain("common"), a.acm, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(slow.input_capacitance, rest.input_capacitance, rtol=1e-6)


@pytest.mark.parametrize(("process", "kind"), kinds_in("handbook", "generic-180"), ids=named)
def test_gains_from_the_rails_are_slopes(process: str, kind: Kind) -> None:
    """Against small differences of the supply of the nonlinear stage, inputs, ground and reference at rest; that from
    the ground follows since everything moved together moves the output by as much (common practice, no source)."""
    a = saturated(kind, process, 5, 21)
    step, r = 2e-5, response(a, 0.0)
    ends = []
    for sign in (1.0, -1.0):
        moved = under(a, supply=a.circuit.conditions.supply + sign * step).circuit
        base = np.full(5, a.circuit.conditions.middle)
        ends.append(operating_point(moved, moved.driven(base, base)))
        assert ends[-1].converged.all()
    slope = (ends[0].v - ends[1].v) / (2.0 * step)
    close = {"rtol": 1e-3, "atol": 1e-3 if a.topology.delicate else 1e-5}
    np.testing.assert_allclose(r.gain("supply"), a.wiring.output(slope), **close)
    mean = np.mean([slope[a.wiring.index[node]] for node, _ in a.topology.output], axis=0)
    np.testing.assert_allclose(r.mean_gain("supply"), mean, **close)
    measured = CATALOGUE["supply_rejection"].of(a)
    unlimited = np.isposinf(measured)
    # Control holds the mean; an ideal tail from the supply sends nothing down.
    assert unlimited.all() == (kind[1] == "source" or (kind[0], kind[2]) == ("pmos", "ideal"))
    expected = decibels(a.adm) - decibels(r.mean_gain("supply"))
    np.testing.assert_allclose(measured[~unlimited], expected[~unlimited], rtol=1e-9)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_rails_of_a_resistor_load(input: str) -> None:
    """An ideal tail sends nothing: the output follows the rail of the load resistors and not that of the tail
    (standard; without gds, bulk at the source)."""
    process = without("handbook", channel_modulation=0.0)
    r = response(analysed((input, "resistor", "ideal", "differential"), process, "source"), 0.0)
    load, tail = ("supply", "ground") if input == "nmos" else ("ground", "supply")
    np.testing.assert_allclose(r.mean_gain(load), 1.0, atol=1e-9)
    np.testing.assert_allclose(r.mean_gain(tail), 0.0, atol=1e-9)
    assert np.isposinf(CATALOGUE[f"{tail}_rejection"].of(r.a)).all()
    np.testing.assert_allclose(CATALOGUE[f"{load}_rejection"].of(r.a), decibels(r.a.adm), atol=1e-9)


def test_capacitance_at_the_output_holds_it_to_ground() -> None:
    """Load capacitor, junction of the drain and half of the resistor's capacitance stand between the output and ground
    (the bulk of an n-channel pair is there): from the supply, 1 / (1 + jw R C)
    (standard; without gds and overlap)."""
    process = without("handbook", channel_modulation=0.0, overlap_capacitance=0.0)
    r = process.resistor.model_copy(update={"capacitance": 2e-3})
    a = analysed(("nmos", "resistor", "ideal", "differential"), process.model_copy(update={"resistor": r}))
    a = under(a, load_capacitance=2e-12)
    resistance, width = 20e3, r.width
    drawn, row = a.circuit.drawn, a.wiring.rows["input.n"]
    card, reverse = process.nmos, a.terminals.drain[row]
    step = 1.0 + reverse / card.junction_potential
    junction = card.junction_capacitance * drawn.drain_area[row] * step**-card.junction_grading
    junction = junction + card.sidewall_capacitance * drawn.drain_edge[row] * step**-card.sidewall_grading
    total = 2e-12 + junction + 0.5 * 2e-3 * (resistance / r.sheet_resistance * width) * width
    np.testing.assert_allclose(a.output_capacitance, total, rtol=1e-9)
    for frequency in (1e5, 1e7, 1e9):
        expected = 1.0 / (1.0 + 2j * np.pi * frequency * resistance * total)
        np.testing.assert_allclose(response(a, frequency).mean_gain("supply"), expected, rtol=1e-9)


@pytest.mark.parametrize("kind", [KINDS[3], KINDS[5], KINDS[13], KINDS[14], KINDS[-2], KINDS[-1]], ids=named)
def test_branches_are_what_injected_currents_do(kind: Kind) -> None:
    """A little more current in each bias leg of the nonlinear stage moves the output by what the branch's weight
    says."""
    a = analysed(kind)
    weights = response(a, 0.0).branches[len(a.wiring.transistors) + a.wiring.sensed.shape[1] :]
    assert len(weights) == len(a.topology.sources)
    step = 1e-13 if a.topology.delicate else 1e-10
    for row in range(len(weights)):
        ends = []
        for sign in (1.0, -1.0):
            currents = a.circuit.network.currents.copy()
            currents[row] += sign * step
            ends.append(settle(replace(a.circuit.network, currents=currents), a.point.v))
            assert ends[-1].converged.all()
        moved = a.wiring.output(ends[0].v - ends[1].v) / (2.0 * step)
        np.testing.assert_allclose(-weights[row], moved, rtol=1e-3, atol=1e-6 * np.abs(weights).max() + 1.0)


@pytest.mark.parametrize("bulk", ["rail", "source"])
@pytest.mark.parametrize("load", ["resistor", "diode", "source"])
def test_input_capacitance_of_a_symmetric_stage(load: str, bulk: str) -> None:
    """The tail stands still: cgs + cgb + cgd (1 + |Adm|), the last as Miller found it (Gray et al., ch. 7, from
    memory). A stage of small gain shows little more than the gate itself; fast enough, the drains no longer move."""
    a = analysed(("nmos", load, "single", "differential"), "generic-180", bulk, input_width=WIDTHS, bias_current=2e-6)
    gate = [getattr(a.capacitances, name)[a.wiring.rows["input.p"]] for name in ("cgs", "cgd", "cgb")]
    expected = gate[0] + gate[2] + gate[1] * (1.0 + np.abs(a.adm))
    found = CATALOGUE["input_capacitance"]
    np.testing.assert_allclose(found.of(a), expected, rtol=1e-6)
    np.testing.assert_allclose(response(a, 0.0).input_capacitance[1], expected, rtol=1e-6)
    fast = found.at("fast", {"frequency": 1e9}).of(a)
    assert (fast < found.of(a)).all()
    assert (fast > gate[0] + gate[2]).all()
    if load == "diode":
        assert (found.of(a) < 1.5 * sum(gate) + 5.0 * gate[1]).all()


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_input_capacitance_is_the_charge_of_the_gate(kind: Kind) -> None:
    """At low frequency: what each capacitance at an input takes from the source that drives it by half a volt, with the
    nodes where the gains at DC put them (the definition); of the heavier input."""
    a = analysed(kind, "generic-180", input_width=WIDTHS, bias_current=2e-6)
    at = dict(zip(a.topology.unknown, a.responses[:, 0], strict=True)) | {"in+": 0.5, "in-": -0.5}
    inputs = []
    for name in ("input.p", "input.n"):
        t, row = next(t for t in a.topology.transistors if t.name == name), a.wiring.rows[name]
        ends = {"cgs": t.source, "cgd": t.drain, "cgb": a.topology.bulk_node(t)}
        charge = sum(getattr(a.capacitances, c)[row] * (at[t.gate] - at.get(end, 0.0)) for c, end in ends.items())
        inputs.append(charge / at[t.gate])
    np.testing.assert_allclose(CATALOGUE["input_capacitance"].of(a), np.maximum(*inputs), rtol=1e-6)


@pytest.mark.parametrize("process", ["handbook", "generic-180"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_output_resistance_with_resistors(input: str, process: str) -> None:
    """Between the sides twice R parallel to ro; of one side the mean of what the half circuits of both modes show, R
    parallel to ro and R parallel to ro (1 + 2 gms Rss), derived by hand."""
    both = saturated((input, "resistor", "single", "differential"), process, 10, 8)
    gds, gms = figure(both, "input.n", "gds"), figure(both, "input.n", "gms")
    load = 1.0 / both.circuit.sizes["load.resistance"]
    apart = 1.0 / (load + gds)
    np.testing.assert_allclose(CATALOGUE["output_resistance"].of(both), 2.0 * apart, rtol=1e-7)
    one = saturated((input, "resistor", "single", "single-ended"), process, 10, 8)
    together = 1.0 / (load + gds / (1.0 + 2.0 * gms / figure(both, "tail", "gds")))
    np.testing.assert_allclose(CATALOGUE["output_resistance"].of(one), 0.5 * (apart + together), rtol=1e-7)


@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_output_resistance_of_a_mirror(input: str) -> None:
    """ro2 parallel to ro4: Gray et al., ch. 4 (from memory); the mirror's own error is left out there. The gain is that
    resistance times gm."""
    a = analysed((input, "mirror", "single"), without("handbook", body_effect=0.0), "source", input_width=WIDTHS)
    expected = 1.0 / (figure(a, "input.n", "gds") + figure(a, "load.n", "gds"))
    found = CATALOGUE["output_resistance"].of(a)
    np.testing.assert_allclose(found, expected, rtol=0.02)
    np.testing.assert_allclose(found * figure(a, "input.n", "gm"), a.adm, rtol=0.02)


@pytest.mark.parametrize(
    ("load", "output", "sides"), [("mirror", "single-ended", 1.0), ("source", "differential", 2.0)]
)
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_output_resistance_of_a_telescopic_stage(input: str, load: str, output: str, sides: float) -> None:
    """The cascoded resistances of both sides in parallel, (gm + gmb) ro^2 each: Gray et al., ch. 4 (from memory)."""
    a = saturated((input, load, "single", output, "rail", "telescopic"), "handbook", 5, 3)
    conductance = 0.0
    for part in ("input", "load"):
        strong = figure(a, f"{part}.cascode.n", "gm") + figure(a, f"{part}.cascode.n", "gmb")
        conductance = conductance + figure(a, f"{part}.n", "gds") * figure(a, f"{part}.cascode.n", "gds") / strong
    np.testing.assert_allclose(CATALOGUE["output_resistance"].of(a), len(a.topology.output) / conductance, rtol=0.02)


def test_rejection_falls_with_the_capacitance_of_the_tail() -> None:
    """With resistor loads, one pole of the tail node, by hand without gds and body effect: per side the source takes
    (G + jw C) / 2 of the tail and cgs drives it, so the common mode makes a current

        i = gm (G + jw C) / 2 / (gm + jw cgs + (G + jw C) / 2)

    and the output's own pole is that of the gain too. Three decibels are lost where the capacitance of a large junction
    takes as much as the tail resistor, at 1 / (2 pi Rss C) (standard)."""
    junction = {"junction_capacitance": 3e-2, "overlap_capacitance": 0.0}
    process = without("handbook", channel_modulation=0.0, body_effect=0.0, **junction)
    resistance = np.array([9e3, 20e3, 60e3])
    a = analysed(("nmos", "resistor", "resistor", "differential"), process, tail_resistance=resistance)
    assert (a.room_at_rest > 0.0).all()
    gm, cgs = figure(a, "input.n", "gm"), a.capacitances.cgs[a.wiring.rows["input.n"]]
    tail = a.wiring.index["tail"]
    capacitance = a.capacitance_matrix[tail, tail] - 2.0 * cgs
    assert (a.capacitances.cgd[a.wiring.pair] == 0.0).all()
    for frequency in (1e5, 1e7, 3e8):
        jw = 2j * np.pi * frequency
        shunt = 0.5 * (1.0 / resistance + jw * capacitance)
        ratio = (gm + jw * cgs + shunt) / shunt
        found = CATALOGUE["cmrr"].at("fast", {"frequency": frequency}).of(a)
        np.testing.assert_allclose(found, decibels(np.abs(ratio)), atol=1e-6)
    pole = 1.0 / (2.0 * np.pi * resistance * capacitance)
    rest = CATALOGUE["cmrr"].of(a)
    at_pole = [CATALOGUE["cmrr"].at("x", {"frequency": float(f)}).of(a)[k] for k, f in enumerate(pole)]
    np.testing.assert_allclose(rest - at_pole, 10.0 * np.log10(2.0), atol=0.3)


@pytest.mark.parametrize(
    "kind", [k for k in KINDS if k[1] == "resistor" and k[2] == "ideal" and k[3] == "differential"], ids=named
)
def test_an_ideal_tail_rejects_less_at_frequency(kind: Kind) -> None:
    """Unlimited at DC; the capacitance of the tail node ends that, by a decade in rejection a decade in frequency
    (standard)."""
    a = analysed(kind, without("handbook", overlap_capacitance=0.0))
    measure = CATALOGUE["cmrr"]
    assert np.isposinf(measure.of(a)).all()
    found = [measure.at("x", {"frequency": f}).of(a)[0] for f in (1e3, 1e4, 1e5)]
    np.testing.assert_allclose(-np.diff(found), 20.0, atol=0.1)


@pytest.mark.parametrize("load", ["resistor", "source"])
@pytest.mark.parametrize("input", ["nmos", "pmos"])
def test_phase_of_a_single_pole(input: str, load: str) -> None:
    """-atan(sqrt(Adm^2 - 1)) at unity gain of a single dominant pole, about -90 degrees for a high gain (standard)."""
    a = under(analysed((input, load, "ideal", "differential"), input_width=WIDTHS), load_capacitance=3e-9)
    expected = -np.degrees(np.arctan(np.sqrt(a.adm**2 - 1.0)))
    np.testing.assert_allclose(CATALOGUE["phase"].of(a), expected, atol=0.2)
    if load == "source":
        assert (np.abs(CATALOGUE["phase"].of(a) + 90.0) < 1.0).all()


def test_phase_with_a_mirror_falls_behind() -> None:
    """The pole of the mirror, with a zero at twice its frequency, makes the lag larger: Gray et al., ch. 7 (from
    memory): atan(w/wm) - atan(w/2wm) with wm = gm3 / (capacitance at its gate)."""
    process = without("handbook", body_effect=0.0, overlap_capacitance=0.0)
    a = under(analysed(("nmos", "mirror", "ideal"), process, "source", input_width=WIDTHS), load_capacitance=10e-12)
    w = 2.0 * np.pi * CATALOGUE["unity_gain_frequency"].of(a)
    node = a.wiring.index["left"]
    mirror = w * a.capacitance_matrix[node, node] / (figure(a, "load.p", "gm") + figure(a, "load.p", "gds"))
    single = -np.degrees(np.arctan(np.sqrt(a.adm**2 - 1.0)))
    lag = np.degrees(np.arctan(mirror) - np.arctan(0.5 * mirror))
    assert (lag > 3.0).all()
    np.testing.assert_allclose(CATALOGUE["phase"].of(a), single - lag, atol=0.1 * lag.max())
