"""A deck of one sized design: the stage as a subcircuit, and a bench that prints a line for each measure.

The same text is for a designer to read and go on with, and what `resimulate` runs.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import optisize
from optisize.errors import InputError, SimulationFailed
from optisize.files import write_directory
from optisize.problem.evaluate import Problem, measured
from optisize.problem.own_measures import label
from optisize.process.law import Array
from optisize.quantities import ZERO_CELSIUS, write
from optisize.simulator.bench import CURVE, Bench, bench_of, no_bench
from optisize.simulator.devices import DEVICES, Devices, first_of_each
from optisize.simulator.netlist import HELD, LOOP, STAGE, Netlist, comment, joined, number
from optisize.simulator.ngspice import last_lines
from optisize.simulator.site import EXACT, Site
from optisize.stage.analysis import Analysis
from optisize.stage.elements import REFERENCE
from optisize.stage.measures import CATALOGUE, Measure

CAUTION = (
    "A starting point for your simulator, not a sign-off: layout, reliability and ESD need the foundry's models, the "
    "applicable rules and, where the law asks for one, a licensed engineer's judgement."
)
TOLERANCES = f"{EXACT} itl1=500 itl2=500"
ONE_THREAD = "set num_threads=1"  # some models take more, which wait for each other longer than they work
_WORDS = {"unlimited": np.inf, "-unlimited": -np.inf, "undefined": np.nan}


@dataclass(frozen=True)
class Deck:
    """A deck and what it is to give.

    Attributes:
        text: the deck.
        measures: those that it has a bench for.
        predicted: their values by the package, by name.
        left_out: other measures that were asked for, and why they have no bench.
    """

    text: str
    measures: tuple[Measure, ...]
    predicted: Mapping[str, float]
    left_out: Mapping[str, str]

    def read(self, said: str) -> dict[str, float]:
        """Return the simulated measures by name from what the simulator says.

        Raises SimulationFailed, with the simulator's last lines, when one is missing.
        """
        found: dict[str, float] = {}
        for m in self.measures:
            unit = f" {re.escape(m.unit)}" if m.unit else ""
            lines = re.findall(rf"^{re.escape(m.name)} = (\S+){unit}$", said, re.MULTILINE)
            if not lines or not _is_figure(lines[-1]):
                raise SimulationFailed(f"the simulator gave no {m.name}{last_lines(said)}")
            found[m.name] = _WORDS[lines[-1]] if lines[-1] in _WORDS else float(lines[-1])
        return found


def _is_figure(text: str) -> bool:
    try:
        return text in _WORDS or bool(np.isfinite(float(text)))
    except ValueError:
        return False


def benched(problem: Problem, names: Iterable[str] | None = None) -> list[Measure]:
    """Return the measures that a deck is asked for: those of goals and limits, or all of the catalogue by ``all``.

    Raises InputError for a name that the stage does not have.
    """
    wanted = list(problem.needed if names is None else names)
    if "all" in wanted:
        wanted = [*problem.needed, *problem.own_measures, *CATALOGUE]
    return [problem.find(name) for name in dict.fromkeys(wanted)]


def write_deck(problem: Problem, sizes: Mapping[str, Array], name: str, measures: Sequence[Measure]) -> Deck:
    """Write the deck of one design.

    Args:
        problem: conditions and process.
        sizes: every size of the stage, each (1,).
        name: what to call the design.
        measures: what the bench shall give.

    Raises InputError when the sizing has no operating point.
    """
    a = Analysis(problem.circuit(sizes))
    if not a.converged[0]:
        raise InputError(f"{name}: {a.why_unsolved}")
    reasons = {m.name: no_bench(m, a) for m in measures}
    shown = [m for m in measures if not reasons[m.name]]
    predicted = {m.name: float(v[0]) for m, v in zip(shown, measured(a, shown), strict=True)}
    left_out = {name: why for name, why in reasons.items() if why}
    benches = [bench_of(m) for m in shown]
    needs = frozenset(need for b in benches for need in b.needs)
    netlist = Netlist(a.circuit)
    devices = DEVICES[problem.process.law](a.circuit, "noise" in needs)
    site = Site(a, netlist, devices)
    lines = joined(
        [
            _header(problem, name, devices, left_out),
            devices.cards(site.transistors),
            _subcircuit(netlist, devices, site),
            _test_bench(problem, site, needs),
            _control(site, list(zip(shown, benches, strict=True)), predicted),
        ]
    )
    return Deck("\n".join([*lines, "", ".end"]) + "\n", tuple(shown), predicted, left_out)


def write_decks(
    problem: Problem,
    sizes: Mapping[str, Array],
    designs: Sequence[int],
    measures: Sequence[Measure],
    directory: Path,
    source: str,
) -> int:
    """Write a deck for each of N designs into a new directory, whole or not at all; return how many.

    Args:
        problem, measures: as for `write_deck`.
        sizes: every size of the stage, each (N,).
        designs: their numbers.
        directory: the new directory; a deck becomes ``design-7.sp``.
        source: what the designs are of.

    Raises OptisizeError when it cannot be written.
    """
    decks = {
        f"design-{number}.sp": write_deck(
            problem, {k: v[i : i + 1] for k, v in sizes.items()}, f"design {number} of {source}", measures
        ).text
        for i, number in enumerate(designs)
    }
    write_directory(directory, decks)
    return len(decks)


def _header(problem: Problem, name: str, devices: Devices, left_out: Mapping[str, str]) -> list[str]:
    c, process = problem.conditions, problem.process
    low, high = (write(v, "V") for v in c.common_mode)
    told = [
        f"{problem.title}: {name}",
        f"Written by optisize {optisize.__version__}. {CAUTION}",
        f"problem: {problem.source or 'given'}, sha256 {problem.hashes['problem']}",
        f"process: {problem.process_name} ({process.title}), sha256 {problem.hashes['process']}",
        f"conditions: supply {write(c.supply, 'V')}, common mode {low if low == high else f'{low} to {high}'}, "
        f"load {write(c.load_capacitance, 'F')}, {write(c.temperature - ZERO_CELSIUS, '')} degC, corner {c.corner}",
        *devices.notes(),
        *(f"not simulated: {measure}, {why}" for measure, why in left_out.items()),
        "Run it with ngspice -b FILE; it prints a line for each measure, with its unit.",
    ]
    return [line for text in told for line in comment(text)]


def _subcircuit(netlist: Netlist, devices: Devices, site: Site) -> list[str]:
    lines = comment("the sized stage; widths and lengths are drawn, of one unit; bias currents are ideal copies")
    for d in first_of_each(site.transistors, "group"):
        lines += comment(f"  {d.group}: {d.fingers} finger{'s' * (d.fingers > 1)} of {number(d.width / d.fingers)}m")
    lines.append(f".subckt {STAGE} {' '.join(netlist.ports)}")
    for d in site.transistors:
        lines += devices.lines(d)
    return [*lines, *netlist.passives(), f".ends {STAGE}"]


def _test_bench(problem: Problem, s: Site, needs: frozenset[str]) -> list[str]:
    c, netlist = problem.conditions, s.netlist
    lines = [
        *comment("the bench: supply, ground, load, and a differential input d about a common mode cm"),
        f"X{STAGE} {' '.join(netlist.ports)} {STAGE}",
        f"Vsupply vdd 0 dc {number(c.supply)} ac 0",
        "Vground vss 0 dc 0 ac 0",
        *(f"Cload_{x} {x} vss {number(c.load_capacitance)}" for x in s.ends if c.load_capacitance),
        f"Vcm cm 0 dc {number(c.middle)} ac 0",
        "Einp inp cm d 0 0.5",
        "Einn inn cm d 0 -0.5",
        *_differential_source(s, needs),
    ]
    if netlist.controlled:
        assert c.output_common_mode is not None
        lines += [
            *comment("ideal common-mode control: the mean of the outputs is at the reference, at every frequency"),
            f"V{REFERENCE} {REFERENCE} 0 dc {number(c.output_common_mode)}",
            *netlist.controls(),
        ]
    if "current" in needs:
        plus, minus = (*s.ends, "0")[:2]
        lines += [*comment("a current into the output"), f"Iout {minus} {plus} dc 0 ac 0"]
    if "held" in needs:
        lines += _held(s)
    voltages = dict(zip(s.a.wiring.nodes, map(float, s.a.point.v[:, 0]), strict=True))
    twins = {twin: node for d in s.transistors for twin, node in s.devices.twins(d).items()}
    return [
        *lines,
        f".options {TOLERANCES} {s.devices.options(c.temperature - ZERO_CELSIUS)}",
        *netlist.nodesets(voltages, twins, "held" in needs),
    ]


def _held(s: Site) -> list[str]:
    """Return the same stage once more, with what is held where it is at rest."""
    c, names = s.a.circuit.conditions, {"vdd": f"{HELD}_vdd", "vss": "0"}
    ports = [names.get(port, f"{HELD}_{port}") for port in s.netlist.ports]
    rest = dict(zip(map(s.netlist.outside, s.a.topology.unknown), s.a.point.v[:, 0], strict=False))
    return [
        *comment("the same stage once more, its drains and outputs held where they are at rest"),
        f"X{HELD} {' '.join(ports)} {STAGE}",
        f"V{HELD}_vdd {HELD}_vdd 0 dc {number(c.supply)}",
        f"V{HELD}_d {HELD}_d 0 dc 0 ac 0",
        f"E{HELD}_inp {HELD}_inp cm {HELD}_d 0 0.5",
        f"E{HELD}_inn {HELD}_inn cm {HELD}_d 0 -0.5",
        *(f"V{held.replace('.', '_')} {held} 0 dc {rest[node]:.6f}" for node, held in s.held().items()),
    ]


def _differential_source(s: Site, needs: frozenset[str]) -> list[str]:
    """Return the source of the differential input, on a sine and on the offset where benches ask for them."""
    below, lines = "0", []
    if "null" in needs:
        below = "null"
        wanted = s.a.circuit.conditions.output_common_mode
        assert wanted is not None
        closed, way = "min(v(path),1)", f"v(rest)+({number(wanted)}-v(rest))*max(v(path)-1,0)"
        lines += [
            *comment("a loop that closes while v(path) goes from 0 to 1, then brings the output to where it is wanted"),
            "Vpath path 0 dc 0",
            "Vrest rest 0 dc 0",
            f"Bnull 0 null i={number(LOOP)}*({closed}*({way}-({s.output}))-(1-{closed})*v(null))",
        ]
    if "curve" in needs:
        lines += [
            *comment("a sine, point by point"),
            "Vstep step 0 dc 0",
            "Vamplitude amplitude 0 dc 0",
            f"Bsine sine {below} v=v(amplitude)*cos(v(step)*{np.pi / CURVE:.17g})",
        ]
        below = "sine"
    return [*lines, f"Vd d {below} dc 0 ac 1"]


def _control(s: Site, benches: Sequence[tuple[Measure, Bench]], predicted: Mapping[str, float]) -> list[str]:
    stages = (STAGE, HELD) if any("held" in bench.needs for _, bench in benches) else (STAGE,)
    saved = sorted({vector for d in s.transistors for stage in stages for vector in s.devices.saved(d, stage)})
    lines = [".control", ONE_THREAD, "save all"]
    lines += [f"save {' '.join(saved[i : i + 4])}" for i in range(0, len(saved), 4)]
    for m, bench in benches:
        answer = bench.commands(s, **m.taken_at)
        lines += ["", *comment(f"{label(m)}: predicted {write(predicted[m.name], m.unit)}. {bench.how}")]
        lines += ["setplot new", *answer.lines, f'echo "{m.name} = {answer.figure}{" " * bool(m.unit)}{m.unit}"']
    return [*lines, "quit", ".endc"]
