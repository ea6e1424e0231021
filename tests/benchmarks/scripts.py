"""Decks of one stage, altered in place from design to design, and the commands that the measures need.

`Script` has four analyses. Everything in it is to the simulator's advantage: the frequencies span what the batch needs
and no more, and the sweep of each design ends where its swing does, as known beforehand; the first guess of the nodes
suits most of the batch; transistors that are drawn alike share a model, so that its lambda is altered
once; just the vectors
that the measures need are kept. Points and tolerance are the loosest of those tried with which 19 answers in 20 keep
the bounds of `answers`.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from optisize.process.card import Process
from optisize.process.law import Array
from optisize.process.square import SquareParameters
from optisize.stage.analysis import Analysis
from optisize.stage.elements import Control, Transistor
from optisize.stage.measures import CATALOGUE
from tests.benchmarks.answers import BOUNDS, Bound, Plots, Reader
from tests.reference import spice

PER_DECADE = 4
SWEEP = 16
DC = "1e-3"  # Hz
OPTIONS = "reltol=1e-6 vntol=1e-8 gmin=1e-17"
CONTROL_GAIN = 100.0
BEYOND = 1.25  # of the input that is estimated for the end of the swing, where the sweep ends
SMALL = {"gain": Bound(0.01), "common_mode_gain": Bound(0.001, relative=True), "cmrr": Bound(0.01)}  # 0.1 %
FOUR_ANALYSES = (  # the measures that the analyses of `Script` give
    "gain",
    "common_mode_gain",
    "cmrr",
    "supply_current",
    "power",
    "headroom",
    "output_swing",
    "area",
    "bandwidth",
    "unity_gain_frequency",
    "slew_rate",
)


class Script:
    """Four analyses a design.

    - a sweep of the common mode over three points: the operating points at both ends and in the middle of its range,
      first where the pair conducts best, since the simulator takes an operating point of its own making where it starts
      with the pair off;
    - the frequency response to a differential input, from a frequency that is as good as DC, `PER_DECADE` points a
      decade: gain, bandwidth and unity-gain frequency;
    - one point of the frequency response to a common-mode input: common-mode gain and rejection;
    - a sweep of the differential input, `SWEEP` points on each side of rest, or on one side where both sides of the
      stage are alike and the other output tells the rest: the output swing.
    """

    bounds: Mapping[str, Bound] = {**BOUNDS, **SMALL}

    def __init__(self, a: Analysis) -> None:
        """Take designs that the kernel has solved: what is known of them spares the simulator a search."""
        self.a = a
        self.top = a.topology
        self.designs = a.circuit.designs
        self.parts = [spice.transistors(a.circuit, k) for k in range(self.designs)]
        alike: dict[tuple[str, str], Transistor] = {}
        self.leads = {t.name: alike.setdefault((t.group, t.units), t) for t in self.top.transistors}
        bandwidth = a.gain_crossing(np.ones(self.designs))
        unity = a.gain_crossing(a.adm**2 - 1.0)
        self.ends = np.concatenate([bandwidth, unity])
        cascoded = any("cascode" in t.group for t in self.top.transistors)
        self.fineness = (
            2 if cascoded else 1
        )  # of the points: where cascodes leave saturation nothing is straight for long
        self.amplitudes = _swing_inputs(a) * BEYOND

    @property
    def frequencies(self) -> str:
        """The span of the frequency response, the same for every design."""
        return f"{np.nanmin(self.ends) / 30.0:.6g} {np.nanmax(self.ends) * 1.2:.6g}"

    @property
    def deck(self) -> list[str]:
        """The elements of the first design; its inputs are driven from a common and a differential source."""
        start = np.median(self.a.point.v, axis=1)
        guesses = [f"v({spice.node(n, 0)})={start[i]:.3f}" for i, n in enumerate(self.top.unknown)]
        stage = spice.stage(self.a.circuit, 0, self._device())
        return [
            "* one stage, altered in place",
            *(line for line in stage if not line.startswith(("g_control_", "e_control_"))),
            *(line for c in self.top.controls for line in self._control(c)),
            f"v_cm cm 0 {spice.number(self.a.circuit.conditions.middle)} ac 0",
            "v_d d 0 0 ac 1",
            "e_inp inp_0 cm d 0 0.5",
            "e_inn inn_0 cm d 0 -0.5",
            f".nodeset {' '.join(guesses)}",
            f".save {' '.join(self.kept)}",
            f".options {OPTIONS}",
        ]

    @property
    def kept(self) -> list[str]:
        """The vectors that the answers are read from."""
        saturating = [t for t in self.top.transistors if t.saturates]
        kept = [f"v({spice.node(n, 0)})" for n in self.top.unknown] + ["i(v_supply_0)"]
        kept += [f"@m_{spice.part(t.name, 0)}[vdsat]" for t in saturating]
        return kept + [f"@m_{spice.part(t.name, 0)}[id]" for t in saturating if t.group == "input"]

    def _device(self) -> spice.Device:
        """Return a level-1 transistor that shares its model with those that are drawn alike."""
        lead = {spice.part(name, 0): spice.part(t.name, 0) for name, t in self.leads.items()}

        def grouped(t: spice.Transistor, process: Process) -> list[str]:
            element, model = spice.level1(t, process)
            element = element.replace(f"model_{t.name}", f"model_{lead[t.name]}")
            return [element, model] if lead[t.name] == t.name else [element]

        return grouped

    def _control(self, c: Control) -> list[str]:
        """Return a control of finite gain about the known voltage of its node, with which the simulator converges."""
        name, reference, share = spice.part(c.name, 0), spice.node(c.reference, 0), CONTROL_GAIN / len(c.senses)
        chain = [spice.node(c.node, 0), *(f"control_{name}_{i}" for i in range(len(c.senses)))]
        return [
            *(
                f"e_control_{name}_{i} {chain[i]} {chain[i + 1]} {spice.node(sensed, 0)} {reference} {share}"
                for i, sensed in enumerate(c.senses)
            ),
            f"v_control_{name} {chain[-1]} 0 {self.a.point.v[self.a.wiring.index[c.node], 0]:.9g}",
        ]

    def alterations(self, k: int) -> list[str]:
        """Return the commands that put in the sizes of design `k`; what stands between two fixed nodes is left out."""
        circuit, commands = self.a.circuit, []
        for t, first in zip(self.parts[k], self.parts[0], strict=True):
            values = {"w": t.width, "l": t.length, "ad": t.drain_area, "pd": t.drain_edge}
            if t.source not in ("0", spice.node("supply", k)):
                values |= {"as": t.source_area, "ps": t.source_edge}
            commands += [f"alter @m_{first.name}[{key}]={value:.9g}" for key, value in values.items()]
        for lead in dict.fromkeys(self.leads.values()):
            card = circuit.process.nmos if self.top.channel(lead) == "n" else circuit.process.pmos
            assert isinstance(card, SquareParameters)
            modulation = card.channel_modulation / circuit.sizes[f"{lead.group}.length"][k]
            commands.append(f"altermod model_{spice.part(lead.name, 0)} lambda={modulation:.9g}")
        for r in self.top.resistors:
            value = circuit.sizes[r.size][k]
            commands.append(f"alter r_{spice.part(r.name, 0)}={value:.9g}")
            resistor = circuit.process.resistor
            half = 0.5 * resistor.capacitance * value / resistor.sheet_resistance * resistor.width**2
            ends = [i for i, end in enumerate((r.a, r.b)) if end in self.top.unknown]
            commands += [f"alter c_{spice.part(r.name, 0)}_{i}={half:.9g}" for i in ends]
        for c in self.top.controls:
            known = self.a.point.v[self.a.wiring.index[c.node], k]
            commands.append(f"alter v_control_{spice.part(c.name, 0)}={known:.9g}")
        for s in self.top.sources:
            commands.append(f"alter i_{spice.part(s.name, 0)}={circuit.sizes[s.size][k]:.9g}")
        return commands

    def conducting_first(self, low: float, high: float, steps: int) -> str:
        """Return a sweep of the common mode that starts at the end at which the pair conducts best."""
        start, stop = (high, low) if self.top.input == "nmos" else (low, high)
        step = (stop - start) / steps
        return f"dc v_cm {start:.9g} {stop + 1e-6 * step:.9g} {step:.9g}"

    def swing(self, k: int) -> str:
        """Return the sweep of the differential input up to the end of the swing."""
        step, last = self.amplitudes[k] / (SWEEP * self.fineness), self.amplitudes[k] * (1.0 + 1e-6)
        return f"dc v_d {0.0 if self.top.symmetric else -last:.9g} {last:.9g} {step:.9g}"

    def analyses(self, k: int) -> dict[str, list[str]]:
        """Return the commands of each analysis of design `k`."""
        low, high = self.a.circuit.conditions.common_mode
        return {
            "range": [self.conducting_first(low, high, 2)],
            "response": [f"ac dec {PER_DECADE * self.fineness} {self.frequencies}"],
            "common": [*moved("v_d", "v_cm"), f"ac lin 1 {DC} {DC}", *moved("v_cm", "v_d")],
            "swing": [self.swing(k)],
        }

    def commands(self, count: int, keep: bool = False) -> list[str]:
        """Return the commands for the first `count` designs; results are written only where they are to be kept."""
        result = []
        for k in range(count):
            result += self.alterations(k)
            for name, commands in self.analyses(k).items():
                result += commands
                if keep:
                    result += self.write(name, k)
            result.append("destroy all")
        return result

    def write(self, name: str, k: int) -> list[str]:
        """Return the commands that keep the results of an analysis."""
        return [f"write {name}_{k}.raw all"]

    def own(self) -> dict[str, Array]:
        """Return what the kernel says of the measures that the answers hold, each (N,)."""
        names = [name for name in FOUR_ANALYSES if name not in ("area", "slew_rate")]
        return {name: CATALOGUE[name].of(self.a) for name in names}

    def answers(self, plots: Plots, k: int) -> dict[str, float]:
        """Return the measures of design `k` as the simulator has them."""
        read = Reader(self.a, plots)
        adm = float(np.abs(read.output("response")[0]))
        acm = float(read.mean("common")[0].real)
        current = -plots["range"]["i(v_supply_0)"][1]
        return {
            "gain": decibels(adm),
            "common_mode_gain": acm,
            "cmrr": decibels(adm) - decibels(acm),
            "supply_current": current,
            "power": current * self.a.circuit.conditions.supply,
            "headroom": float(read.room("range")[:, [0, 2]].min()),
            "bandwidth": read.crossing("response", 1.0),
            "unity_gain_frequency": read.crossing("response", adm**2 - 1.0),
            "output_swing": read.swing(),
        }


def moved(source: str, to: str) -> list[str]:
    """Return the commands that move the small-signal drive of one volt from one source to another."""
    return [f"alter @{source}[acmag]=0", f"alter @{to}[acmag]=1"]


def decibels(ratio: complex) -> float:
    """Return 20 log10 of a magnitude."""
    return float(20.0 * np.log10(max(abs(ratio), 1e-300)))


def _swing_inputs(a: Analysis) -> Array:
    """Estimate the differential input at the farther end of the output's excursion, (N,).

    A square-law pair: the output follows x sqrt(1 - x^2 / 4) of the input x in overdrives, up to full steering at
    sqrt(2) (Gray, Hurst, Lewis and Meyer, Analysis and Design of Analog Integrated Circuits, ch. 3).
    """
    overdrive = a.saturation.vdsat[a.wiring.rows["input.p"]]
    steered = np.minimum(np.max(a.output_excursions, axis=0) / np.abs(a.adm) / overdrive, 1.0)
    return overdrive * np.sqrt(2.0 - 2.0 * np.sqrt(1.0 - steered**2))
