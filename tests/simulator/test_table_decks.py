"""Decks that name a designer's library: of level-1 transistors here, so that the square law says what has to come."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.errors import InputError
from optisize.process.card import Process, load_process
from optisize.process.library import Library
from optisize.simulator.deck import benched, write_deck
from optisize.simulator.devices import DEVICES, OXIDE_PERMITTIVITY, TableDevices
from optisize.simulator.ngspice import run
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind
from tests.simulator.decks import Simulated, differences, problem_of, sizing

KINDS = EVERY_KIND + SOURCE_TIED + DEGENERATED
NAMES = ("gain", "cmrr", "supply_current", "headroom", "output_swing", "bandwidth", "input.p.id", "tail.vdsat")
SHAPE = "w=1 l=1 ad=0 as=0 pd=0 ps=0 nf=1 m=1"


def transistor(process: Process, channel: str) -> str:
    """Return a subcircuit whose lengths are in micrometres, as many libraries have it."""
    card = process.nmos if channel == "n" else process.pmos
    sign = "" if channel == "n" else "-"
    drawn = "w={w*1u} l={l*1u} ad={ad*1p} as={as*1p} pd={pd*1u} ps={ps*1u} m={m}"
    modulation = f"{{{card.channel_modulation}/(l*1u)}}"  # type: ignore[union-attr]
    return f"""\
.subckt {channel}ch d g s b {SHAPE}
m0 d g s b inner {drawn}
.model inner {channel}mos level=1 vto={sign}{card.threshold} kp={card.current_factor} gamma={card.body_effect}
+ phi={card.surface_potential} lambda={modulation} tox={OXIDE_PERMITTIVITY / card.oxide_capacitance}
+ cgso={card.overlap_capacitance} cgdo={card.overlap_capacitance} cj={card.junction_capacitance}
+ cjsw={card.sidewall_capacitance} mj={card.junction_grading} mjsw={card.sidewall_grading}
+ pb={card.junction_potential} is=1e-60
.ends
"""


@pytest.fixture
def library(tmp_path: Path) -> Library:
    """A library of two sections."""
    process = load_process("handbook")
    path = tmp_path / "all.lib"
    parts = "".join(transistor(process, c) for c in "np")
    path.write_text(f"* models\n.lib tt\n{parts}.endl\n.lib ff\n.endl\n", encoding="ascii")
    devices = {c: {"name": f"{c[0]}ch", "inner": "m0", "gate_edge": False} for c in ("nmos", "pmos")}
    return Library.model_validate({"path": path, "sections": {"typical": "tt", "fast": "ff"}, "unit": 1e-6, **devices})


def problem_with(kind: Kind, library: Library | None):  # type: ignore[no-untyped-def]
    from dataclasses import replace

    problem = problem_of(kind, "handbook")
    return replace(problem, process=problem.process.model_copy(update={"library": library}))


@pytest.mark.parametrize(
    "kind", [Kind("nmos", "mirror", "single"), Kind("pmos", "source", "single", "differential")], ids=str
)
def test_fingers_and_units_are_devices_of_the_library(
    kind: Kind, library: Library, ngspice: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(DEVICES, "square", TableDevices)
    problem = problem_with(kind, library)
    deck = write_deck(problem, sizing(kind, "handbook"), f"a {kind}", benched(problem, NAMES))
    s = Simulated(deck, run(Path(ngspice), tmp_path, deck.text))
    assert s.warnings == []
    assert f'.lib "{library.path}" tt' in deck.text
    for name, (predicted, value) in differences(s).items():
        assert value == pytest.approx(predicted, rel=2e-3, abs=1e-4), name
    fingers = np.max(problem.circuit(sizing(kind, "handbook")).drawn.fingers)
    assert fingers > 1.0
    assert " nf=1 m=" in deck.text


def test_a_library_that_a_deck_cannot_name_is_refused(library: Library) -> None:
    kind = Kind("nmos", "mirror", "single")
    for path in ('a"b.lib', "a'b.lib", "a$(b).lib", "a\nb.lib", "a;b.lib", "a b.lib"):
        problem = problem_with(kind, library.model_copy(update={"path": Path(path)}))
        with pytest.raises(InputError, match=r"library\.path"):
            TableDevices(problem.circuit(sizing(kind, "handbook")), False)
    with pytest.raises(InputError, match="names no SPICE library"):
        TableDevices(problem_with(kind, None).circuit(sizing(kind, "handbook")), False)


@pytest.mark.parametrize("kind", KINDS[2::14], ids=str)
def test_decks_with_a_foundrys_own_models(kind: Kind, open_process: Path, ngspice: str, tmp_path: Path) -> None:
    """Full models run without a warning, and agree as the checks of the table law say."""
    names = ["gain", "supply_rejection", "supply_current", "headroom", "output_swing", "output_resistance"]
    problem = problem_of(kind, str(open_process))
    deck = write_deck(problem, sizing(kind, str(open_process)), f"a {kind}", benched(problem, names))
    s = Simulated(deck, run(Path(ngspice), tmp_path, deck.text))
    assert s.warnings == []
    assert len(s.values) == len(names)
    for name, bound in (("gain", 0.2), ("headroom", 5e-3), ("output_swing", 10e-3)):
        predicted, value = differences(s)[name]
        assert value == pytest.approx(predicted, abs=bound), name
    assert s.values["supply_current"] == pytest.approx(deck.predicted["supply_current"], rel=0.01)
