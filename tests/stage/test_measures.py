"""The catalogue of measures: complete, findable, and consistent with itself. Common practice, no source."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.process.card import load_process
from optisize.stage.analysis import Analysis
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.measures import CATALOGUE, FIGURES, Parameter, decibels, find
from tests.stage.stages import KINDS, Kind, analysed, by_hand, middle, named, stage

WITH_PARAMETERS = {name: measure for name, measure in CATALOGUE.items() if measure.parameters}
OTHER = {"frequency": 1e8, "band": (10.0, 3e4), "sigmas": 2.0, "departure": 0.02, "amplitude": 2e-3}


@pytest.mark.parametrize("name", [*CATALOGUE, *FIGURES])
def test_every_measure_says_what_it_is(name: str) -> None:
    measure = (CATALOGUE | FIGURES)[name]
    assert measure.name == name
    assert len(measure.definition) > 15
    assert measure.definition.endswith(".")
    assert "\n" not in measure.definition
    assert measure.source
    assert measure.better in ("max", "min")
    assert measure.step > 0.0


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_one_number_a_design(kind: Kind) -> None:
    """All but what a definition says is undefined: the phase without gain, distortion of a sine that clips."""
    a = analysed(kind, input_width=np.array([80e-6, 100e-6, 120e-6]))
    undefined = {"phase": np.abs(a.adm) <= 1.0, "distortion": np.abs(a.adm) * 1e-3 > 3.3}
    for name, measure in CATALOGUE.items():
        values = measure.of(a)
        assert values.shape == (3,), name
        np.testing.assert_array_equal(np.isnan(values), undefined.get(name, False), err_msg=name)
    for name, figure in FIGURES.items():
        assert figure.function(a).shape == (len(a.topology.transistors), 3), name
        assert (figure.function(a) > 0.0).all(), name


def test_figure_of_one_transistor() -> None:
    a = analysed(("pmos", "mirror", "single", "single-ended"))
    vov = find("input.p.vgs", a.topology).of(a) - find("input.n.vgs", a.topology).of(a)
    np.testing.assert_allclose(vov, 0.0, atol=1e-9)
    assert find("load.n.gm", a.topology).of(a) == a.drain.gm[a.wiring.rows["load.n"]]
    assert find("gain", a.topology) is CATALOGUE["gain"]


@pytest.mark.parametrize(("name", "hint"), [("gian", "gain"), ("load.m.gm", "load."), ("load.p.vth", ""), ("", "")])
def test_unknown_measure(name: str, hint: str) -> None:
    with pytest.raises(InputError) as caught:
        find(name, stage(("nmos", "mirror", "single")))
    assert f'"{name}" is not a measure' in str(caught.value)
    assert not hint or f'did you mean "{hint}' in str(caught.value)


def test_decibels() -> None:
    np.testing.assert_allclose(decibels(np.array([1.0, -10.0, 0.1])), [0.0, 20.0, -20.0])
    assert decibels(np.array([np.inf]))[0] == np.inf
    assert decibels(np.array([0.0]))[0] == -np.inf


@pytest.mark.parametrize("kind", KINDS, ids=named)
def test_measures_agree_with_each_other(kind: Kind) -> None:
    a = analysed(kind, input_width=np.array([60e-6, 100e-6, 150e-6]))
    value = {name: measure.of(a) for name, measure in CATALOGUE.items()}
    np.testing.assert_allclose(value["power"], 3.3 * value["supply_current"])
    finite = np.isfinite(value["cmrr"])
    assert (finite == ((kind[2] != "ideal") & (kind[1] != "source"))).all()
    rejected = value["gain"] - decibels(value["common_mode_gain"])
    np.testing.assert_allclose(value["cmrr"][finite], rejected[finite])
    above = value["gain"] > 0.0
    assert (value["unity_gain_frequency"] > value["bandwidth"])[above].all()
    assert (value["unity_gain_frequency"] == 0.0)[~above].all()
    assert (value["headroom"] > 0.0).all()
    reach = 2.0 * middle("nmos") if kind[3] == "differential" else middle("nmos")
    assert (value["output_swing"] < 2.0 * reach).all()
    common = a.circuit.conditions.middle
    assert (value["input_range_low"] < common).all()
    assert (value["input_range_high"] > common).all()
    if kind[3] == "single-ended":
        assert (value["cmrr_mismatch"] < value["cmrr"]).all()
    np.testing.assert_allclose(value["offset"], np.abs(value["offset_systematic"]) + 3.0 * value["offset_sigma"])


def test_parameters_are_complete() -> None:
    """Those that are expected, each default inside its bounds, and named as the function's own arguments."""
    assert {
        "cmrr": ("frequency",),
        "cmrr_mismatch": ("sigmas",),
        "input_noise": ("frequency",),
        "input_noise_total": ("band",),
        "linear_range": ("departure",),
        "distortion": ("amplitude",),
    }.items() <= {name: tuple(p.name for p in m.parameters) for name, m in WITH_PARAMETERS.items()}.items()
    for measure in WITH_PARAMETERS.values():
        for p in measure.parameters:
            assert isinstance(p, Parameter)
            assert (np.atleast_1d(p.default) >= p.low).all()
            assert (np.atleast_1d(p.default) <= p.high).all()
            assert p.meaning
        assert measure.taken_at == {p.name: p.default for p in measure.parameters}


@pytest.mark.parametrize("name", list(WITH_PARAMETERS))
def test_measures_take_their_parameters(name: str) -> None:
    """Without a setting the default holds; with one, the function gets it; the catalogue's own entry stays as it is."""
    measure = CATALOGUE[name]
    settings = {p.name: OTHER[p.name] for p in measure.parameters}
    a = analysed(("nmos", "resistor", "single", "single-ended"), input_width=np.array([80e-6, 120e-6]))
    mine = measure.at("mine", settings)
    assert (mine.name, mine.unit, mine.definition) == ("mine", measure.unit, measure.definition)
    assert mine.taken_at == settings
    assert measure.settings == ()
    np.testing.assert_array_equal(mine.of(a), measure.function(a, **settings))
    np.testing.assert_array_equal(measure.of(a), measure.function(a))
    np.testing.assert_array_equal(measure.of(a), measure.at("same", measure.taken_at).of(a))
    assert (mine.of(a) != measure.of(a)).all()


def test_settings_leave_the_other_defaults() -> None:
    """A measure found under a problem's own name comes before the catalogue's."""
    a = analysed(("nmos", "resistor", "single", "single-ended"))
    own = {"gain": CATALOGUE["cmrr"].at("gain", {"frequency": 1e6})}
    assert find("gain", a.topology, own) is own["gain"]
    assert find("cmrr", a.topology, own) is CATALOGUE["cmrr"]
    assert CATALOGUE["cmrr"].at("here", {}).taken_at == {"frequency": 0.0}


def test_sigmas_are_counted() -> None:
    """Three of them, or as many as are asked: offset and rejection by mismatch (their definitions)."""
    a = analysed(("nmos", "mirror", "single", "single-ended"))
    sigma, common = CATALOGUE["offset_sigma"].of(a), CATALOGUE["common_mode_gain_sigma"].of(a)
    for sigmas in (0.0, 1.0, 4.5):
        np.testing.assert_allclose(CATALOGUE["offset"].at("x", {"sigmas": sigmas}).of(a), sigmas * sigma)
        found = CATALOGUE["cmrr_mismatch"].at("x", {"sigmas": sigmas}).of(a)
        np.testing.assert_allclose(found, decibels(a.adm) - decibels(np.abs(a.acm) + sigmas * common))


def test_headroom_is_the_worst_of_the_range() -> None:
    """A wider common-mode range never has more headroom; a single point is that point's own."""
    topology, process = stage(("nmos", "resistor", "single", "differential")), load_process("generic-180")
    sizes = by_hand(topology, tail_current=2e-5, bias_current=5e-6, load_resistance=25e3)
    rooms = []
    for half in (0.0, 0.05, 0.1, 0.2):
        conditions = Conditions(1.8, (0.95 - half, 0.95 + half), 1e-12)
        a = Analysis(size_circuit(topology, process, conditions, sizes))
        rooms.append(float(CATALOGUE["headroom"].of(a)[0]))
    assert rooms == sorted(rooms, reverse=True)
    assert rooms[-1] < rooms[0]
    at_rest = Analysis(size_circuit(topology, process, Conditions(1.8, (0.95, 0.95), 1e-12), sizes)).room_at_rest
    assert rooms[0] == pytest.approx(float(at_rest[0]))


def test_no_swing_without_saturation() -> None:
    """A stage whose load leaves no room for the pair swings by nothing and has negative headroom."""
    a = analysed(("nmos", "resistor", "single", "differential"), load_resistance=np.array([20e3, 60e3]))
    assert (CATALOGUE["headroom"].of(a) > 0.0).tolist() == [True, False]
    assert (CATALOGUE["output_swing"].of(a) > 0.0).tolist() == [True, False]


def test_temperature_and_corner_reach_the_stage() -> None:
    """Hotter and slower: less transconductance from the same current, hence less gain; resistors follow too."""
    topology, process = stage(("nmos", "resistor", "ideal", "differential")), load_process("generic-180")
    sizes = by_hand(topology, tail_current=1e-5, load_resistance=50e3)

    def gain(temperature: float, corner: str) -> float:
        conditions = Conditions(1.8, (1.0, 1.0), 1e-12, temperature, corner)
        a = Analysis(size_circuit(topology, process, conditions, sizes))
        assert a.converged.all()
        return float(np.abs(a.adm)[0])

    assert gain(300.15 + 80.0, "typical") < gain(300.15, "typical") < gain(300.15 - 60.0, "typical")
    assert gain(300.15, "fast") < gain(300.15, "typical") < gain(300.15, "slow")  # resistors of 0.82 and 1.18
