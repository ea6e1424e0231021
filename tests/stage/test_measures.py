"""The catalogue of measures: complete, findable, and consistent with itself. Common practice, no source."""

from __future__ import annotations

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.process.card import load_process
from optisize.stage.analysis import Analysis
from optisize.stage.assembly import build
from optisize.stage.circuit import Conditions, size_circuit
from optisize.stage.measures import CATALOGUE, FIGURES, decibels, find
from tests.stage.stages import KINDS, analysed, by_hand, middle


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


@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_one_number_a_design(kind: tuple[str, ...]) -> None:
    a = analysed(kind, input_width=np.array([80e-6, 100e-6, 120e-6]))
    for name, measure in CATALOGUE.items():
        values = measure.function(a)
        assert values.shape == (3,), name
        assert not np.isnan(values).any(), name
    for name, figure in FIGURES.items():
        assert figure.function(a).shape == (len(a.topology.transistors), 3), name
        assert (figure.function(a) > 0.0).all(), name


def test_figure_of_one_transistor() -> None:
    a = analysed(("pmos", "mirror", "single", "single-ended"))
    vov = find("input.p.vgs", a.topology).function(a) - find("input.n.vgs", a.topology).function(a)
    np.testing.assert_allclose(vov, 0.0, atol=1e-9)
    assert find("load.n.gm", a.topology).function(a) == a.drain.gm[a.wiring.rows["load.n"]]
    assert find("gain", a.topology) is CATALOGUE["gain"]


@pytest.mark.parametrize(("name", "hint"), [("gian", "gain"), ("load.m.gm", "load."), ("load.p.vth", ""), ("", "")])
def test_unknown_measure(name: str, hint: str) -> None:
    with pytest.raises(InputError) as caught:
        find(name, build("nmos", "mirror", "single"))
    assert f'"{name}" is not a measure' in str(caught.value)
    assert not hint or f'did you mean "{hint}' in str(caught.value)


def test_decibels() -> None:
    np.testing.assert_allclose(decibels(np.array([1.0, -10.0, 0.1])), [0.0, 20.0, -20.0])
    assert decibels(np.array([np.inf]))[0] == np.inf
    assert decibels(np.array([0.0]))[0] == -np.inf


@pytest.mark.parametrize("kind", KINDS, ids="-".join)
def test_measures_agree_with_each_other(kind: tuple[str, ...]) -> None:
    a = analysed(kind, input_width=np.array([60e-6, 100e-6, 150e-6]))
    value = {name: measure.function(a) for name, measure in CATALOGUE.items()}
    np.testing.assert_allclose(value["power"], 3.3 * value["supply_current"])
    if kind[2] == "single":
        np.testing.assert_allclose(value["cmrr"], value["gain"] - decibels(value["common_mode_gain"]))
    assert (value["unity_gain_frequency"] > value["bandwidth"]).all()
    assert (value["headroom"] > 0.0).all()
    reach = 2.0 * middle("nmos") if kind[3] == "differential" else middle("nmos")
    assert (value["output_swing"] < 2.0 * reach).all()


def test_headroom_is_the_worst_of_the_range() -> None:
    """A wider common-mode range never has more headroom; a single point is that point's own."""
    topology, process = build("nmos", "resistor", "single", "differential"), load_process("generic-180")
    sizes = by_hand(topology, tail_current=2e-5, bias_current=5e-6, load_resistance=25e3)
    rooms = []
    for half in (0.0, 0.05, 0.1, 0.2):
        conditions = Conditions(1.8, (0.95 - half, 0.95 + half), 1e-12)
        a = Analysis(size_circuit(topology, process, conditions, sizes))
        rooms.append(float(CATALOGUE["headroom"].function(a)[0]))
    assert rooms == sorted(rooms, reverse=True)
    assert rooms[-1] < rooms[0]
    at_rest = Analysis(size_circuit(topology, process, Conditions(1.8, (0.95, 0.95), 1e-12), sizes)).room_at_rest
    assert rooms[0] == pytest.approx(float(at_rest[0]))


def test_no_swing_without_saturation() -> None:
    """A stage whose load leaves no room for the pair swings by nothing and has negative headroom."""
    a = analysed(("nmos", "resistor", "single", "differential"), load_resistance=np.array([20e3, 60e3]))
    assert (CATALOGUE["headroom"].function(a) > 0.0).tolist() == [True, False]
    assert (CATALOGUE["output_swing"].function(a) > 0.0).tolist() == [True, False]


def test_temperature_and_corner_reach_the_stage() -> None:
    """Hotter and slower: less transconductance from the same current, hence less gain; resistors follow too."""
    topology, process = build("nmos", "resistor", "ideal", "differential"), load_process("generic-180")
    sizes = by_hand(topology, tail_current=1e-5, load_resistance=50e3)

    def gain(temperature: float, corner: str) -> float:
        conditions = Conditions(1.8, (1.0, 1.0), 1e-12, temperature, corner)
        a = Analysis(size_circuit(topology, process, conditions, sizes))
        assert a.converged.all()
        return float(np.abs(a.adm)[0])

    assert gain(300.15 + 80.0, "typical") < gain(300.15, "typical") < gain(300.15 - 60.0, "typical")
    assert gain(300.15, "fast") < gain(300.15, "typical") < gain(300.15, "slow")  # resistors of 0.82 and 1.18
