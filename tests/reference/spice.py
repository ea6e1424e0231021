"""A writer of SPICE decks and a runner, for the checks against a circuit simulator; nothing of it is in the package.

Written from the SPICE manuals, not from the package's equations: it takes process values, sizes and the terminals of
the elements. Many sized stages stand side by side in one deck, each with sources of its own, so that one process of
the simulator solves them all. Names: node ``tail`` of stage 3 is ``tail_3``, transistor ``input.p`` is ``m_input_p_3``.

What was found by trying (version 39), and what follows for a bench:

- One ``ac lin 1 1e-9 1e-9`` is as good as DC and serves every stage at once; 1 mHz is not, since telescopic stages have
  poles near 1 Hz. ``ac lin 2`` makes one point, ``ac lin 3`` three. Hundreds of points take hardly longer than one, as
  the operating point takes the time, unless figures of transistors are saved at each. ``alter @v_supply_3[acmag]=1``
  also works on a source without an AC value. An output resistance is the voltage under an AC current into the output,
  not ``tf``: that takes one command a stage and crashes on a large deck. An input capacitance is the imaginary part of
  the current of the input's source over 2 pi f and its voltage, at 1 nHz as well.
- An ideal control as a source with a gain of 1e4 and more mostly does not converge, and a loop of voltage sources
  (no gain at all) is singular as long as no transistor conducts. A current into a node that nothing loads is exact and
  converges, see `control` and `nulled_input`.
- At reltol 1e-7 a voltage near 2 V is known to 0.2 uV only. Distortion needs ``option reltol=1e-10 vntol=1e-12``
  before its analysis, which costs nothing. Its static curve is ``dc v_theta 0 16 1`` with a source
  ``b_d_3 d_3 0 v=amplitude*cos(pi/16*v(theta))`` a stage, and a cosine transform (type 1); one operating point of
  sixteen copies of every stage takes thirty times as long.
- ``noise``: densities are V/sqrt(Hz) (V^2/Hz after ``set sqrnoise``), totals are V (V^2). A single frequency makes one
  plot; more make two, of which the last, current one holds the totals, so that ``setplot previous`` comes before
  ``write``. The totals are exact for power laws between the points. The output may be ``v(a,b)``. The source has to
  have an AC value, which may be zero; its magnitude does not matter, nor do other sources. Every command repeats the
  operating point of the whole deck, 45 ms for forty stages; see `output_chain` for all of them at once.
- A ``dc`` sweep begins each point on the straight line through the two before it, as if its steps were equal. A step
  of less than half the one before begins beyond its point; there a transistor may be turned round, Newton runs in
  circles, and the steps down of gmin that follow cost a thousand times as much and now and then end at a solution that
  is none. See `path` and `sweeps.to_end`.
- Time grows with the square of the stages in a deck, each model being looked up among all: forty are a good number.
"""

from __future__ import annotations

import subprocess
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from optisize.process.card import Process
from optisize.process.law import Array
from optisize.process.parameters import TransistorParameters
from optisize.stage.circuit import Circuit
from optisize.stage.elements import REFERENCE, Control

OXIDE_PERMITTIVITY = 3.9 * 8.854214871e-12  # F/m, the constant with which the level-1 model reads TOX
OPTIONS = ".options reltol=1e-7 abstol=1e-16 vntol=1e-10 gmin=1e-16 temp=27 tnom=27 itl1=500"
LOOP = 1e-6  # A/V, of ideal loops; a thousand times more and they often do not converge
NODES = {"in+": "inp", "in-": "inn", "supply": "vdd", "ground": "gnd"}


@dataclass(frozen=True)
class Transistor:
    """One transistor of a deck: its name, its nodes, its channel and its drawn shape (SI)."""

    name: str
    drain: str
    gate: str
    source: str
    bulk: str
    channel: str
    width: float
    length: float
    drain_area: float
    source_area: float
    drain_edge: float
    source_edge: float


Device = Callable[[Transistor, Process], list[str]]


def number(value: float) -> str:
    """Return a number with every digit of it."""
    return f"{value:.17g}"


def node(name: str, k: int, *, own_ground: bool = False) -> str:
    """Return the name in the deck of a node of stage `k`; the ground is that of the deck or one of the stage's own."""
    return "0" if name == "ground" and not own_ground else f"{NODES.get(name, name)}_{k}"


def part(name: str, k: int) -> str:
    """Return the name in the deck of an element of stage `k`."""
    return f"{name.replace('.', '_')}_{k}"


def level1(t: Transistor, process: Process, leak: float = 1e-30) -> list[str]:
    """Return a level-1 transistor with a model of its own, since lambda follows its length; junctions hardly leak.

    Its white noise current is 4 k T (2/3 gm) in both regions. Its flicker noise current is KF |Id|^AF / (f W L Cox^2):
    there is no NLEV, the exponent of f is always one, and gm is nowhere in it. With AF = 0 it does not depend on the
    operating point, and `output_noise` makes it that of a voltage K / (Cox W L f^Af) at the gate.
    """
    card: TransistorParameters = process.nmos if t.channel == "n" else process.pmos
    values = {
        "level": 1,
        "vto": card.threshold if t.channel == "n" else -card.threshold,
        "kp": card.current_factor,
        "gamma": card.body_effect,
        "phi": card.surface_potential,
        "lambda": card.channel_modulation / t.length,
        "tox": OXIDE_PERMITTIVITY / card.oxide_capacitance,
        "cgso": card.overlap_capacitance,
        "cgdo": card.overlap_capacitance,
        "cj": card.junction_capacitance,
        "cjsw": card.sidewall_capacitance,
        "mj": card.junction_grading,
        "mjsw": card.sidewall_grading,
        "kf": card.flicker_coefficient * card.oxide_capacitance,
        "af": 0.0,
        "pb": card.junction_potential,
        "is": leak,
    }
    model = " ".join(f"{key}={number(value)}" for key, value in values.items())
    shape = {"w": t.width, "l": t.length, "ad": t.drain_area, "as": t.source_area}
    shape |= {"pd": t.drain_edge, "ps": t.source_edge}
    drawn = " ".join(f"{key}={number(value)}" for key, value in shape.items())
    return [
        f"m_{t.name} {t.drain} {t.gate} {t.source} {t.bulk} model_{t.name} {drawn}",
        f".model model_{t.name} {t.channel}mos {model}",
    ]


def control(c: Control, k: int) -> list[str]:
    """Return an ideal control of stage `k`: the mean of what it senses is at the reference, at every frequency.

    Currents in proportion to the errors flow into a node where nothing else takes them, so the errors cancel; the
    controlled node follows it. It has to lower what is sensed when it rises, as the gate of a load does. While the
    simulator steps its gmin down, the gain rises from nothing, so it converges from rough `nodesets`.
    """
    name, share = part(c.name, k), number(LOOP / len(c.senses))
    return [
        *(
            f"g_control_{name}_{i} 0 control_{name} {node(sensed, k)} {node(c.reference, k)} {share}"
            for i, sensed in enumerate(c.senses)
        ),
        f"e_control_{name} {node(c.node, k)} 0 control_{name} 0 1",
    ]


def transistors(circuit: Circuit, k: int, *, own_ground: bool = False) -> list[Transistor]:
    """Return the transistors of stage `k`; the units of a mirror are one device as wide as all of them."""
    top, drawn = circuit.topology, circuit.drawn

    def at(name: str) -> str:
        return node(name, k, own_ground=own_ground)

    return [
        Transistor(
            name=part(t.name, k),
            drain=at(t.drain),
            gate=at(t.gate),
            source=at(t.source),
            bulk=at(top.bulk_node(t)),
            channel=top.channel(t),
            width=circuit.sizes[f"{t.group}.width"][k] * (circuit.sizes[t.units][k] if t.units else 1.0),
            length=circuit.sizes[f"{t.group}.length"][k],
            drain_area=drawn.drain_area[row, k],
            source_area=drawn.source_area[row, k],
            drain_edge=drawn.drain_edge[row, k],
            source_edge=drawn.source_edge[row, k],
        )
        for row, t in enumerate(top.transistors)
    ]


def stage(
    circuit: Circuit,
    k: int,
    device: Device,
    *,
    own_ground: bool = False,
    loaded: bool = True,
    deviations: Array | None = None,
) -> list[str]:
    """Return the elements of stage `k`, its supply and its load, without its inputs.

    With `own_ground` the ground of the stage is the node ``gnd_k``, held by the source ``v_ground_k``. What is not
    `loaded` has its load left out, for `held_drains`. The relative `deviations` of all resistors are (R,).
    """
    top, process, sizes = circuit.topology, circuit.process, circuit.sizes

    def at(name: str) -> str:
        return node(name, k, own_ground=own_ground)

    def there(name: str) -> bool:
        return loaded or not of_load(name)

    lines = [f"v_supply_{k} {at('supply')} 0 {number(circuit.conditions.supply)}"]
    if own_ground:
        lines.append(f"v_ground_{k} {at('ground')} 0 0")
    for t in transistors(circuit, k, own_ground=own_ground):
        lines += device(t, process) if there(t.name) else []
    off = np.zeros(len(top.resistors)) if deviations is None else deviations
    for row, r in enumerate(top.resistors):
        if not there(r.name):
            continue
        value = sizes[r.size][k]
        ends = at(r.a), at(r.b)
        lines.append(f"r_{part(r.name, k)} {ends[0]} {ends[1]} {number(value * (1.0 + off[row]))}")
        squares = value / process.resistor.sheet_resistance
        half = 0.5 * process.resistor.capacitance * squares * process.resistor.width**2
        lines += [f"c_{part(r.name, k)}_{i} {end} {at('ground')} {number(half)}" for i, end in enumerate(ends)]
    for s in (s for s in top.sources if there(s.name)):
        a, b = (s.a, s.b) if top.input == "nmos" else (s.b, s.a)
        lines.append(f"i_{part(s.name, k)} {at(a)} {at(b)} {number(sizes[s.size][k])}")
    for name, _ in top.output:
        load = number(circuit.conditions.load_capacitance)
        lines.append(f"c_load_{part(name, k)} {at(name)} {at('ground')} {load}")
    if top.controls and loaded:
        held = circuit.conditions.output_common_mode
        assert held is not None
        lines.append(f"v_reference_{k} {at(REFERENCE)} 0 {number(held)}")
    for c in top.controls if loaded else ():
        lines += control(c, k)
    return lines


def of_load(name: str) -> bool:
    """Tell whether an element belongs to the load, by its name in the stage or in the deck."""
    return name.startswith("load")


def path(name: str, values: Array) -> list[str]:
    """Return a source that takes a node through values, one after the other, while ``v_theta`` goes 1, 2, 3 and so on.

    Each stage goes its own way in one sweep: ``dc v_theta 5 9 1`` visits the fifth value to the ninth. Before the first
    the way is level: the simulator begins every sweep with the slope that the way has at zero.
    """
    steps = ["-1", "0.5", *map(str, range(1, len(values) + 1))]
    ways = [values[0], values[0], *values]
    points = ",".join(f"{step},{number(float(value))}" for step, value in zip(steps, ways, strict=True))
    return [f"b_{name} {name} 0 v=pwl(v(theta),{points})"]


def held_drains(circuit: Circuit, k: int, voltages: Array) -> list[str]:
    """Return sources at the drains of the pair of stage `k`, and of its cascodes, where the load would be.

    Args:
        circuit: the stages.
        k: which of them.
        voltages: of all unknown nodes, (U, N).
    """
    top = circuit.topology
    nodes = dict.fromkeys([*(t.drain for t in top.transistors if t.group == "input"), "left", "right"])
    return [f"v_held_{part(x, k)} {node(x, k)} 0 {number(voltages[top.unknown.index(x), k])}" for x in nodes]


def output_terminals(circuit: Circuit, k: int) -> tuple[str, str]:
    """Return the two nodes between which the output of stage `k` is."""
    nodes = {sign: node(name, k) for name, sign in circuit.topology.output}
    return nodes[1.0], nodes.get(-1.0, "0")


def nulled_input(circuit: Circuit, k: int, wanted: str = "0", *, common: bool = False) -> list[str]:
    """Return inputs of stage `k` that a loop sets, at DC only, so that its output is at the node `wanted`.

    The input that it takes is ``v(null_k)``, the offset. A current in proportion to the error flows into a capacitor:
    at DC the error is zero, and from far below 1 mHz on the loop is open and ``v_d_k`` drives the stage, or ``v_cm_k``
    in `common`. The output has to rise with the input.
    """
    plus, minus = output_terminals(circuit, k)
    return [
        f"v_cm_{k} cm_{k} 0 {number(circuit.conditions.middle)} ac {int(common)}",
        f"g_plus_{k} 0 null_{k} {wanted} {plus} {number(LOOP)}",
        f"g_minus_{k} 0 null_{k} {minus} 0 {number(LOOP)}",
        f"c_null_{k} null_{k} 0 1e12",
        f".nodeset v(null_{k})=0",
        f"v_d_{k} d_{k} null_{k} 0 ac {int(not common)}",
        f"e_inp_{k} inp_{k} cm_{k} d_{k} 0 0.5",
        f"e_inn_{k} inn_{k} cm_{k} d_{k} 0 -0.5",
    ]


SUMMED = 1e-3  # gain of the sum of all outputs: whole, its rounding would be above what counts as converged


def output_chain(circuit: Circuit) -> tuple[list[str], str]:
    """Return sources that add the outputs of all stages, and the node of the sum.

    With ``noise v(<sum>) <any source> <sweep> 1`` (the last number asks for the parts of every element) the simulator
    gives the noise of all stages at once: the noise of an element of a stage comes by the output of that stage only.
    """
    nodes = ["0", *(f"sum_{k}" for k in range(circuit.designs))]
    lines = []
    for k in range(circuit.designs):
        plus, minus = output_terminals(circuit, k)
        lines.append(f"e_sum_{k} {nodes[k + 1]} {nodes[k]} {plus} {minus} {SUMMED}")
    return lines, nodes[-1]


def output_noise(circuit: Circuit, plot: Plot, gm: Array) -> tuple[Array, Array]:
    """Return what white and what flicker noise give at the output of every stage, each (N, points) [V^2/Hz].

    Args:
        circuit: of level-1 transistors.
        plot: of such an analysis.
        gm: the simulator's transconductances, (T, N), which turn a noise voltage at a gate into a current.
    """
    top, frequency = circuit.topology, plot["frequency"].real
    white = np.zeros((circuit.designs, len(frequency)))
    flicker = np.zeros_like(white)
    for k in range(circuit.designs):
        for row, t in enumerate(top.transistors):
            card = circuit.process.nmos if top.channel(t) == "n" else circuit.process.pmos
            name = f"onoise_m_{part(t.name, k)}"
            white[k] += plot[f"{name}_id"] ** 2
            flicker[k] += (plot[f"{name}_1overf"] * gm[row, k]) ** 2 * frequency ** (1.0 - card.flicker_exponent)
        for r in top.resistors:
            white[k] += plot[f"onoise_r_{part(r.name, k)}_thermal"] ** 2
    return white / SUMMED**2, flicker / SUMMED**2


def nodesets(circuit: Circuit, k: int, voltages: Array, digits: int = 1) -> list[str]:
    """Return where the simulator shall begin: voltages of the unknown nodes to a tenth of a volt, or finer.

    With three digits it goes on to its own operating point at once. With one it has to step its gmin down, which takes
    ten times as long, and of forty telescopic stages one now and then does not converge, nor does any behavioural one
    with a cascode.
    """
    top = circuit.topology
    free = {c.node: f"control_{part(c.name, k)}" for c in top.controls}  # what a control holds follows this one
    return [
        f".nodeset v({free.get(name, node(name, k))})={voltages[i, k]:.{digits}f}" for i, name in enumerate(top.unknown)
    ]


@dataclass(frozen=True)
class Plot:
    """The vectors of one analysis by name, each with one value a point."""

    names: dict[str, int]
    data: np.ndarray

    def __getitem__(self, name: str) -> np.ndarray:
        return self.data[self.names[name.lower()]]

    def stack(self, names: Sequence[str]) -> np.ndarray:
        """Return vectors of the given names, (names, points)."""
        return np.array([self[name] for name in names])


def read_raw(path: Path) -> Plot:
    """Read a binary raw file of one plot."""
    raw = path.read_bytes()
    head, _, body = raw.partition(b"Binary:\n")
    lines = head.decode("ascii").splitlines()
    fields = dict(line.split(": ", 1) for line in lines if ": " in line)
    count, points = int(fields["No. Variables"]), int(fields["No. Points"])
    start = lines.index("Variables:") + 1
    names = {}
    for line in lines[start : start + count]:
        index, name = line.split()[:2]
        inner = name[2:-1]  # parameters of devices are written as i(@m1[id])
        names.setdefault((inner if inner.startswith("@") else name).lower(), int(index))
    kind = np.complex128 if "complex" in fields["Flags"] else np.float64
    return Plot(names, np.frombuffer(body, dtype=kind, count=count * points).reshape(points, count).T)


def simulate(
    ngspice: str, folder: Path, lines: Sequence[str], analyses: dict[str, Sequence[str]], saves: Sequence[str] = ()
) -> dict[str, Plot]:
    """Run one deck.

    Args:
        ngspice: path of the simulator.
        folder: where the files go.
        lines: the elements.
        analyses: commands of the simulator by name; the plot that the last of them makes is returned under the name.
        saves: parameters of devices, such as ``@m1[gm]``, to keep besides all voltages and source currents.
    """
    saved = [
        f".save {' '.join(chunk)}" for chunk in np.array_split(np.array(saves), len(saves) // 50 + 1) if len(chunk)
    ]
    control = ["set filetype=binary"]
    for name, commands in analyses.items():
        control += [*commands, f"write {name}.raw all"]
    deck = ["* stages side by side", *lines, OPTIONS, ".save all", *saved, ".control", *control, ".endc", ".end"]
    (folder / "deck.sp").write_text("\n".join(deck) + "\n", encoding="ascii")
    done = subprocess.run(
        [ngspice, "-b", "-n", "deck.sp"], cwd=folder, capture_output=True, text=True, timeout=60, check=False
    )
    missing = [name for name in analyses if not (folder / f"{name}.raw").exists()]
    if missing:
        raise AssertionError(f"no result of {missing}: {done.stdout[-1500:]} {done.stderr[-1500:]}")
    return {name: read_raw(folder / f"{name}.raw") for name in analyses}
