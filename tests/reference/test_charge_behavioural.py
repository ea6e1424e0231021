"""The charge law against a circuit simulator that solves the published formula, written as behavioural sources.

Source: Enz, Krummenacher and Vittoz, "An analytical MOS transistor model valid in all regions of operation and
dedicated to low-voltage and low-current applications", Analog Integrated Circuits and Signal Processing 8, 1995, with
the three second-order effects that the package states for its law. The text below is written from the formulas; the
simulator derives its own slopes from it, so operating point and gains have to agree to 0.1 %. Every kind is held in one
process; the short channels of the other one matter to the law, not to the kind, and are tried on fewer.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from optisize.process.card import Process
from optisize.process.law import Array
from tests.reference import spice
from tests.reference.bench import Bench, assert_same, at_rest, drive, simulated
from tests.reference.samples import DEGENERATED, EVERY_KIND, SOURCE_TIED, Kind, sized

SIZINGS = 12
TRIODE_SIZINGS = 8
SAME = 1e-3
ROUNDED = 1e-14  # of the differential gain, what two sums of terms that cancel may differ by
MIRRORED = [kind for kind in EVERY_KIND if kind.tail == "single" and kind.form == "simple"]
CASES = [(kind, "generic-180") for kind in EVERY_KIND + SOURCE_TIED + DEGENERATED]
CASES += [(kind, "generic-65") for kind in MIRRORED + SOURCE_TIED]
TRIODE_CASES = [(kind, process) for kind, process in CASES if kind in MIRRORED + SOURCE_TIED + DEGENERATED]
UT = 1.380649e-23 * 300.15 / 1.602176634e-19  # V; Boltzmann constant and elementary charge of CODATA 2018


def behavioural(t: spice.Transistor, process: Process) -> list[str]:
    """Return sources that follow the published formulas: one node each for pinch-off, slope factor and interpolation.

    Terminal voltages are counted from the bulk and turned for a p-channel transistor, whose current runs from source
    to drain.
    """
    card = process.nmos if t.channel == "n" else process.pmos
    n = spice.number

    def from_bulk(terminal: str) -> str:
        ends = (terminal, t.bulk) if t.channel == "n" else (t.bulk, terminal)
        return "(" + "-".join(f"v({end})" if end != "0" else "0" for end in ends) + ")"

    vg, vd, vs = from_bulk(t.gate), from_bulk(t.drain), from_bulk(t.source)
    vp, slope, uf, ur = (f"{what}_{t.name}" for what in ("vp", "n", "uf", "ur"))
    gamma, phi, d = card.body_effect, card.surface_potential, 4.0 * UT
    beta = card.current_factor * t.width / t.length
    root_phi = phi**0.5
    # The floor only keeps the simulator's iterations away from roots of negative numbers.
    root = f"sqrt(max({vg}-{n(card.threshold)}+{n((root_phi + gamma / 2) ** 2)},{n(gamma**2)}))"
    specific = f"2*v({slope})*{n(beta * UT**2)}"
    interpolated = f"(v({uf})*v({uf})-v({ur})*v({ur}))"
    modulation = f"(1+(sqrt(({vd}-{vs})*({vd}-{vs})+{n(d**2)})-{n(d)})/{n(card.early_voltage * t.length)})"
    field = f"(1+{n(card.vertical_field)}*(v({vp})+sqrt(v({vp})*v({vp})+{n(d**2)}))/2)"
    lateral = f"{n(2.0 * UT / (card.critical_field * t.length))}*(v({uf})-v({ur}))"
    drag = f"sqrt(1+({lateral})*({lateral}))"
    ends = (t.drain, t.source) if t.channel == "n" else (t.source, t.drain)
    return [
        f"b_{vp} {vp} 0 v={vg}-{n(card.threshold)}-{n(gamma)}*({root}-{n(root_phi)}-{n(gamma / 2)})",
        f"b_{slope} {slope} 0 v=1/(1-{n(gamma)}/(2*{root}))",
        f"b_{uf} {uf} 0 v=ln(1+exp((v({vp})-{vs})/{n(2.0 * UT)}))",
        f"b_{ur} {ur} 0 v=ln(1+exp((v({vp})-{vd})/{n(2.0 * UT)}))",
        f"b_{t.name} {ends[0]} {ends[1]} i={specific}*{interpolated}*{modulation}/({field}*{drag})",
    ]


def metered(t: spice.Transistor, process: Process) -> list[str]:
    """Return the behavioural transistor with its current read by a source without voltage at its drain."""
    inner = spice.Transistor(**{**t.__dict__, "drain": f"d_{t.name}"})
    return [f"v_meter_{t.name} {t.drain} {inner.drain} 0", *behavioural(inner, process)]


def currents(bench: Bench) -> Array:
    """Return the magnitude of every drain current by the simulator, (T, N)."""
    names = [
        [f"i(v_meter_{spice.part(t.name, k)})" for k in range(bench.a.circuit.designs)]
        for t in bench.topology.transistors
    ]
    return np.abs([bench.plots["op"].stack(row)[:, 0] for row in names])


@pytest.fixture(scope="module", params=CASES, ids=lambda case: f"{case[0]}-{case[1]}")
def bench(request: pytest.FixtureRequest, ngspice: str, tmp_path_factory: pytest.TempPathFactory) -> Bench:
    kind, process = request.param
    a = sized(kind, process, SIZINGS)
    at_dc = "ac lin 1 1e-9 1e-9"
    analyses = {
        "op": ["op"],
        "rest": [*drive(a, 0.5, -0.5), at_dc],
        "common": [*drive(a, 1.0, 1.0), at_dc],
    }
    return simulated(ngspice, tmp_path_factory.mktemp("charge"), a, metered, at_rest(a), analyses)


def test_node_voltages(bench: Bench) -> None:
    for node in bench.topology.unknown:
        assert_same(bench.a.point.v[bench.a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)


def test_currents(bench: Bench) -> None:
    assert_same(bench.a.drain.id, currents(bench), SAME)


def test_differential_gain(bench: Bench) -> None:
    assert_same(bench.a.adm, bench.output("rest")[:, 0].real, SAME)


def test_common_mode_gain(bench: Bench) -> None:
    """With an ideal tail or under control the simulator reads next to nothing, and the kernel exactly nothing."""
    reference = bench.mean("common")[:, 0].real
    if bench.topology.tail == "ideal" or bench.topology.controls:
        assert (bench.a.acm == 0.0).all()
        assert np.abs(reference).max() < 1e-9
    else:
        assert_same(bench.a.acm, reference, SAME, ROUNDED * np.abs(bench.a.adm))


@pytest.mark.parametrize(("kind", "process"), TRIODE_CASES, ids=str)
def test_triode(kind: Kind, process: str, ngspice: str, tmp_path: Path) -> None:
    """Voltages and currents where a transistor that ought to be saturated is not."""
    a = sized(kind, process, TRIODE_SIZINGS, saturated=False)
    bench = simulated(ngspice, tmp_path, a, metered, at_rest(a), {"op": ["op"]})
    for node in kind.topology.unknown:
        assert_same(a.point.v[a.wiring.index[node]], bench.voltage("op", node)[:, 0], SAME)
    assert_same(a.drain.id, currents(bench), SAME)
