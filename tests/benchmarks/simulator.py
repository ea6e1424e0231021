"""The circuit simulator at its fastest: one process, one circuit, its parameters altered in place.

One stage with level-1 transistors is read once. For each design its sizes are altered (widths, lengths, junctions,
lambda with the length, resistors and what they load, bias) and four analyses run, which is what the measures need:

- a sweep of the common mode over three points: the operating points at both ends and in the middle of its range;
- the frequency response to a differential input, from a frequency that is as good as DC, `PER_DECADE` points a decade:
  gain, bandwidth and unity-gain frequency;
- one point of the frequency response to a common-mode input: common-mode gain and rejection;
- a sweep of the differential input, `SWEEP` points on each side of rest, or on one side where both sides of the stage
  are alike and the other output tells the rest: the output swing.

Everything is to the simulator's advantage. The frequencies span what the batch needs and no more, and the sweep of
each design ends where its swing does, as known beforehand; the first guess of the nodes suits most of the batch; just
the vectors that the measures need are kept, and nobody reads them. Its shared library is driven where there is one,
since the command loop of the program takes longer. Points and tolerance are the loosest of those tried with which 19
answers in 20 keep the bounds that the kernel is held to (`checked` tells): gains to 0.1 %, bandwidth and unity-gain
frequency to 1 %, swing to 5 mV. Times are of the processor, without start-up.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import json
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from optisize.process.law import Array
from optisize.process.square import SquareParameters
from optisize.stage.analysis import Analysis
from optisize.stage.measures import CATALOGUE
from tests.reference import spice

PER_DECADE = 4
SWEEP = 16
DC = "1e-3"  # Hz
OPTIONS = ".options reltol=1e-6 vntol=1e-8"
BEYOND = 1.25  # of the input that is estimated for the end of the swing, where the sweep ends
HERE = Path(__file__).resolve().parents[2]


class Script:
    """The deck of one stage and the commands that take it from design to design."""

    def __init__(self, a: Analysis, per_decade: int = PER_DECADE, sweep: int = SWEEP) -> None:
        """Take designs that the kernel has solved: what is known of them spares the simulator a search."""
        self.a = a
        self.top, circuit = a.topology, a.circuit
        self.parts = [spice.transistors(circuit, k) for k in range(circuit.designs)]
        self.low, self.high = circuit.conditions.common_mode
        bandwidth = a.gain_crossing(np.ones(circuit.designs))
        unity = a.gain_crossing(a.adm**2 - 1.0)
        ends = np.concatenate([bandwidth, unity])
        decades = np.log10(np.nanmin(ends) / 30.0), np.log10(np.nanmax(ends) * 1.2)
        self.frequencies = f"{10.0 ** decades[0]:.6g} {10.0 ** decades[1]:.6g}"
        self.per_decade, self.sweep = per_decade, sweep
        self.amplitudes = _swing_inputs(a) * BEYOND

    @property
    def deck(self) -> list[str]:
        """The elements of the first design; its inputs are driven from a common and a differential source."""
        start = np.median(self.a.point.v, axis=1)
        guesses = [f"v({spice.node(n, 0)})={start[i]:.3f}" for i, n in enumerate(self.top.unknown)]
        saturating = [t for t in self.top.transistors if t.saturates]
        kept = [f"v({spice.node(n, 0)})" for n in self.top.unknown] + ["i(v_supply_0)"]
        kept += [f"@m_{spice.part(t.name, 0)}[vdsat]" for t in saturating]
        kept += [f"@m_{spice.part(t.name, 0)}[id]" for t in saturating if t.group == "input"]
        return [
            "* one stage, altered in place",
            *spice.stage(self.a.circuit, 0, spice.level1),
            f"v_cm cm 0 {spice.number(self.a.circuit.conditions.middle)} ac 0",
            "v_d d 0 0 ac 1",
            "e_inp inp_0 cm d 0 0.5",
            "e_inn inn_0 cm d 0 -0.5",
            f".nodeset {' '.join(guesses)}",
            f".save {' '.join(kept)}",
            OPTIONS,
        ]

    def alterations(self, k: int) -> list[str]:
        """Return the commands that put in the sizes of design `k`; what stands between two fixed nodes is left out."""
        circuit, commands = self.a.circuit, []
        for t, first in zip(self.parts[k], self.parts[0], strict=True):
            values = {"w": t.width, "l": t.length, "ad": t.drain_area, "pd": t.drain_edge}
            if t.source not in ("0", spice.node("supply", k)):
                values |= {"as": t.source_area, "ps": t.source_edge}
            commands += [f"alter @m_{first.name}[{key}]={value:.9g}" for key, value in values.items()]
            card = circuit.process.nmos if t.channel == "n" else circuit.process.pmos
            assert isinstance(card, SquareParameters)
            commands.append(f"altermod model_{first.name} lambda={card.channel_modulation / t.length:.9g}")
        for r in self.top.resistors:
            value = circuit.sizes[r.size][k]
            commands.append(f"alter r_{spice.part(r.name, 0)}={value:.9g}")
            resistor = circuit.process.resistor
            half = 0.5 * resistor.capacitance * value / resistor.sheet_resistance * resistor.width**2
            ends = [i for i, end in enumerate((r.a, r.b)) if end in self.top.unknown]
            commands += [f"alter c_{spice.part(r.name, 0)}_{i}={half:.9g}" for i in ends]
        for s in self.top.sources:
            commands.append(f"alter i_{spice.part(s.name, 0)}={circuit.sizes[s.size][k]:.9g}")
        return commands

    def analyses(self, k: int) -> dict[str, list[str]]:
        """Return the commands of each analysis of design `k`."""
        step, last = self.amplitudes[k] / self.sweep, self.amplitudes[k] * (1.0 + 1e-6)
        return {
            "range": [f"dc v_cm {self.low!r} {self.high + 1e-9!r} {0.5 * (self.high - self.low)!r}"],
            "response": [f"ac dec {self.per_decade} {self.frequencies}"],
            "common": [
                "alter @v_d[acmag]=0",
                "alter @v_cm[acmag]=1",
                f"ac lin 1 {DC} {DC}",
                "alter @v_d[acmag]=1",
                "alter @v_cm[acmag]=0",
            ],
            "swing": [f"dc v_d {0.0 if self.top.symmetric else -last:.9g} {last:.9g} {step:.9g}"],
        }

    def commands(self, count: int, keep: bool = False) -> list[str]:
        """Return the commands for the first `count` designs; results are written only where they are to be kept."""
        result = []
        for k in range(count):
            result += self.alterations(k)
            for name, commands in self.analyses(k).items():
                result += [*commands, f"write {name}_{k}.raw all"] if keep else commands
            result.append("destroy all")
        return result


def _swing_inputs(a: Analysis) -> Array:
    """Estimate the differential input at the farther end of the output's excursion, (N,).

    A square-law pair: the output follows x sqrt(1 - x^2 / 4) of the input x in overdrives, up to full steering at
    sqrt(2) (Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3).
    """
    overdrive = a.saturation.vdsat[a.wiring.rows["input.p"]]
    steered = np.minimum(np.max(a.output_excursions, axis=0) / np.abs(a.adm) / overdrive, 1.0)
    return overdrive * np.sqrt(2.0 - 2.0 * np.sqrt(1.0 - steered**2))


def by_program(ngspice: str, script: Script, count: int, repeats: int = 3) -> float:
    """Return the processor seconds a design in the program's batch mode: the difference of two lengths of one deck."""
    few = max(count // 4, 1)
    with tempfile.TemporaryDirectory() as folder:

        def spent(designs: int) -> float:
            control = [".control", *script.commands(designs), "quit", ".endc", ".end"]
            (Path(folder) / "deck.sp").write_text("\n".join([*script.deck, *control]) + "\n", encoding="ascii")
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            command = [ngspice, "-b", "-n", "deck.sp"]
            subprocess.run(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False)
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime

        differences = [spent(count) - spent(few) for _ in range(repeats)]
    return min(differences) / (count - few)


def by_library(script: Script, count: int, repeats: int = 3) -> float | None:
    """Return the processor seconds a design through the shared library, in a process of its own; None without it."""
    if ctypes.util.find_library("ngspice") is None:
        return None
    job = {"deck": [*script.deck, ".end"], "commands": script.commands(count), "repeats": repeats}
    command = [sys.executable, "-m", "tests.benchmarks.simulator"]
    done = subprocess.run(command, cwd=HERE, input=json.dumps(job), capture_output=True, text=True, check=True)
    return float(json.loads(done.stdout.splitlines()[-1])) / count


def fastest(ngspice: str, script: Script, count: int, repeats: int = 3) -> tuple[float, str]:
    """Return the processor seconds a design of the fastest way that this machine has, and what way that is."""
    library = by_library(script, count, repeats)
    if library is not None:
        return library, "shared library"
    return by_program(ngspice, script, count, repeats), "program in batch mode"


def _drive_library() -> None:
    """Run one job from the standard input in this process: read the deck, time the commands, print the least time."""
    job = json.load(sys.stdin)
    library = ctypes.CDLL(ctypes.util.find_library("ngspice"))
    said = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_char_p, ctypes.c_int, ctypes.c_void_p)
    ended = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_int, ctypes.c_bool, ctypes.c_bool, ctypes.c_int, ctypes.c_void_p)
    leave = ended(lambda *_: 0)
    heard: list[bytes] = []

    def listen(text: bytes, *_: object) -> int:
        heard.append(text)
        return 0

    hear = said(listen)
    library.ngSpice_Init(hear, None, leave, None, None, None, None)
    lines = [line.encode() for text in job["deck"] for line in text.split("\n")]
    if library.ngSpice_Circ((ctypes.c_char_p * (len(lines) + 1))(*lines, None)):
        raise RuntimeError(b"\n".join(heard[-20:]).decode())
    library.ngSpice_Init(None, None, leave, None, None, None, None)  # from here on without a call a line of output
    commands = [command.encode() for command in job["commands"]]
    command, nothing = library.ngSpice_Command, ctypes.CDLL(None).strlen  # the second: what the loop itself takes
    command.argtypes = nothing.argtypes = [ctypes.c_char_p]

    def spent(call: object) -> float:
        begin = time.process_time()
        for text in commands:
            call(text)  # type: ignore[operator]
        return time.process_time() - begin

    spent(command)  # the first time fills the memory pools
    print(json.dumps(min(spent(command) for _ in range(job["repeats"])) - min(spent(nothing) for _ in range(3))))


def checked(ngspice: str, script: Script, count: int) -> dict[str, float]:
    """Return within what relative deviation from the kernel the simulator's answers are for 19 designs in 20.

    The commands are those that are timed, with their results written; headroom and swing are in volts. Of some hundred
    designs there is one at which the simulator takes a false operating point at this tolerance.
    """
    a = script.a
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        control = ["set filetype=binary", *script.commands(count, keep=True), "quit"]
        text = "\n".join([*script.deck, ".control", *control, ".endc", ".end"])
        (folder / "deck.sp").write_text(text + "\n", encoding="ascii")
        subprocess.run([ngspice, "-b", "-n", "deck.sp"], cwd=folder, capture_output=True, check=False)
        answers = [_answers(script, folder, k) for k in range(count)]
    down, up = a.output_excursions
    own = {
        "supply_current": CATALOGUE["supply_current"].function(a),
        "adm": np.abs(a.adm),
        "acm": np.abs(a.acm),
        "bandwidth": a.gain_crossing(np.ones(a.circuit.designs)),
        "unity_gain_frequency": a.gain_crossing(a.adm**2 - 1.0),
        "headroom": a.room,
        "output_swing": 2.0 * np.minimum(down, up),
    }
    deviations = {}
    for key, expected in own.items():
        found = np.array([answer[key] for answer in answers])
        scale = 1.0 if key in ("headroom", "output_swing") else np.abs(expected[:count])
        missed = np.abs(found - expected[:count]) / scale
        missed = np.where(np.isnan(missed), np.inf, missed)[np.isfinite(expected[:count])]
        deviations[key] = float(np.quantile(missed, 0.95, method="lower"))
    return deviations


def _answers(script: Script, folder: Path, k: int) -> dict[str, float]:
    plots = {name: spice.read_raw(folder / f"{name}_{k}.raw") for name in script.analyses(k)}
    top = script.top

    def output(plot: str, *, mirrored: bool = False) -> Array:
        other = {"left": "right", "right": "left"} if mirrored else {}
        sides = [sign * plots[plot][f"v({spice.node(other.get(node, node), 0)})"] for node, sign in top.output]
        return np.sum(sides, axis=0)

    def room(plot: str) -> Array:
        rows = []
        for t in (t for t in top.transistors if t.saturates):
            sign = 1.0 if top.channel(t) == "n" else -1.0
            ends = [_node(script, plots[plot], n) for n in (t.drain, t.source)]
            rows.append(sign * (ends[0] - ends[1]) - np.abs(plots[plot][f"@m_{spice.part(t.name, 0)}[vdsat]"]))
        return np.array(rows)

    response = np.abs(output("response"))
    sides = [plots["common"][f"v({spice.node(node, 0)})"][0] for node, _ in top.output]
    pair = [spice.part(t.name, 0) for t in top.transistors if t.group == "input"]
    current = np.abs(np.array([plots["swing"][f"@m_{name}[id]"] for name in pair]))
    margin = np.concatenate([room("swing"), np.sqrt(current / current.sum(axis=0)) - 0.1])
    if top.symmetric:
        ends = [_end(margin, output("swing"), 0, 1), _end(margin, output("swing", mirrored=True), 0, 1)]
    else:
        rest = output("swing").size // 2
        ends = [_end(margin, output("swing"), rest, side) for side in (-1, 1)]
    frequency = plots["response"]["frequency"].real
    return {
        "supply_current": float(-plots["range"]["i(v_supply_0)"][1]),
        "adm": float(response[0]),
        "acm": float(np.abs(np.mean(sides))),
        "bandwidth": _crossing(frequency, response, 1.0),
        "unity_gain_frequency": _crossing(frequency, response, response[0] ** 2 - 1.0),
        "headroom": float(room("range")[:, [0, 2]].min()),
        "output_swing": 2.0 * min(ends),
    }


def _node(script: Script, plot: spice.Plot, name: str) -> Array | float:
    fixed = {"ground": 0.0, "supply": script.a.circuit.conditions.supply}
    return fixed[name] if name in fixed else plot[f"v({spice.node(name, 0)})"]


def _crossing(frequency: Array, magnitude: Array, level: float) -> float:
    """Return where |H(0)/H|^2 - 1 rises through a level, straight between points on logarithmic axes."""
    if level <= 0.0:
        return float("nan")
    fall = np.log(np.maximum((magnitude[0] / magnitude) ** 2 - 1.0, 1e-12)) - np.log(level)
    above = np.flatnonzero(fall > 0.0)
    if not len(above):
        return float("nan")
    i = above[0]
    part = fall[i - 1] / (fall[i - 1] - fall[i])
    return float(frequency[i - 1] * (frequency[i] / frequency[i - 1]) ** part)


def _end(margins: Sequence[Array] | Array, output: Array, rest: int, side: int) -> float:
    """Return how far the output is from rest where the first margin vanishes, walking from rest to one side."""
    walk = slice(rest, None) if side > 0 else slice(rest, None, -1)
    smallest, y = np.min(margins, axis=0)[walk], output[walk]
    beyond = np.flatnonzero(smallest < 0.0)
    if not len(beyond) or beyond[0] == 0:
        return float("nan")
    i = beyond[0]
    part = smallest[i - 1] / (smallest[i - 1] - smallest[i])
    return float(abs(y[i - 1] + part * (y[i] - y[i - 1]) - y[0]))


if __name__ == "__main__":
    _drive_library()
